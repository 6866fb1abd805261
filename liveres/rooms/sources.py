"""What stands before the microphone of a rehearsal. Each gives its sound in order, a part at a time. Thread: control."""

from __future__ import annotations

import numpy as np

from liveres.units import hz_from_note

_TUNE = "D3 A3 D4 F#4 A4 E4 C#4 A3 B2 F#3 B3 D4 F#4 A4 D4 G3 D4 G4 B4 A4 F#4 E4 D4 A3".split()
# our own; two octaves of a guitar or harp
_NOTE_S, _RING_S, _PARTIALS = 0.3, 1.2, 8
MUSIC_PEAK = 10.0 ** (-18.0 / 20.0)


class Looped:
    """A sound over and over.

    sound : (frames,) float64, at least one frame
    """

    def __init__(self, sound: np.ndarray):
        self._sound = np.asarray(sound, np.float64)
        self._frame = 0

    def part(self, frames: int) -> np.ndarray:
        """The next frames, (frames,) float64."""
        at = np.arange(self._frame, self._frame + frames) % len(self._sound)
        self._frame += frames
        return self._sound[at]


class Noise:
    """White Gaussian noise, the same for the same seed as long as it is asked for in the same parts.

    rms : float [full scale]
    seed : what ``numpy.random.default_rng`` takes
    """

    def __init__(self, rms: float, seed: object):
        self._rms = rms
        self._random = np.random.default_rng(seed)

    def part(self, frames: int) -> np.ndarray:
        """The next frames, (frames,) float64."""
        return self._rms * self._random.standard_normal(frames)


def plucked_tune(rate_hz: float) -> np.ndarray:
    """Some seven seconds of plucked notes, (frames,) float64, peak -18 dBFS, made to be looped."""
    sound = np.zeros(round(_NOTE_S * len(_TUNE) * rate_hz))
    t = np.arange(round(2 * _RING_S * rate_hz)) / rate_hz
    fades_in = np.minimum(t / 0.004, 1.0) * np.minimum((t[-1] - t) / 0.1, 1.0)
    for place, note in enumerate(_TUNE):
        pitch_hz = hz_from_note(note)
        tones = [
            np.sin(2.0 * np.pi * n * pitch_hz * t) / n**1.5 * np.exp(-6.9 * t * n**0.5 / _RING_S)
            for n in range(1, _PARTIALS + 1)
            if n * pitch_hz < 0.45 * rate_hz
        ]
        at = (round(place * _NOTE_S * rate_hz) + np.arange(len(t))) % len(sound)
        sound[at] += fades_in * np.sum(tones, axis=0)
    return sound * (MUSIC_PEAK / np.max(np.abs(sound)))
