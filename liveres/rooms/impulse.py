"""A room as a loudspeaker and a microphone hear it: one impulse response. Thread: any."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

import numpy as np

from liveres.errors import ParameterError
from liveres.rooms.bounds import IMPULSE_S
from liveres.rooms.stability import highest_stable_gain, room_response
from liveres.units import db_from_gain, gain_from_db

LOOP_FRAMES = 64
# delay of every loop beside its room's and its converters': one block, without which no program hears what it did
START_BELOW_DB = 6.0
# how far below its limit a scaled room is at a system gain of 0 dB: the margin handbooks ask for
FIT_DB = (-5.0, -25.0)
# stretch of the decay that is fitted, as ISO 3382-1 does for T20


@dataclass(frozen=True)
class Room:
    """The way from a loudspeaker to a microphone.

    name : str
    impulse : (frames,) float64; microphone per loudspeaker sample, frame 0 at once
    rate_hz : float [Hz]
    scaled_db : float [dB]; what was put on the impulse response to bring it where it is
    Raises : ParameterError - no frames, over 10 s, a sample that is not finite, nothing but zeros
    """

    name: str
    impulse: np.ndarray
    rate_hz: float
    scaled_db: float = 0.0

    def __post_init__(self) -> None:
        impulse = np.array(self.impulse, np.float64)
        if impulse.ndim != 1 or not impulse.size:
            raise ParameterError(f"impulse must be a row of samples, got shape {impulse.shape}: take one channel of it")
        IMPULSE_S.check("impulse", impulse.size / self.rate_hz)
        if not np.all(np.isfinite(impulse)):
            raise ParameterError("impulse must hold finite samples only, got one that is not: measure or export it again")
        if not np.any(impulse):
            raise ParameterError("impulse must hold a sound, got zeros only: measure or export it again")
        impulse.flags.writeable = False
        object.__setattr__(self, "impulse", impulse)

    def scaled(self) -> Room:
        """The same room at the level at which it bears a system gain of +6 dB, without filters or extra delay."""
        bears = highest_stable_gain(room_response(self.impulse, LOOP_FRAMES, self.rate_hz))
        # a response that howls at no level is taken by its peak
        level_db = -bears.gain_db if bears.frequency_hz is not None else db_from_gain(float(np.max(np.abs(self.impulse))))
        change_db = -START_BELOW_DB - level_db
        return dataclasses.replace(self, impulse=self.impulse * gain_from_db(change_db), scaled_db=self.scaled_db + change_db)

    @property
    def decay_s(self) -> float:
        """Reverberation time T60 [s], all bands together: the decay from -5 to -25 dB drawn on to 60 dB.

        Backward integration of the squared response; 0 for one too short to have such a decay.
        Source: Schroeder 1965; ISO 3382-1.
        """
        energy = np.cumsum(self.impulse[::-1] ** 2)[::-1]
        level_db = 10.0 * np.log10(np.maximum(energy / energy[0], 1e-30))
        fitted = np.flatnonzero((level_db <= FIT_DB[0]) & (level_db >= FIT_DB[1]))
        if fitted.size < 2:
            return 0.0
        fall_db = np.polyfit(fitted / self.rate_hz, level_db[fitted], 1)[0]
        return float(-60.0 / fall_db)
