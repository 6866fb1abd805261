"""Sound files for tests, and reading back what stands in them."""

import os

import numpy as np
import soundfile

from liveres.engine.moves import Move
from liveres.engine.settings import Notch, Preset, Resonator

RATE_HZ = 48_000
STRAIGHT = Preset()
HALL = Preset(
    [
        Notch("hum", 50.0, -20.0, q=10.0),
        Notch("ring", 1000.0, -np.inf, bandwidth_oct=0.1),
        Resonator("bell", 440.0, -6.0, decay_s=2.0),
    ]
)
MOVES = (
    Move(777, "bell", "centre_hz", 500.0, 0.05),
    Move(5001, "hum", "depth_db", -3.0, 0.0),
    Move(9999, "ring", "enabled", False),
)


def noise(frames=12_000, channels=2, level=0.1, seed=0):
    """Even noise, (frames, channels) float64, the same for the same seed."""
    return np.random.default_rng(seed).uniform(-level, level, (frames, channels))


def write(path, sound, subtype="PCM_16", container=None, rate_hz=RATE_HZ):
    """Write a sound file and return its path."""
    soundfile.write(path, sound, rate_hz, subtype=subtype, format=container)
    return path


def raw(path, subtype):
    """The samples as they stand in the file: integers left-justified, or the floats themselves."""
    return soundfile.read(path, dtype={"FLOAT": "float32", "DOUBLE": "float64"}.get(subtype, "int32"), always_2d=True)[0]


def left_behind(folder, *known):
    """Names in a folder besides those known."""
    return sorted(set(os.listdir(folder)) - set(known))
