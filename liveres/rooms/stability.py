"""How much system gain a loop bears: Nyquist's criterion on the room, the delay and the filters in it.

    L(w) = room(w) e^(-j w d) chain(w);  microphone = source / (1 - g L)

g is the system gain, the one thing left out of L. Raised from 0, the loop first turns unstable when g L = 1 at some
frequency: one of zero phase (a whole number of turns), that with the largest |L|. It bears g up to 1 / max |L| there,
and howls at that frequency beyond.

Source: Nyquist 1932 as in van Waterschoot and Moonen, Fifty Years of Acoustic Feedback Control, Proc. IEEE 99(2), 2011,
eq. 10 to 12. Thread: any.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from liveres.theory.poles import bandwidth_from_radius
from liveres.theory.response import responses
from liveres.units import db_from_gain

OVERSAMPLING = 8
# grid points for each point the loop's length asks for: its phase then turns at most a radian or so from one to the next
_ABOUT = np.array([-8.0, -4.0, -2.0, -1.0, -0.5, -0.25, -0.1, 0.0, 0.1, 0.25, 0.5, 1.0, 2.0, 4.0, 8.0])
# in widths about each filter's centre: a long ring turns the phase within a small part of the even grid
_HALVINGS = 40
# of the way between two points, which leaves 1e-12 of it


class Candidate(NamedTuple):
    """A frequency [Hz] of zero loop phase and the loop gain [dB] there, at a system gain of 0 dB."""

    frequency_hz: float
    gain_db: float


class StableGain(NamedTuple):
    """Highest stable system gain [dB] and the frequency [Hz] that howls beyond it; (inf, None) when none can."""

    gain_db: float
    frequency_hz: float | None


@dataclass(frozen=True)
class LoopResponse:
    """Loop gain without the system gain, from 0 Hz to half the rate, ascending.

    frequencies_hz : (n,) float64 [Hz]
    values : (n,) complex128
    """

    frequencies_hz: np.ndarray
    values: np.ndarray


def room_response(impulse: np.ndarray, delay_frames: int, rate_hz: float) -> LoopResponse:
    """The loop with nothing in it but the room and ``delay_frames`` of delay.

    impulse : (frames,) float64
    """
    points = 1 << (OVERSAMPLING * (len(impulse) + delay_frames) - 1).bit_length()
    bins = np.arange(points // 2 + 1)
    turned = np.exp(-2j * np.pi / points * (bins * delay_frames % points))
    return LoopResponse(bins * (rate_hz / points), np.fft.rfft(impulse, points) * turned)


def loop_response(
    room: LoopResponse,
    rate_hz: float,
    filters: Iterable[object],
    input_gain: float = 1.0,
    dry_gain: float = 1.0,
    bus_gain: float = 1.0,
) -> LoopResponse:
    """The same loop with filters in it.

    room : as ``room_response`` gives it
    filters : Notch and Resonator, of ``engine.settings``
    input_gain, dry_gain, bus_gain : linear; see ``theory.response.responses``
    """
    filters = [one for one in filters if one.enabled]
    if not filters:
        return LoopResponse(room.frequencies_hz, room.values * (input_gain * dry_gain))
    frequencies, values = _with_points_about(filters, room, rate_hz)
    chain = responses(filters, rate_hz, frequencies, 0, input_gain, dry_gain, bus_gain).total
    return LoopResponse(frequencies, values * chain)


def candidates(loop: LoopResponse) -> list[Candidate]:
    """Every frequency of zero phase, the one of largest loop gain first.

    Between two points the phase and the size of L run along cubics through four.
    """
    frequencies, values = loop.frequencies_hz, loop.values
    above = values.imag >= 0.0
    top = values[-1].real
    # at half the rate the response is real, all but its rounding: a place of its own, not a crossing
    above[-1] = above[-2]
    # the way from one point to the next turns by less than half: it passes phase 0 where it crosses the real axis above 0
    where = np.flatnonzero((above[:-1] != above[1:]) | ((values.imag[:-1] == 0.0) & (values.real[:-1] > 0.0)))
    start = np.angle(values[where])
    turn = np.angle(values[where + 1] * np.conj(values[where]))
    keep = (start == 0.0) | ((start * (start + turn) <= 0.0) & (start != np.pi))
    at, gain = _places(frequencies, values, where[keep], start[keep])
    if top > 0.0:
        at, gain = np.append(at, frequencies[-1]), np.append(gain, top)
    order = np.argsort(-gain, kind="stable")
    return [Candidate(float(at[k]), db_from_gain(float(gain[k]))) for k in order if gain[k] > 0.0]


def highest_stable_gain(loop: LoopResponse) -> StableGain:
    """The system gain that the loop bears, and where it howls beyond."""
    found = candidates(loop)
    return StableGain(-found[0].gain_db, found[0].frequency_hz) if found else StableGain(math.inf, None)


def _places(
    frequencies: np.ndarray, values: np.ndarray, where: np.ndarray, start: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Frequency and size of L where its phase is 0, between each point of ``where`` and the next."""
    first = np.clip(where - 1, 0, len(values) - 4)
    four = first[:, None] + np.arange(4)
    width_hz = frequencies[where + 1] - frequencies[where]
    x = (frequencies[four] - frequencies[where, None]) / width_hz[:, None]
    turns = np.angle(values[four[:, 1:]] * np.conj(values[four[:, :-1]]))
    phase = np.concatenate([np.zeros((len(where), 1)), np.cumsum(turns, axis=1)], axis=1)
    own = np.arange(len(where)), where - first
    phase += (start - phase[own])[:, None]
    # halving: the phase is on one side of 0 at the first point and on the other, or at 0, at the second
    low, high = np.zeros(len(where)), np.where(start == 0.0, 0.0, 1.0)
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        before = _along(x, phase, middle) * start > 0.0
        low, high = np.where(before, middle, low), np.where(before, high, middle)
    return frequencies[where] + high * width_hz, np.abs(_along(x, np.abs(values[four]), high))


