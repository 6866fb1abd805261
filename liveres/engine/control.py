"""The control side of an engine: what its filters are, and the commands that move them.

``Control`` knows names, settings and lanes; it turns each wish into command rows and hands them to whoever runs the
kernel: ``Processor`` in the caller's thread, ``Live`` in the sound system's. Several threads may steer; one at a time does.
Thread: control.
"""

from __future__ import annotations

import functools
import heapq
import threading
from collections.abc import Callable
from typing import TypeVar

import numpy as np

from liveres import limits
from liveres.engine import reports
from liveres.engine.memory import Memory
from liveres.engine.settings import KINDS, WIDTHS, WIDTHS_BY_CENTRE, Filter, Notch, Preset, Resonator, check_playable
from liveres.errors import ParameterError, nearest
from liveres.kernels import block
from liveres.kernels import state as s
from liveres.theory.poles import Section, decay_from_radius
from liveres.theory.response import bus_limit_db, trim_gain
from liveres.units import gain_from_db

Result = TypeVar("Result")
LEAVE = -1.0
# a ramp of this length leaves the ramp that is under way


def _one_at_a_time(method: Callable[..., Result]) -> Callable[..., Result]:
    """Let one thread at a time steer: a command's number, its filter and its place in the queue belong together."""

    @functools.wraps(method)
    def alone(self: Control, *arguments: object, **keywords: object) -> Result:
        with self._steering:
            return method(self, *arguments, **keywords)

    return alone


