"""The memory a running engine works in: every array the kernels touch, made once, of fixed size.

Python owns all of it and keeps it alive for as long as an audio thread may reach it. Legend: ``kernels.state``.
"""

from __future__ import annotations

import math

import numpy as np

from liveres import limits
from liveres.engine.settings import Preset
from liveres.kernels import lookahead
from liveres.kernels import state as s
from liveres.units import gain_from_db

METER_FALL_S = 0.3
# time constant of the short-term meters; as long as a syllable, common practice, no source


class Memory:
    """Arrays for one engine.

    preset : Preset at ``rate_hz``; its levels, ceiling, look-ahead and guard are written in
    channels : int, 1 to 32
    """

    def __init__(self, preset: Preset, rate_hz: float, channels: int):
        self.state = np.zeros(1, s.STATE)
        self.channels = np.zeros(channels, s.CHANNEL)
        self.groups = np.zeros(s.GROUPS, s.GROUP)
        self.lanes = np.zeros((s.GROUPS, s.FIELDS * s.LANES))
        self.masks = np.zeros((s.GROUPS, s.LANES), np.int64)
        self.ringing = np.zeros((s.GROUPS, channels, 2 * s.LANES))
        self.history = np.zeros((s.NOTCH_GROUPS, channels, 2 * s.LANES))
        self.glides = np.zeros((s.GLIDES, 4))
        self.signal, self.feed, self.bus = np.zeros((3, channels, s.CHUNK))
        self.slow = np.zeros((s.GLIDES, s.CHUNK))
        self.sums = np.zeros((channels, s.CHUNK * s.LANES))
        self.events = np.zeros((s.EVENTS, s.EVENT_FIELDS))
        self._write_settings(preset, rate_hz)
        self._write_look(preset, rate_hz)
        for gain in ("bus_gain", "gain", "guard_gain", "gain_least", "bus_gain_least", "guard_gain_least", "look_held"):
            self.channels[gain] = 1.0
        self.channels["guard_left"] = self.state["guard_window"]
        self.glides[:, [s.NOW, s.END]] = 1.0

    @property
    def arrays(self) -> tuple[np.ndarray, ...]:
        """In the order in which the kernels take them."""
        return (
            self.state, self.channels, self.groups, self.lanes, self.masks, self.ringing, self.history, self.glides,
            self.signal, self.feed, self.bus, self.slow, self.sums, self.look, self.marks, self.events,
        )  # fmt: skip

    def _write_settings(self, preset: Preset, rate_hz: float) -> None:
        state = self.state
        state["input_gain"] = gain_from_db(preset.input_db)
        state["dry_gain"] = gain_from_db(preset.dry_db)
        state["ceiling"] = _float32_below(gain_from_db(preset.ceiling_db))
        state["release"] = gain_from_db(limits.LIMITER_RELEASE_DB_S / rate_hz)
        state["trap_frames"] = round(limits.TRAP_MUTE_S * rate_hz)
        state["guard_on"] = preset.guard
        state["guard_window"] = round(limits.GUARD_WINDOW_S * rate_hz)
        state["guard_hold"] = round(limits.GUARD_HOLD_S * rate_hz)
        state["guard_down"] = gain_from_db(-limits.GUARD_DROP_DB / (limits.GUARD_FADE_S * rate_hz))
        state["guard_up"] = gain_from_db(limits.GUARD_RETURN_DB_S / rate_hz)
        state["meter_fall"] = math.exp(-1.0 / (METER_FALL_S * rate_hz))

    def _write_look(self, preset: Preset, rate_hz: float) -> None:
        frames = 0
        if preset.lookahead_s > 0.0:
            frames = max(round(preset.lookahead_s * rate_hz), lookahead.LEAST_FRAMES)
        reach = max(frames - lookahead.TAPS + 2, 2)
        first = (reach + 1) // 2
        second = max(reach + 1 - first, 1)
        self.look = np.zeros((len(self.channels), 2, frames + 1))
        self.marks = np.zeros((len(self.channels), 3, frames + 1), np.int64)
        self.look[:, lookahead.NEEDED] = 1.0
        self.marks[:, lookahead.HELD] = lookahead.ONE
        self.marks[:, lookahead.MEAN] = lookahead.ONE * first
        self.state["look_frames"], self.state["look_first"], self.state["look_second"] = frames, first, second
        self.channels["look_sum_first"] = lookahead.ONE * first
        self.channels["look_sum_second"] = lookahead.ONE * first * second


def _float32_below(value: float) -> float:
    """Largest float32 not above ``value``: a ceiling that still holds after rounding to single precision."""
    single = np.float32(value)
    return float(single if float(single) <= value else np.nextafter(single, np.float32(0)))
