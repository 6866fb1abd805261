"""Whether a loop has howled, judged by what comes out of it.

A howl is one tone that stays: nine tenths of the power lie about one frequency, the same for half a second, at -40 dBFS
or more and not falling. Half as long is enough where the guard holds the output down, since what it holds falls. A loop
that only rings falls; speech and plucked notes change or fall. A source that is itself a steady tone cannot be told from
a howl. Thread: control.
"""

from __future__ import annotations

import numpy as np

WINDOW_FRAMES = 2048
STAYS_S = 0.5
LEAST_RMS = 10.0 ** (-40.0 / 20.0)
SHARE = 0.9
REACH = 3
# bins to either side of the strongest: all of a Hann window's main lobe
MAY_FALL = 10.0 ** (-1.0 / 20.0)
# over STAYS_S, for the limiter's and the guard's slow breath


class HowlMeter:
    """Listens to the program's output.

    rate_hz : float [Hz]
    howling : bool; whether the last window was part of a howl
    howled : bool; whether a howl was heard so far
    began_frame, frequency_hz : int and float [Hz], of the first howl; None before
    """

    def __init__(self, rate_hz: float):
        self._rate_hz = rate_hz
        self._needed = int(np.ceil(STAYS_S * rate_hz / WINDOW_FRAMES)) + 1
        self._shape = np.hanning(WINDOW_FRAMES + 1)[:-1]
        self._sound = np.zeros(WINDOW_FRAMES)
        self._filled = self._windows = 0
        self._tone: list[tuple[int, float]] = []
        # strongest bin and rms of each window in a row that holds the same tone
        self.howling = self.howled = False
        self.began_frame: int | None = None
        self.frequency_hz: float | None = None

    def hear(self, sound: np.ndarray, held_down: bool = False) -> None:
        """Listen to the next frames, (frames,) float.

        held_down : whether the guard holds the output down at their end
        """
        while len(sound):
            count = min(len(sound), WINDOW_FRAMES - self._filled)
            self._sound[self._filled : self._filled + count] = sound[:count]
            self._filled += count
            sound = sound[count:]
            if self._filled == WINDOW_FRAMES:
                self._filled = 0
                self._windows += 1
                self._judge(held_down)

    def _judge(self, held_down: bool) -> None:
        power = np.abs(np.fft.rfft(self._sound * self._shape)) ** 2
        best = int(np.argmax(power))
        rms = float(np.sqrt(np.mean(self._sound**2)))
        pure = power[max(best - REACH, 0) : best + REACH + 1].sum() >= SHARE * power.sum()
        self.howling = False
        if not pure or rms < LEAST_RMS or (self._tone and abs(best - self._tone[-1][0]) > 1):
            self._tone = []
        if not pure or rms < LEAST_RMS:
            return
        self._tone = [*self._tone[-self._needed + 1 :], (best, rms)]
        lasted = len(self._tone)
        stays = lasted == self._needed and rms >= MAY_FALL * self._tone[0][1]
        self.howling = stays or (held_down and 2 * lasted >= self._needed)
        if self.howling and not self.howled:
            self.howled = True
            self.began_frame = (self._windows - lasted) * WINDOW_FRAMES
            self.frequency_hz = self._between_bins(power, best)

    def _between_bins(self, power: np.ndarray, best: int) -> float:
        # a parabola through the levels of the strongest bin and its neighbours; a Hann window errs by 2 % of a bin at most
        if not 0 < best < len(power) - 1:
            return best * self._rate_hz / WINDOW_FRAMES
        before, at, after = np.log(power[best - 1 : best + 2] + 1e-300)
        return float((best + 0.5 * (before - after) / (before - 2.0 * at + after)) * self._rate_hz / WINDOW_FRAMES)
