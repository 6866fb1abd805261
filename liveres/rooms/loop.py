"""The air side of the loop: loudspeaker, room, microphone.

    loudspeaker = clip(system gain * program output)
    microphone  = source + noise + room * loudspeaker, delayed by LOOP_FRAMES and the converters

The loudspeaker clips hard at full scale. Everything is computed in partitions on absolute frames; what a caller asks
for in between only cuts them. Thread: control.
"""

from __future__ import annotations

import numpy as np

from liveres.rooms.convolution import PARTITION, SPAN, Convolver
from liveres.rooms.impulse import LOOP_FRAMES, Room

assert LOOP_FRAMES >= PARTITION


class Loop:
    """One loudspeaker and one microphone in a room.

    room : Room
    delay_frames : int [frames]; converter delay on top of LOOP_FRAMES
    source, noise : as in ``rooms.sources``; each asked for in parts of SPAN frames
    """

    def __init__(self, room: Room, delay_frames: int, source: object, noise: object):
        delay = np.zeros(LOOP_FRAMES + delay_frames)
        self._convolver = Convolver(np.concatenate([delay, room.impulse]))
        self._source, self._noise = source, noise
        self._near = np.zeros(SPAN)
        self._played = np.zeros(PARTITION)
        self._frame = 0
        self._gain, self._gain_start, self._gain_end = 0.0, 0.0, 0.0
        self._ramp_frame = self._ramp_frames = 0
        self.peak = 0.0
        # of the loudspeaker
        self.clipped = 0
        # loudspeaker samples beyond full scale

    @property
    def frames_left(self) -> int:
        """Frames until the partition ends: the most that can be heard before something is played."""
        return PARTITION - self._frame % PARTITION

    def hear(self, frames: int) -> np.ndarray:
        """The microphone's next frames, (frames,) float64; at most ``frames_left``."""
        if self._frame % SPAN == 0:
            self._near = self._source.part(SPAN) + self._noise.part(SPAN)
        near, far = self._frame % SPAN, self._frame % PARTITION
        return self._near[near : near + frames] + self._convolver.ahead[far : far + frames]

    def play(self, signal: np.ndarray) -> None:
        """Play the frames that answer those heard last, (frames,) float64."""
        frames = len(signal)
        driven = signal * self._gains(frames)
        size = np.abs(driven)
        peak = float(size.max())
        self.peak = max(self.peak, peak)
        if peak > 1.0:
            self.clipped += int(np.count_nonzero(size > 1.0))
            driven = np.clip(driven, -1.0, 1.0)
        position = self._frame % PARTITION
        self._played[position : position + frames] = driven
        self._frame += frames
        if self._frame % PARTITION == 0:
            self._convolver.take(self._played)

    def set_gain(self, gain: float, ramp_frames: int) -> None:
        """Move the system gain to ``gain`` [linear] over ``ramp_frames``, straight; 0 jumps."""
        self._gain_start, self._gain_end = self.gain, gain
        self._ramp_frame, self._ramp_frames = self._frame, ramp_frames

    @property
    def gain(self) -> float:
        """System gain [linear] at the next frame."""
        return float(np.ravel(self._gains(1))[0])

    def _gains(self, frames: int) -> np.ndarray | float:
        done = self._frame - self._ramp_frame
        if done >= self._ramp_frames:
            return self._gain_end
        share = np.minimum(np.arange(done, done + frames) / self._ramp_frames, 1.0)
        return self._gain_start + share * (self._gain_end - self._gain_start)
