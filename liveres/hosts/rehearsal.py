"""``Rehearsal``: the engine in a simulated room, in place of a sound device.

    microphone -> engine -> system gain -> loudspeaker (clips at full scale) -> room -> microphone

Samples pass the converters as single precision, as they do live, so that a recording of the microphone rendered with
the same moves gives the same output. Nothing here knows the time: whoever calls ``advance`` sets the pace.
Thread: any one may call ``advance`` while another steers.
"""

from __future__ import annotations

import numpy as np

from liveres import limits
from liveres.engine.control import Control
from liveres.engine.moves import Move
from liveres.engine.settings import Filter, Preset
from liveres.errors import ParameterError
from liveres.kernels import block
from liveres.rooms.bounds import DELAY_FRAMES, SEED, SYSTEM_GAIN_DB
from liveres.rooms.howl import HowlMeter
from liveres.rooms.impulse import LOOP_FRAMES, Room
from liveres.rooms.loop import Loop
from liveres.rooms.sources import Noise
from liveres.rooms.stability import StableGain, highest_stable_gain, loop_response, room_response
from liveres.units import db_from_gain, gain_from_db

NOISE_RMS = gain_from_db(-80.0)
# of a microphone and its preamplifier at a vocal's setting; common practice, no source
GAIN_RAMP_S = 0.05
# fast under a finger, no click


class Rehearsal(Control):
    """A preset in a room, muted until ``unmute``, with one microphone and one loudspeaker.

    preset : Preset
    room : Room, at ``rate_hz``
    source : what stands before the microphone: an object with ``part(frames)``, as in ``rooms.sources``
    gain_db : float [dB], closed [-120, 40]; the system gain to begin with. The program never raises it by itself
    delay_frames : int [frames], 0 to 48000; converters, on top of the 64 frames of one block
    rate_hz : float [Hz]
    seed : int, 0 to 999999; the microphone's noise follows from it
    Raises : ParameterError - as ``Control``; a value outside its range; a room at another rate
    """

    def __init__(
        self,
        preset: Preset,
        room: Room,
        source: object,
        gain_db: float = 0.0,
        delay_frames: int = 0,
        rate_hz: float = 48_000,
        seed: int = 0,
    ):
        gain_db = SYSTEM_GAIN_DB.check("gain_db", gain_db)
        self.delay_frames = limits.check_whole("delay_frames", delay_frames, DELAY_FRAMES)
        seed = limits.check_whole("seed", seed, SEED)
        super().__init__(preset, rate_hz, channels=1)
        if room.rate_hz != self.rate_hz:
            raise ParameterError(
                f"room must be at rate_hz {self.rate_hz:g}, got {room.rate_hz:g}: run at {room.rate_hz:g} or convert it first"
            )
        self.room = room
        self._loop = Loop(room, self.delay_frames, source, Noise(NOISE_RMS, seed))
        self._loop.set_gain(gain_from_db(gain_db), 0)
        self._gain_db = gain_db
        self._open_loop = room_response(room.impulse, LOOP_FRAMES + self.delay_frames + self.latency_frames, self.rate_hz)
        self._safety = self.memory.channels[0]
        self._journal: list[Move] = []
        self.howl = HowlMeter(self.rate_hz)
        self.mute(ramp_s=0.0)

    # --- running -----------------------------------------------------------------------------------

    def advance(self, frames: int) -> tuple[np.ndarray, np.ndarray]:
        """Go on by so many frames; what happens does not depend on how many at a time.

        Returns : microphone and program output, each (frames, 1) float32
        """
        heard, answered = np.empty((frames, 1), np.float32), np.empty((frames, 1), np.float32)
        done = 0
        while done < frames:
            with self._steering:
                stop = min(frames, done + self._loop.frames_left)
                heard[done:stop, 0] = self._loop.hear(stop - done)
                y = np.empty((stop - done, 1))
                block.advance(*self._arrays, heard[done:stop].astype(np.float64), y)
                answered[done:stop] = y
                self._loop.play(answered[done:stop, 0].astype(np.float64))
                self.howl.hear(answered[done:stop, 0], held_down=self._safety["guard_rest"] > 0)
            done = stop
        return heard, answered

    # --- steering ----------------------------------------------------------------------------------

    def set_gain_db(self, gain_db: float, *, ramp_s: float = GAIN_RAMP_S) -> None:
        """Move the system gain over ``ramp_s``.

        gain_db : float [dB], closed [-120, 40]
        ramp_s : float [s], closed [0, 600]; 0 jumps
        Raises : ParameterError - a value outside its range
        """
        gain_db = SYSTEM_GAIN_DB.check("gain_db", gain_db)
        frames = int(self._frames("ramp_s", ramp_s))
        with self._steering:
            self._loop.set_gain(gain_from_db(gain_db), frames)
            self._gain_db = gain_db

    def retune(self, name: str, *, ramp_s: float = limits.RETUNE_S, **changes: object) -> None:
        """As ``Control.retune``; noted for ``moves``."""
        with self._steering:
            super().retune(name, ramp_s=ramp_s, **changes)
            self._journal += [Move(self.frame, name, key, value, ramp_s) for key, value in changes.items()]

    def add(self, one: Filter, *, fade_s: float = limits.FADE_S) -> None:
        """As ``Control.add``."""
        with self._steering:
            super().add(one, fade_s=fade_s)

    def remove(self, name: str, *, fade_s: float = limits.FADE_S) -> None:
        """As ``Control.remove``."""
        with self._steering:
            super().remove(name, fade_s=fade_s)

    def _send(self, rows: list[list[float]]) -> None:
        with self._steering:
            super()._send(rows)

    # --- reading -----------------------------------------------------------------------------------

    def moves(self) -> tuple[Move, ...]:
        """Every retune so far with the exact frame it acted on."""
        return tuple(self._journal)

    @property
    def gain_db(self) -> float:
        """System gain [dB] as set; a ramp may still be on its way there."""
        return self._gain_db

    def highest_stable_gain(self, with_filters: bool = True) -> StableGain:
        """The system gain [dB] this loop bears with the filters now in force, or with none, and where it howls beyond.

        Levels of the preset, converter delay and look-ahead are counted in; ramps under way count as landed, the
        limiter and the mute as open.
        """
        preset = self.preset
        with self._steering:
            filters = self.filters if with_filters else ()
            bus_gain = self._trim_gain() if with_filters else 1.0
        input_gain, dry_gain = gain_from_db(preset.input_db), gain_from_db(preset.dry_db)
        return highest_stable_gain(loop_response(self._open_loop, self.rate_hz, filters, input_gain, dry_gain, bus_gain))

    def loudspeaker(self) -> dict:
        """Highest level asked of the loudspeaker [dBFS] and how many of its samples clipped."""
        return {"peak_db": db_from_gain(self._loop.peak), "clipped_samples": self._loop.clipped}
