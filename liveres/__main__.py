"""``python -m liveres`` is the liveres command."""

import sys

from liveres.cli import main

if __name__ == "__main__":
    sys.exit(main())
