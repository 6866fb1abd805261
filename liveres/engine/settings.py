"""What a user sets: notches, resonators and the preset that holds them. Plain values, no audio.

Each class checks itself when made, so a filter or preset that exists is a legal one. What depends on the
sample rate is checked where the rate is known: in ``Preset`` against its own, in an engine against the engine's.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from functools import partial

from liveres import limits
from liveres.engine.watch import Watch
from liveres.errors import ParameterError, nearest, told
from liveres.theory import poles
from liveres.units import gain_from_db

WIDTHS = ("pole_radius", "bandwidth_hz", "bandwidth_oct", "q", "decay_s")
WIDTHS_BY_CENTRE = ("bandwidth_oct", "q")
# widths that are more hertz at a higher centre
NORMALISATIONS = ("peak", "strike")
ORIGINS = ("preset", "user", "watch")


@dataclass(frozen=True)
class _Filter:
    """What notches and resonators share: a name, a centre, one width, channels and a switch.

    name : str, not empty, unique in its preset
    centre_hz : float [Hz], closed [10, 0.49 rate_hz]; where the gain is extreme, exactly
    exactly one width, each also readable from the others at a rate:
        pole_radius : float, 0.001 or more and below 1; tied to the preset's rate_hz
        bandwidth_hz : float [Hz]; between the -3 dB points of the band-pass part
        bandwidth_oct : float [octaves]
        q : float, 0.5 or more; centre over bandwidth
        decay_s : float [s], closed [0.001, 60]; for the ringing to fall 60 dB
    channels : None for all, or channel numbers counted from 0
    enabled : bool; a disabled filter passes sound as if it were not there
    origin : "preset", "user" or "watch": who put it there
    """

    name: str
    centre_hz: float

    def __post_init__(self) -> None:
        self._check("name", "centre_hz")
        width = check_one_width([width for width in WIDTHS if getattr(self, width) is not None])
        self._check(width, "channels", "enabled", "origin", self.level_field, *self.extra_fields)

    def _check(self, *keys: str) -> None:
        for key in keys:
            object.__setattr__(self, key, FILTER_CHECKS[key](key, getattr(self, key)))

    @property
    def width(self) -> tuple[str, float]:
        """The width as given: its field name and value."""
        return next((width, getattr(self, width)) for width in WIDTHS if getattr(self, width) is not None)

    def radius(self, rate_hz: float) -> float:
        """Pole radius at a sample rate; bandwidths and Q become exact -3 dB widths.

        Raises : ParameterError - the width is a quarter of the rate or more
        """
        kind, value = self.width
        if kind == "pole_radius":
            return value
        if kind == "decay_s":
            return poles.radius_from_decay(value, rate_hz)
        if kind == "bandwidth_hz":
            width_hz = value
        elif kind == "q":
            width_hz = self.centre_hz / value
        else:
            width_hz = poles.bandwidth_from_octaves(self.centre_hz, value)
        if not width_hz < rate_hz / 4:
            raise ParameterError(
                f"{kind} must give a width below {rate_hz / 4:.12g} Hz (a quarter of rate_hz {rate_hz:.12g}), "
                f"got {width_hz:.6g} Hz: narrow it"
            )
        return poles.radius_from_bandwidth(width_hz, rate_hz)

    def section(self, rate_hz: float) -> poles.Section:
        """The pole pair at a sample rate.

        Raises : ParameterError - centre above 0.49 rate_hz; decay over 60 s; so wide that the poles turn real
        """
        limits.check_centre("centre_hz", self.centre_hz, rate_hz)
        return poles.design_section(self.centre_hz, self.radius(rate_hz), rate_hz)

    def changed(self, **changes: object) -> _Filter:
        """A copy with some fields changed; a new width takes the place of the old one, whatever its kind."""
        if any(width in changes for width in WIDTHS):
            changes = {**dict.fromkeys(WIDTHS), **changes}
        return dataclasses.replace(self, **changes)


@dataclass(frozen=True)
class Notch(_Filter):
    """A cut at one frequency: 1 - d B(z), d = 1 - 10^(depth_db/20).

    depth_db : float [dB], closed [-120, 0] or -inf; gain at the centre. -inf puts a zero pair on the unit circle
    The other fields are those of every filter: name, centre_hz, one width, channels, enabled, origin.
    Raises : ParameterError - any field outside its range; no width or several
    >>> Notch("hum", 50.0, -20.0, q=10).width
    ('q', 10.0)
    """

    depth_db: float
    pole_radius: float | None = field(default=None, kw_only=True)
    bandwidth_hz: float | None = field(default=None, kw_only=True)
    bandwidth_oct: float | None = field(default=None, kw_only=True)
    q: float | None = field(default=None, kw_only=True)
    decay_s: float | None = field(default=None, kw_only=True)
    channels: tuple[int, ...] | None = field(default=None, kw_only=True)
    enabled: bool = field(default=True, kw_only=True)
    origin: str = field(default="preset", kw_only=True)

    kind = "notch"
    level_field = "depth_db"
    extra_fields = ()

    def level(self, rate_hz: float) -> float:
        """d, the share of the band-pass taken away: 0 when disabled, 1 for a null."""
        return 1.0 - gain_from_db(self.depth_db) if self.enabled else 0.0


@dataclass(frozen=True)
class Resonator(_Filter):
    """A ring at one frequency: g B(z).

    gain_db : float [dB], closed [-120, 24]
    normalise : "peak": g is the gain at the centre; "strike": g is the amplitude a unit impulse rings at
    The other fields are those of every filter: name, centre_hz, one width, channels, enabled, origin.
    Raises : ParameterError - any field outside its range; no width or several
    """

    gain_db: float
    pole_radius: float | None = field(default=None, kw_only=True)
    bandwidth_hz: float | None = field(default=None, kw_only=True)
    bandwidth_oct: float | None = field(default=None, kw_only=True)
    q: float | None = field(default=None, kw_only=True)
    decay_s: float | None = field(default=None, kw_only=True)
    normalise: str = field(default="peak", kw_only=True)
    channels: tuple[int, ...] | None = field(default=None, kw_only=True)
    enabled: bool = field(default=True, kw_only=True)
    origin: str = field(default="preset", kw_only=True)

    kind = "resonator"
    level_field = "gain_db"
    extra_fields = ("normalise",)

    def level(self, rate_hz: float) -> float:
        """g, the factor on the band-pass: 0 when disabled."""
        if not self.enabled:
            return 0.0
        gain = gain_from_db(self.gain_db)
        return gain if self.normalise == "peak" else gain / self.section(rate_hz).ring_gain


Filter = Notch | Resonator
KINDS = {"notch": Notch, "resonator": Resonator}


@dataclass(frozen=True)
class Preset:
    """Everything a session starts from.

    input_db -> notches in series -> (dry_db * that) + sum of resonators fed by it -> safety stage

    filters : Notch and Resonator, in order; names unique; at most 128 notches and 16,384 resonators
    input_db : float [dB], closed [-120, 24]
    dry_db : float [dB], closed [-120, 24] or -inf for no dry sound
    ceiling_db : float [dBFS], closed [-60, 0]; no output sample passes it
    lookahead_s : float [s], closed [0, 0.02]; 0 limits without latency
    guard : bool; step a sustained tone near the ceiling down
    trim : bool; scale the resonator bus so that no full-scale sine can pass the ceiling
    rate_hz : float [Hz], closed [8000, 192000]; what pole radii refer to. Elsewhere centres and decays are kept
    watch : Watch or None; settings of the howl watch
    title, notes : str, for people
    Raises : ParameterError - a field outside its range; a filter illegal at rate_hz; a name twice; too many filters
    """

    filters: tuple[Filter, ...] = ()
    input_db: float = 0.0
    dry_db: float = 0.0
    ceiling_db: float = -1.0
    lookahead_s: float = 0.0
    guard: bool = True
    trim: bool = False
    rate_hz: float = 48_000
    watch: Watch | None = None
    title: str = ""
    notes: str = ""

    def __post_init__(self) -> None:
        for key, check in PRESET_CHECKS.items():
            object.__setattr__(self, key, check(key, getattr(self, key)))
        if isinstance(self.filters, (str, bytes)) or not isinstance(self.filters, Iterable):
            raise ParameterError(f"filters must be a list of filters, got {self.filters!r}: write it like [Notch(...)]")
        object.__setattr__(self, "filters", tuple(self.filters))
        check_filters(self.filters, self.rate_hz)

    def at_rate(self, rate_hz: float) -> Preset:
        """The same preset for another sample rate: centres and decays kept, so a pole radius R becomes R^(old/new).

        Raises : ParameterError - rate outside its range; a filter that cannot exist at that rate
        """
        if rate_hz == self.rate_hz:
            return self
        limits.RATE_HZ.check("rate_hz", rate_hz)
        moved = tuple(one if one.pole_radius is None else _moved_radius(one, self.rate_hz, rate_hz) for one in self.filters)
        return dataclasses.replace(self, filters=moved, rate_hz=rate_hz)


def _moved_radius(one: Filter, old_hz: float, new_hz: float) -> Filter:
    """The same filter with its pole radius at the old rate given as the one of the same decay at the new rate."""
    # a radius is rounded near one, so the longest permitted may come out a hair too long
    radius = min(one.pole_radius ** (old_hz / new_hz), poles.radius_max(new_hz))
    try:
        return one.changed(pole_radius=radius)
    except ParameterError as error:
        raise ParameterError(f"filter {one.name!r}: {error}") from None


PRESET_BOUNDS = {
    "input_db": limits.GAIN_DB,
    "dry_db": limits.DRY_DB,
    "ceiling_db": limits.CEILING_DB,
    "lookahead_s": limits.LOOKAHEAD_S,
    "rate_hz": limits.RATE_HZ,
}


def check_channels(channels: object) -> tuple[int, ...] | None:
    """None, or the channel numbers in order; ParameterError for one outside, twice, or none at all."""
    if channels is None:
        return None
    if isinstance(channels, (str, bytes)) or not isinstance(channels, Iterable):
        raise ParameterError(
            f"channels must be a list of channel numbers counted from 0, got {told(channels)}: write it like [0, 1]"
        )
    numbers = [limits.check_whole("channels", one, limits.CHANNEL_INDEX) for one in channels]
    if not numbers or len(set(numbers)) != len(numbers):
        raise ParameterError(
            f"channels must name each channel once and at least one, got {numbers}: leave it out for all channels"
        )
    return tuple(sorted(numbers))


def check_one_width(given: list[str]) -> str:
    """The one width among the names given; ParameterError for none or several."""
    if len(given) != 1:
        raise ParameterError(
            f"width must be given exactly once, as one of {', '.join(WIDTHS)}, "
            f"got {' and '.join(given) or 'none'}: {'keep one' if given else 'add one'}"
        )
    return given[0]


def check_filters(filters: Iterable[Filter], rate_hz: float) -> None:
    """ParameterError at the first filter of a wrong type, named twice, too many, or illegal at the rate."""
    filters = tuple(filters)
    for one in filters:
        if not isinstance(one, (Notch, Resonator)):
            raise ParameterError(f"filters must hold Notch and Resonator, got {one!r}: wrap it in one of them")
    for _, message in (*repeated_names(one.name for one in filters), *excess_kinds(one.kind for one in filters)):
        raise ParameterError(message)
    for one in filters:
        try:
            one.section(rate_hz)
        except ParameterError as error:
            raise ParameterError(f"filter {one.name!r}: {error}") from None


def check_playable(preset: Preset) -> None:
    """ParameterError for a legal preset that no engine of this release can play, at whatever rate and on whatever channels."""
    if preset.watch is not None:
        raise ParameterError(f"watch must be None, since this release cannot listen for howl, got {preset.watch}: take it out")
    through_db = preset.input_db + preset.dry_db
    if preset.trim and gain_from_db(preset.input_db) * gain_from_db(preset.dry_db) >= gain_from_db(preset.ceiling_db):
        raise ParameterError(
            f"trim must have room under the ceiling: input_db {preset.input_db:g} plus dry_db {preset.dry_db:g} "
            f"must be below ceiling_db {preset.ceiling_db:g}, got {through_db:g}: lower dry_db"
        )


def repeated_names(names: Iterable[object]) -> Iterator[tuple[int, str]]:
    """Place, counted from 0, and message of every name that stood earlier too."""
    seen = set()
    for place, name in enumerate(names):
        if name in seen:
            yield place, f"name must be unique among filters, got {name!r} twice: rename one"
        seen.add(name)


def excess_kinds(kinds: Iterable[str]) -> Iterator[tuple[int, str]]:
    """Place, counted from 0, of the first filter over the most its kind may have, and the message."""
    places: dict[str, list[int]] = {"notch": [], "resonator": []}
    for place, kind in enumerate(kinds):
        places[kind].append(place)
    for kind, most in (("notch", limits.NOTCHES_MAX), ("resonator", limits.RESONATORS_MAX)):
        if len(places[kind]) > most:
            yield places[kind][most], f"filters must hold at most {most} of kind {kind}, got {len(places[kind])}: remove some"


def _check_name(name: str, value: object) -> str:
    if not isinstance(value, str) or not value.strip():
        raise ParameterError(f"{name} must be a word that is not empty, got {told(value)}: give the filter a name")
    return value


def _check_text(name: str, value: object) -> str:
    if not isinstance(value, str):
        raise ParameterError(f"{name} must be text, got {told(value)}: put it in quotes")
    return value


def _check_watch(name: str, value: object) -> Watch | None:
    if value is not None and not isinstance(value, Watch):
        raise ParameterError(f"{name} must be a Watch or None, got {value!r}: make one with Watch(...)")
    return value


def _check_radius(name: str, value: object) -> float:
    radius = limits.check_number(name, value)
    if limits.RADIUS_MIN <= radius < 1.0:
        return radius
    remedy = "raise it" if radius < limits.RADIUS_MIN else "lower it or give decay_s"
    raise ParameterError(
        f"{name} must be {limits.RADIUS_MIN:g} or more and below 1, where a pole rings for ever, got {radius:.12g}: {remedy}"
    )


def _check_choice(choices: tuple[str, ...], name: str, value: object) -> str:
    if value not in choices:
        raise ParameterError(f"{name} must be one of {', '.join(choices)}, got {told(value)}: {nearest(str(value), choices)}")
    return value


Check = Callable[[str, object], object]
# of a field's name and the value given: the value to keep, or ParameterError

FILTER_CHECKS: dict[str, Check] = {
    "kind": partial(_check_choice, tuple(KINDS)),
    "name": _check_name,
    "centre_hz": limits.CENTRE_HZ.check,
    "depth_db": limits.DEPTH_DB.check,
    "gain_db": limits.GAIN_DB.check,
    "pole_radius": _check_radius,
    "bandwidth_hz": limits.BANDWIDTH_HZ.check,
    "bandwidth_oct": limits.BANDWIDTH_OCT.check,
    "q": limits.Q.check,
    "decay_s": limits.DECAY_S.check,
    "normalise": partial(_check_choice, NORMALISATIONS),
    "channels": lambda _, value: check_channels(value),
    "enabled": limits.check_flag,
    "origin": partial(_check_choice, ORIGINS),
}
PRESET_CHECKS: dict[str, Check] = {
    **{key: bound.check for key, bound in PRESET_BOUNDS.items()},
    "guard": limits.check_flag,
    "trim": limits.check_flag,
    "title": _check_text,
    "notes": _check_text,
    "watch": _check_watch,
}
# what one field may hold whatever the others do: made values, files and moves are all checked by these