class Control:
    """Filters by name, their lanes, and the way to move them.

    preset : Preset; taken to ``rate_hz`` with centres and decays kept
    rate_hz : float [Hz], closed [8000, 192000]
    channels : int, 1 to 32
    Raises : ParameterError - rate or channels outside their range; a filter that cannot exist at the rate, or
        on channels the engine has not got; trim asked for where the dry sound alone reaches the ceiling
    """

    _late_frames = 0
    # by how much a command may act after the frame seen when it was given

    def __init__(self, preset: Preset, rate_hz: float = 48_000, channels: int = 2):
        self._steering = threading.RLock()
        if not isinstance(preset, Preset):
            raise ParameterError(f"preset must be a Preset, got {preset!r}: load one with load_preset")
        self.rate_hz = limits.RATE_HZ.check("rate_hz", rate_hz)
        self.channels = limits.check_whole("channels", channels, limits.CHANNELS)
        check_playable(preset)
        self.preset = preset.at_rate(self.rate_hz)
        self.memory = Memory(self.preset, self.rate_hz, self.channels)
        self._arrays = self.memory.arrays
        self._filters: dict[str, Filter] = {}
        self._sections: dict[str, Section] = {}
        self._lane_of: dict[str, int] = {}
        self._free = _FreeLanes()
        self._events: list[dict] = []
        self._events_read = 0
        self._sequence = 0
        rows = []
        for one in self.preset.filters:
            rows += self._place(one, 0.0)
        self._send(rows + self._bus_rows(0.0))

    # --- commands --------------------------------------------------------------------------------

    def _send(self, rows: list[list[float]]) -> None:
        """Have command rows carried out, in order and all before the same frame: at once, as nothing else is running."""
        block.carry_out(*self._arrays, np.array(rows).reshape(-1, s.COMMAND_FIELDS), len(rows))

    # --- moving filters ----------------------------------------------------------------------------

    @_one_at_a_time
    def retune(self, name: str, *, ramp_s: float = limits.RETUNE_S, **changes: object) -> None:
        """Move a filter to new settings over ``ramp_s``, evenly in log frequency and log decay.

        changes : any of centre_hz; depth_db (notch) or gain_db (resonator); one width; enabled
        ramp_s : float [s], closed [0, 600]; 0 jumps, its ringing carried across
        Raises : ParameterError - no such filter or field; a value outside its range; an impossible width there
        """
        ramp = self._frames("ramp_s", ramp_s)
        old = self._find(name)
        fields = ("centre_hz", old.level_field, *WIDTHS, "enabled")
        for key in changes:
            if key not in fields:
                raise ParameterError(f"field must be one a {old.kind} can move, got {key!r}: {nearest(key, fields)}")
        new = old.changed(**changes)
        section = new.section(self.rate_hz)
        rows = []
        lane = self._lane_of[name]
        # a field that is named takes this ramp even where it is headed there already; one that is not goes on as it was
        centre = ramp if "centre_hz" in changes else LEAVE
        follows = centre != LEAVE and new.width[0] in WIDTHS_BY_CENTRE
        width = ramp if follows or not changes.keys().isdisjoint(WIDTHS) else LEAVE
        if centre != LEAVE or width != LEAVE:
            rows.append(self._tune_row(s.TUNE, lane, section, centre, width))
        level = new.level(self.rate_hz)
        if level != old.level(self.rate_hz) or not changes.keys().isdisjoint((old.level_field, "enabled")):
            rows.append(self._row(s.SET_LEVEL, lane, level, ramp))
        self._filters[name] = new
        self._sections[name] = section
        if isinstance(new, Resonator) or self.preset.trim:
            rows += self._bus_rows(ramp)
        self._send(rows)

    @_one_at_a_time
    def add(self, one: Filter, *, fade_s: float = limits.FADE_S) -> None:
        """Put a filter in, faded in over ``fade_s``.

        Raises : ParameterError - its name is taken; it cannot exist at this rate or on these channels; no room
        """
        if not isinstance(one, tuple(KINDS.values())):
            raise ParameterError(f"filter must be a Notch or a Resonator, got {one!r}: make one of them")
        if one.name in self._filters:
            raise ParameterError(
                f"name must be unique among filters, got {one.name!r}, which is in use: choose another or remove it first"
            )
        if one.origin == "preset":
            one = one.changed(origin="user")
        fade = self._frames("fade_s", fade_s)
        self._send(self._place(one, fade) + self._bus_rows(fade))

    @_one_at_a_time
    def remove(self, name: str, *, fade_s: float = limits.FADE_S) -> None:
        """Take a filter out, faded out over ``fade_s``.

        Raises : ParameterError - no such filter
        """
        fade = self._frames("fade_s", fade_s)
        one = self._find(name)
        lane = self._lane_of.pop(name)
        del self._filters[name], self._sections[name]
        self._free.give_back(one.kind, lane, self._mask(one), self.frame + int(fade) + self._late_frames)
        self._send([self._row(s.SET_LEVEL, lane, 0.0, fade), *self._bus_rows(fade)])

    @_one_at_a_time
    def reset(self) -> None:
        """Clear the delay registers: what rings stops. Settings and ramps stay."""
        self._send([self._row(s.RESET)])

    @_one_at_a_time
    def mute(self, *, ramp_s: float = limits.MUTE_S) -> None:
        """Fade the output to silence over ``ramp_s``."""
        self._send([self._row(s.GLIDE_TO, s.GATE, 0.0, self._frames("ramp_s", ramp_s))])

    @_one_at_a_time
    def unmute(self, *, ramp_s: float = limits.UNMUTE_S) -> None:
        """Fade the output in over ``ramp_s``."""
        self._send([self._row(s.GLIDE_TO, s.GATE, 1.0, self._frames("ramp_s", ramp_s))])

    # --- reading -----------------------------------------------------------------------------------

    @property
    @_one_at_a_time
    def filters(self) -> tuple[Filter, ...]:
        """The filters now in force, in order."""
        return tuple(self._filters.values())

    @property
    def frame(self) -> int:
        """Frames processed since the start."""
        return int(self.memory.state["frame"][0])

    @property
    def latency_frames(self) -> int:
        """Frames by which the output lags the input: 0, or the look-ahead."""
        return int(self.memory.state["look_frames"][0])

    @property
    def bus_limit_db(self) -> float:
        """Permitted level of the resonator bus [dBFS]: the ceiling, less 3 dB a doubling of the longest decay over 1 s."""
        return bus_limit_db(self.longest_decay_s, self.preset.ceiling_db)

    @property
    @_one_at_a_time
    def longest_decay_s(self) -> float:
        """Longest decay [s] among enabled resonators; 0 when there is none."""
        sounding = [name for name, one in self._filters.items() if one.kind == "resonator" and one.enabled]
        rates = [self._sections[name].decay_rate for name in sounding]
        return decay_from_radius(float(np.exp(-min(rates))), self.rate_hz) if rates else 0.0

    @_one_at_a_time
    def sos(self, channel: int = 0) -> np.ndarray:
        """Static second-order sections of the notch chain on one channel, scipy order b0 b1 b2 1 a1 a2.

        Returns : (n, 6) float64, C order, one row an enabled notch that works on the channel
        Raises : ParameterError - channel outside 0 to channels - 1
        """
        limits.check_whole("channel", channel, limits.Bound(0, self.channels - 1, "", "channels are counted from 0"))
        rows = []
        for one in self._filters.values():
            if isinstance(one, Notch) and one.enabled and (one.channels is None or channel in one.channels):
                b0, b1, b2, a1, a2 = self._sections[one.name].notch(one.level(self.rate_hz))
                rows.append([b0, b1, b2, 1.0, a1, a2])
        return np.array(rows).reshape(-1, 6)

    @_one_at_a_time
    def meters(self) -> dict:
        """Levels and safety activity; see ``reports.read_meters``."""
        return reports.read_meters(self.memory, self.bus_limit_db)

    @_one_at_a_time
    def events(self) -> list[dict]:
        """What happened since the start, oldest first: dicts with frame, kind, channel, centre_hz, depth_db and why."""
        fresh, self._events_read = reports.read_events(self.memory, self._events_read)
        self._events += fresh
        return list(self._events)

    # --- rows --------------------------------------------------------------------------------------

    def _row(self, kind: int, *values: float) -> list[float]:
        self._sequence += 1
        row = [float(self._sequence), float(kind), *map(float, values)]
        return row + [0.0] * (s.COMMAND_FIELDS - len(row))

    def _tune_row(self, kind: int, lane: int, to: Section, centre: float, width: float, mask: int = 0) -> list[float]:
        return self._row(kind, lane, to.omega, to.decay_rate, to.real, to.imag, to.peak, centre, width, mask)

    def _place(self, one: Filter, fade: float) -> list[list[float]]:
        if one.channels is not None and one.channels[-1] >= self.channels:
            raise ParameterError(
                f"filter {one.name!r}: channels must be below {self.channels} (the engine has {self.channels}, counted from 0), "
                f"got {one.channels[-1]}: leave channels out or run more"
            )
        section = one.section(self.rate_hz)
        mask = self._mask(one)
        lane = self._free.take(one.kind, mask, self.frame)
        self._filters[one.name], self._sections[one.name], self._lane_of[one.name] = one, section, lane
        return [
            self._tune_row(s.PLACE, lane, section, 0.0, 0.0, mask),
            self._row(s.SET_LEVEL, lane, one.level(self.rate_hz), fade),
        ]

    def _bus_rows(self, ramp: float) -> list[list[float]]:
        return [
            self._row(s.GLIDE_TO, s.BUS, self._trim_gain(), ramp),
            self._row(s.GLIDE_TO, s.BUS_LIMIT, gain_from_db(self.bus_limit_db), ramp),
        ]

    def _trim_gain(self) -> float:
        # the resonator bus's share of the room under the ceiling that the dry sound leaves
        if not self.preset.trim:
            return 1.0
        through, dry = gain_from_db(self.preset.input_db), gain_from_db(self.preset.dry_db)
        ceiling = gain_from_db(self.preset.ceiling_db)
        return trim_gain(self.filters, self.rate_hz, self.channels, through, dry, ceiling)

    def _find(self, name: str) -> Filter:
        if name not in self._filters:
            raise ParameterError(f"name must be that of a filter in force, got {name!r}: {nearest(str(name), self._filters)}")
        return self._filters[name]

    def _frames(self, name: str, ramp_s: float) -> float:
        return float(round(limits.RAMP_S.check(name, ramp_s) * self.rate_hz))

    def _mask(self, one: Filter) -> int:
        chosen = range(self.channels) if one.channels is None else one.channels
        return sum(1 << channel for channel in chosen)


