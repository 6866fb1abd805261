"""Convolution that goes on for ever, a partition at a time, with nothing ahead of its time.

    y[n] = sum over k from PARTITION on of h[k] x[n - k]

Because no tap is nearer than a partition, the y of the next PARTITION frames is known once the x before it is: a loop
can be closed around it, sample for sample. Near taps are summed directly; those from SPAN on go by spectra of SPAN
frames, each times its own input's (overlap-save). Partitions lie on absolute frames, so nothing here depends on how a
caller cuts his sound into blocks.
Source: partitioned convolution, common practice; the equations follow from cutting h into pieces.
Thread: control.
"""

from __future__ import annotations

import numpy as np

from liveres.errors import ParameterError

PARTITION = 64
# frames: the least delay a loop can have, and the work of one go
SPAN = 1024
# frames a spectrum covers: balances direct sums against transforms for rooms of about a second


class Convolver:
    """Convolve a signal with a response whose first PARTITION taps are 0.

    response : (taps,) float64
    Raises : ParameterError - a tap before PARTITION that is not 0
    """

    def __init__(self, response: np.ndarray):
        if np.any(response[:PARTITION]):
            raise ParameterError(f"response must be 0 in its first {PARTITION} taps, got others: delay it by {PARTITION} frames")
        spans = max(-(-len(response) // SPAN), 1)
        taps = np.zeros(spans * SPAN)
        taps[: len(response)] = response
        self._near = taps[PARTITION:SPAN][::-1].copy()
        self._far = np.fft.rfft(taps[SPAN:].reshape(spans - 1, SPAN), 2 * SPAN, axis=1)
        self._heard = np.zeros_like(self._far)
        # spectra of the input, newest first, each of one span and the one before it
        self._past = np.zeros(2 * SPAN)
        # input so far, newest last
        self._far_sum = np.zeros(SPAN)
        self._position = 0
        self.ahead = np.zeros(PARTITION)

    def take(self, signal: np.ndarray) -> None:
        """Take the next PARTITION frames of x; ``ahead`` then holds the y of the PARTITION frames after them."""
        past = self._past
        past[:-PARTITION] = past[PARTITION:].copy()
        past[-PARTITION:] = signal
        self._position = (self._position + PARTITION) % SPAN
        if self._position == 0 and len(self._far):
            self._heard[1:] = self._heard[:-1].copy()
            self._heard[0] = np.fft.rfft(past)
            self._far_sum = np.fft.irfft(np.einsum("kf,kf->f", self._far, self._heard))[SPAN:]
        near = np.correlate(past[SPAN + 1 :], self._near, "valid")
        self.ahead = near + self._far_sum[self._position : self._position + PARTITION]
