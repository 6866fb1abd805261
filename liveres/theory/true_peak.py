"""True peak of a stream of sound: the highest point of the curve through the samples, which a converter draws.

Four-times oversampling by a 48-tap polyphase interpolator, as Recommendation ITU-R BS.1770-5, annex 2, prints it.
It reads up to 0.7 dB low near half the sample rate, and less below; its curve does not go through the samples
themselves, so that it may also read a little under the highest sample. Its taps are used at every sample rate.
Thread: control.
"""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

_PHASE_0 = (
    0.001708984375, 0.010986328125, -0.0196533203125, 0.033203125, -0.0594482421875, 0.1373291015625,
    0.97216796875, -0.102294921875, 0.047607421875, -0.026611328125, 0.014892578125, -0.00830078125,
)
_PHASE_1 = (
    -0.0291748046875, 0.029296875, -0.0517578125, 0.089111328125, -0.16650390625, 0.465087890625,
    0.77978515625, -0.2003173828125, 0.1015625, -0.0582275390625, 0.0330810546875, -0.0189208984375,
)
PHASES = np.array([_PHASE_0, _PHASE_1, _PHASE_1[::-1], _PHASE_0[::-1]])
# (4, 12): each row filters the samples and gives one of the four points a frame
_BATCH = 2048
# windows worked at a time; their copy stays in the processor's second-level cache
_WINDOW_TO_POINTS = np.ascontiguousarray(PHASES[:, ::-1].T)


class TruePeak:
    """Keeps the largest true peak of everything fed to it, block by block.

    channels : int, 1 or more
    """

    def __init__(self, channels: int):
        self._past = np.zeros((PHASES.shape[1] - 1, channels))
        self._largest = 0.0

    def feed(self, block: np.ndarray) -> None:
        """Takes the next frames, (frames, channels) float; samples that are not finite count as 0."""
        sound = np.concatenate([self._past, np.nan_to_num(block.astype(np.float64), nan=0.0, posinf=0.0, neginf=0.0)])
        taps = PHASES.shape[1]
        for channel in sound.T:
            windows = sliding_window_view(channel, taps)
            for start in range(0, len(windows), _BATCH):
                # a copy of the windows, so that one matrix product gives all their points
                points = np.ascontiguousarray(windows[start : start + _BATCH]) @ _WINDOW_TO_POINTS
                self._largest = max(self._largest, float(points.max()), -float(points.min()))
        self._past = sound[len(sound) - taps + 1 :]

    def finish(self) -> float:
        """The largest magnitude [linear], the tail of the last samples included."""
        self.feed(np.zeros_like(self._past))
        return self._largest