class _FreeLanes:
    """Which lanes are free. A resonator's group serves one set of channels until all its lanes are free again."""

    def __init__(self):
        self._notches = list(range(s.NOTCH_GROUPS * s.LANES - 1, -1, -1))
        self._groups = list(range(s.GROUPS - 1, s.NOTCH_GROUPS - 1, -1))
        self._resonators: dict[int, list[int]] = {}
        self._free_in = [s.LANES] * s.GROUPS
        self._in_force = {"notch": 0, "resonator": 0}
        self._fading: list[tuple[int, int, int]] = []

    def take(self, kind: str, mask: int, frame: int) -> int:
        most = limits.NOTCHES_MAX if kind == "notch" else limits.RESONATORS_MAX
        if self._in_force[kind] == most:
            raise ParameterError(f"filters must hold at most {most} of kind {kind}, got one more: remove some first")
        while self._fading and self._fading[0][0] <= frame:
            _, lane, its_mask = heapq.heappop(self._fading)
            self._put(lane, its_mask)
        free = self._notches if kind == "notch" else self._resonators.setdefault(mask, [])
        if not free and kind == "resonator" and self._groups:
            first = self._groups.pop() * s.LANES
            free.extend(range(first + s.LANES - 1, first - 1, -1))
        if not free:
            sets = f", on at most {s.GROUPS - s.NOTCH_GROUPS} sets of channels" if kind == "resonator" else ""
            raise ParameterError(
                f"filters must fit beside those of kind {kind} that still fade out{sets}, got one more: "
                "remove some and wait until they have faded"
            )
        lane = free.pop()
        self._free_in[lane // s.LANES] -= 1
        self._in_force[kind] += 1
        return lane

    def give_back(self, kind: str, lane: int, mask: int, frame: int) -> None:
        self._in_force[kind] -= 1
        heapq.heappush(self._fading, (frame, lane, mask))

    def _put(self, lane: int, mask: int) -> None:
        group = lane // s.LANES
        self._free_in[group] += 1
        if group < s.NOTCH_GROUPS:
            self._notches.append(lane)
            return
        free = self._resonators[mask]
        free.append(lane)
        if self._free_in[group] == s.LANES:
            free[:] = [one for one in free if one // s.LANES != group]
            self._groups.append(group)
