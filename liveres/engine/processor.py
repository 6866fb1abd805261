"""``Processor``: the engine with no device, no thread and no clock."""

from __future__ import annotations

import numpy as np

from liveres.engine.control import Control
from liveres.errors import ParameterError
from liveres.kernels import block


class Processor(Control):
    """Run a preset over arrays, block by block, with the kernel that runs live.

    The signal path, the safety stage and every change take effect at exact frames, so the output does not depend on
    how the input is cut into blocks.

    preset, rate_hz, channels : see ``Control``
    >>> import numpy as np, liveres
    >>> p = liveres.Processor(liveres.Preset([liveres.Notch("hum", 50.0, -40.0, q=10)]), rate_hz=48000, channels=1)
    >>> p.process(np.zeros((64, 1), np.float32)).shape
    (64, 1)
    """

    def process(self, x: np.ndarray) -> np.ndarray:
        """Process one block.

        x : (frames, channels) float32 or float64 [full scale 1.0], any frames from 0 up. Samples that are not finite
            count as 0, those beyond 16.0 as 16.0, and both are counted
        Returns : new array, same shape and dtype, C order; finite, never beyond the ceiling
        Raises : ParameterError - wrong shape, channel count or dtype
        """
        if not isinstance(x, np.ndarray) or x.ndim != 2 or x.shape[1] != self.channels:
            shape = x.shape if isinstance(x, np.ndarray) else type(x).__name__
            raise ParameterError(
                f"x must be an array of shape (frames, {self.channels}), got {shape}: "
                "reshape it or make a Processor with other channels"
            )
        if x.dtype != np.float32 and x.dtype != np.float64:
            raise ParameterError(f"x must be float32 or float64 with full scale 1.0, got {x.dtype}: convert it first")
        y = np.empty(x.shape)
        # the kernel's signature asks for an array it could write to, though it does not write to this one
        block.advance(*self._arrays, np.require(x, np.float64, ["C", "W", "E"]), y)
        # the ceiling is a float32 number, so rounding to single precision cannot pass it
        return y.astype(x.dtype, copy=False)
