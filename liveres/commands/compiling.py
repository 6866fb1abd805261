"""A word to whoever waits while the kernels compile, which happens once on a machine."""

from __future__ import annotations

import sys


def announce_compiling(live: bool = False) -> None:
    """Say on standard error that compiling takes a while, if it is about to; live sound needs a function more."""
    from liveres.kernels._jit import cache_is_cold

    if cache_is_cold("callback.audio_callback" if live else "block.advance"):
        print("liveres: compiling the engine, once; this can take half a minute, the next start is quick", file=sys.stderr)
