"""Settings of the howl watch. Plain values: they are checked, kept in presets and not yet acted on."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

from liveres import limits


@dataclass(frozen=True)
class Watch:
    """How far a howl watch may go.

    max_notches : int, 1 to 128; notches it may hold at one time
    deepest_db : float [dB], closed [-60, -3]; no notch of its own goes deeper
    bandwidth_oct : float [octaves], closed [0.0005, 2.5]; width of its notches
    Raises : ParameterError - a field outside its range
    """

    max_notches: int = 24
    deepest_db: float = -18.0
    bandwidth_oct: float = 0.1

    def __post_init__(self) -> None:
        for key, check in WATCH_CHECKS.items():
            object.__setattr__(self, key, check(key, getattr(self, key)))


WATCH_CHECKS: dict[str, Callable[[str, object], object]] = {
    "max_notches": partial(limits.check_whole, bound=limits.WATCH_NOTCHES),
    "deepest_db": limits.WATCH_DEEPEST_DB.check,
    "bandwidth_oct": limits.BANDWIDTH_OCT.check,
}