def _along(x: np.ndarray, y: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Value at ``at`` (n,) of the cubic through the four points (x, y), each (n, 4): Lagrange's formula."""
    total = np.zeros(len(at))
    for j in range(4):
        weight = y[:, j]
        for m in range(4):
            if m != j:
                weight = weight * (at - x[:, m]) / (x[:, j] - x[:, m])
        total += weight
    return total


def _with_points_about(filters: list, room: LoopResponse, rate_hz: float) -> tuple[np.ndarray, np.ndarray]:
    """The room's response with points added where a filter turns the phase faster than the even grid follows."""
    spacing_hz = float(room.frequencies_hz[1])
    extra = [np.zeros(0)]
    for one in filters:
        width_hz = bandwidth_from_radius(one.radius(rate_hz), rate_hz)
        if width_hz < OVERSAMPLING * spacing_hz:
            extra.append(one.centre_hz + width_hz * _ABOUT)
    added = np.unique(np.concatenate(extra))
    added = added[(added > 0.0) & (added < rate_hz / 2.0)]
    # one that falls on the grid is there already
    added = added[np.abs(added / spacing_hz - np.rint(added / spacing_hz)) > 1e-6]
    if not added.size:
        return room.frequencies_hz, room.values
    left = (added / spacing_hz).astype(np.int64)
    share = added / spacing_hz - left
    before, after = room.values[left], room.values[left + 1]
    size = (1.0 - share) * np.abs(before) + share * np.abs(after)
    values = size * np.exp(1j * (np.angle(before) + share * np.angle(after * np.conj(before))))
    place = np.searchsorted(room.frequencies_hz, added)
    return np.insert(room.frequencies_hz, place, added), np.insert(room.values, place, values)
