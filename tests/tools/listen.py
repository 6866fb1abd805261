"""Keep the sound of a failing test, so that it can be listened to.

    with kept_on_failure(y, 48000, tmp_path):
        assert splatter_db(y, 48000) < -80
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import soundfile


@contextmanager
def kept_on_failure(y: np.ndarray, rate_hz: int, folder: Path, name: str = "heard") -> Iterator[None]:
    """Write ``y`` as ``name``.wav, 32-bit float, when the block fails, and say where in the failure.

    Into ``folder``, or the folder named by LIVERES_KEEP_WAV, which outlives the run.
    """
    try:
        yield
    except AssertionError as failure:
        path = Path(os.environ.get("LIVERES_KEEP_WAV") or folder) / f"{name}.wav"
        path.parent.mkdir(parents=True, exist_ok=True)
        soundfile.write(path, y, rate_hz, subtype="FLOAT")
        failure.add_note(f"sound kept in {path}")
        raise
