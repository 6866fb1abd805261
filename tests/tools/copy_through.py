"""A program for the rigs to prove themselves on: a PortAudio stream whose native callback copies input to output.

    python copy_through.py DEVICE BLOCK_FRAMES [FRAMES]

Prints "ready" once the stream runs, and ends after FRAMES frames, or when interrupted. Exits with LOST when the
stream dies.
"""

from __future__ import annotations

import contextlib
import ctypes
import os
import sys
import time

LOST = 3


def native_callback():
    """Compile a stream callback that copies stereo float32 frames and counts them in the int64 of its userdata."""
    import numpy as np
    from numba import carray, cfunc, types

    ulong = types.uint32 if ctypes.sizeof(ctypes.c_ulong) == 4 else types.uint64

    @cfunc(types.int32(types.voidptr, types.voidptr, ulong, types.voidptr, ulong, types.voidptr), error_model="numpy", cache=True)
    def copy_through(inputs, outputs, frames, _time, _flags, counter):
        count = 2 * np.int64(frames)
        source, sink = carray(inputs, (count,), np.float32), carray(outputs, (count,), np.float32)
        for i in range(count):
            sink[i] = source[i]
        carray(counter, (1,), np.int64)[0] += np.int64(frames)
        return 0

    return copy_through


def main(device: str, block_frames: int, frames: int | None) -> int:
    """Run the stream; returns the exit code."""
    import sounddevice

    callback, copied = native_callback(), ctypes.c_int64(0)
    stream = sounddevice._StreamBase(
        "duplex", samplerate=48_000, blocksize=block_frames, device=device, channels=2, dtype="float32", latency="low",
        callback=sounddevice._ffi.cast("PaStreamCallback*", callback.address),
        userdata=sounddevice._ffi.cast("void*", ctypes.addressof(copied)),
    )  # fmt: skip
    with contextlib.suppress(KeyboardInterrupt):
        stream.start()
        print("ready", flush=True)
        while frames is None or copied.value < frames:
            if not stream.active:
                # closing a stream whose JACK server has died would wait for ten minutes
                os._exit(LOST)
            time.sleep(0.002)
    stream.abort()
    stream.close()
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1], int(sys.argv[2]), int(sys.argv[3]) if len(sys.argv) > 3 else None))
