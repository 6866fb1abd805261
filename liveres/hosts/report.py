"""What tells one render from another: the versions, settings and files that went into it.

Thread: control.
"""

from __future__ import annotations

import hashlib
import platform
from pathlib import Path

import numba
import numpy as np
import soundfile

import liveres
from liveres.engine.settings import Preset


def versions() -> dict[str, str]:
    """Versions of everything that takes part in the samples."""
    return {
        "liveres": liveres.__version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "numba": numba.__version__,
        "soundfile": soundfile.__version__,
        "libsndfile": soundfile.__libsndfile_version__,
    }


def file_sha256(path: str | Path) -> str:
    """SHA-256 of a file's bytes, hexadecimal."""
    with open(path, "rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def settings_sha256(preset: Preset) -> str:
    """SHA-256 over every setting of a preset, the same whether it came from a file or was made in Python."""
    return hashlib.sha256(repr(preset).encode()).hexdigest()
