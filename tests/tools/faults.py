"""The fault maker: plants known faults at known places, so that the meters can be shown to find them.

Every function returns a new array and leaves the one it got alone. ``x`` is (frames,) or (frames, channels), float.
Frames are those of ``x``; a place outside it is refused, for a fault that was never planted proves nothing.
"""

from __future__ import annotations

import numpy as np


def click(x: np.ndarray, frame: int, height: float, channel: int | None = None) -> np.ndarray:
    """Add ``height`` to one frame: a single bad sample, in one channel or in all."""
    y, place = _copy(x, frame, 1), frame if channel is None else (frame, channel)
    y[place] += height
    return y


def dc_step(x: np.ndarray, frame: int, height: float) -> np.ndarray:
    """Add ``height`` from a frame to the end."""
    y = _copy(x, frame, 1)
    y[frame:] += height
    return y


def drop(x: np.ndarray, frame: int, count: int) -> np.ndarray:
    """Leave out ``count`` frames from ``frame`` on: what follows moves up."""
    return np.delete(_copy(x, frame, count), np.s_[frame : frame + count], axis=0)


def repeat(x: np.ndarray, frame: int, count: int) -> np.ndarray:
    """Play the ``count`` frames before ``frame`` once more: what follows moves back."""
    y = _copy(x, frame - count, count)
    return np.concatenate([y[:frame], y[frame - count : frame], y[frame:]])


def insert_silence(x: np.ndarray, frame: int, count: int) -> np.ndarray:
    """Put ``count`` frames of zeros before ``frame``: what follows moves back."""
    y = _copy(x, frame, 1)
    return np.concatenate([y[:frame], np.zeros_like(y, shape=(count, *y.shape[1:])), y[frame:]])


def blank(x: np.ndarray, frame: int, count: int) -> np.ndarray:
    """Zero ``count`` frames in place: what follows stays where it is."""
    y = _copy(x, frame, count)
    y[frame : frame + count] = 0.0
    return y


def not_a_number(x: np.ndarray, frame: int, channel: int | None = None) -> np.ndarray:
    """Make one frame NaN, in one channel or in all."""
    return click(x, frame, np.nan, channel)


def add_tone(x: np.ndarray, rate_hz: float, frequency_hz: float, level_db: float, phase_rad: float = 0.0) -> np.ndarray:
    """Add a cosine to every channel: full scale is 0 dBFS, the phase is that at frame 0."""
    n = np.arange(len(x))
    wave = 10.0 ** (level_db / 20.0) * np.cos(2.0 * np.pi * frequency_hz / rate_hz * n + phase_rad)
    return x + (wave if x.ndim == 1 else wave[:, None]).astype(x.dtype)


def _copy(x: np.ndarray, frame: int, count: int) -> np.ndarray:
    if frame < 0 or count < 1 or frame + count > len(x):
        raise ValueError(
            f"fault must lie inside the {len(x)} frames of the sound, got {count} frames from {frame}: move it or shorten it"
        )
    return np.array(x)
