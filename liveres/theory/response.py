"""Steady response of a preset: what it does to a sine that has been playing long enough.

    H = input * product(1 - d_i B_i) * (dry + bus_gain * sum(g_k B_k))

On the unit circle the band-pass of a pole pair (``theory.poles``) is exactly

    B(e^jw) = n / (n + j m),   n = t sin(w),   m = cos(w0) - cos(w) = 2 sin((w + w0)/2) sin((w - w0)/2)

with t = (1 - R^2)/(1 + R^2): the pole pair's equation divided through by its own numerator. In this form no
digits are lost however near the circle the poles lie, where the polynomials in z cancel.

Letters: w frequency and w0 centre [rad/frame], R pole radius, t tangent of half the -3 dB width, d cut, g gain.
Filters are those of ``engine.settings``; on a channel, those count that are enabled and do not name other channels.
Thread: control.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from liveres.limits import BUS_DB_PER_DOUBLING, BUS_FREE_DECAY_S
from liveres.theory.poles import LN_1000

CHUNK_CELLS = 1 << 18
# filters times frequencies held at once: 2 MB an array, which stays in a cache however many of either there are

_OFFSETS = np.array([0.0, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 4.0, 8.0, 16.0])
# in half widths about each centre: dense where one filter turns, sparse where only its skirt is left
_SWEEP_POINTS = 4096
_LOWEST_HZ = 1.0
# the even sweep, for what lies between the filters: 230 points an octave at 48 kHz
_REFINED = 64
_REFINE_STEPS = 48
# 0.618^48 = 1e-10 of a bracket that is already a fraction of a width
_NODES = 14
_NEAR = 3.0
_GROUP_POINTS = 1024
# see _bus_far_and_near


class Responses(NamedTuple):
    """Complex gains at the frequencies asked for; each complex128 of their shape."""

    notches: np.ndarray
    bus: np.ndarray
    total: np.ndarray


class Peak(NamedTuple):
    """A largest steady gain [linear] and the frequency [Hz] of the sine that meets it."""

    gain: float
    frequency_hz: float


@dataclass(frozen=True)
class _Bank:
    """Sections as arrays (n,) float64, sorted by centre: w0, t, and d or g."""

    omega: np.ndarray
    tangent: np.ndarray
    level: np.ndarray

    def part(self, keep: slice) -> _Bank:
        return _Bank(self.omega[keep], self.tangent[keep], self.level[keep])


def responses(
    filters: Iterable[object],
    rate_hz: float,
    frequencies_hz: npt.ArrayLike,
    channel: int = 0,
    input_gain: float = 1.0,
    dry_gain: float = 1.0,
    bus_gain: float = 1.0,
) -> Responses:
    """Notch chain, resonator bus and the whole path, at each frequency.

    frequencies_hz : float array [Hz], closed [0, rate_hz / 2]
    input_gain, dry_gain : linear gains of a preset's input_db and dry_db
    bus_gain : factor on the resonator bus, as ``trim_gain`` gives it
    """
    filters = tuple(filters)
    frequencies = np.asarray(frequencies_hz, dtype=np.float64)
    omega = 2.0 * np.pi / rate_hz * frequencies.ravel()
    order = np.argsort(omega, kind="stable")
    notches, bus = np.empty(omega.size, complex), np.empty(omega.size, complex)
    notches[order] = _chain(_bank(filters, "notch", rate_hz, channel), omega[order])
    bus[order] = _bus_far_and_near(_bank(filters, "resonator", rate_hz, channel), omega[order])
    total = input_gain * notches * (dry_gain + bus_gain * bus)
    return Responses(*(one.reshape(frequencies.shape) for one in (notches, bus, total)))


def poles_and_zeros(one: object, rate_hz: float) -> tuple[np.ndarray, np.ndarray]:
    """The two poles and two zeros of one filter in the z-plane, each (2,) complex128, upper one first.

    A resonator's zeros are +1 and -1. A notch's, with u = 1 - R^2, are
        ((1 + R^2) cos(w0) +- j sqrt(((1 + R^2) sin(w0))^2 - (u (1 - d))^2)) / (2 - d u)
    which for a null, d = 1, lie on the unit circle at the centre.
    """
    section = one.section(rate_hz)
    poles = np.array([complex(section.real, section.imag), complex(section.real, -section.imag)])
    if one.kind == "resonator":
        return poles, np.array([1.0 + 0.0j, -1.0 + 0.0j])
    cut, u = one.level(rate_hz), 2.0 * section.peak
    one_plus = 2.0 - u
    imag = math.sqrt((one_plus * math.sin(section.omega)) ** 2 - (u * (1.0 - cut)) ** 2)
    zero = complex(one_plus * math.cos(section.omega), imag) / (2.0 - cut * u)
    return poles, np.array([zero, zero.conjugate()])


def chain_poles_and_zeros(filters: Iterable[object], rate_hz: float) -> tuple[np.ndarray, np.ndarray]:
    """Poles and zeros of the enabled notches in series, each (2 n,) complex128."""
    pairs = [poles_and_zeros(one, rate_hz) for one in filters if one.kind == "notch" and one.enabled]
    if not pairs:
        return np.zeros(0, complex), np.zeros(0, complex)
    return np.concatenate([poles for poles, _ in pairs]), np.concatenate([zeros for _, zeros in pairs])


def sos(filters: Iterable[object], rate_hz: float) -> np.ndarray:
    """One row ``b0 b1 b2 1 a1 a2`` a filter, in the order given: (n, 6) float64.

    Notches are run in series, resonators side by side and summed; a disabled filter passes or adds nothing.
    """
    rows = []
    for one in filters:
        section, level = one.section(rate_hz), one.level(rate_hz)
        if one.kind == "notch":
            b0, b1, b2, a1, a2 = section.notch(level)
        else:
            b0, b1, b2, a1, a2 = section.bandpass()
            b0, b2 = level * b0, level * b2
        rows.append((b0, b1, b2, 1.0, a1, a2))
    return np.array(rows, dtype=np.float64).reshape(len(rows), 6)


def longest_decay_s(filters: Iterable[object], rate_hz: float) -> float:
    """Longest time [s] in which the ringing of an enabled filter falls 60 dB; 0 when there is none."""
    return max((LN_1000 / (rate_hz * one.section(rate_hz).decay_rate) for one in filters if one.enabled), default=0.0)


def channel_groups(filters: Iterable[object], channels: int) -> list[tuple[int, ...]]:
    """Channels 0 to channels - 1, those that pass the same filters together, in order of their first."""
    named = [(index, one.channels) for index, one in enumerate(filters) if one.channels is not None]
    groups: dict[tuple[int, ...], list[int]] = {}
    for channel in range(channels):
        groups.setdefault(tuple(index for index, on in named if channel in on), []).append(channel)
    return [tuple(group) for group in groups.values()]


def steady_peak(
    filters: Iterable[object],
    rate_hz: float,
    channel: int = 0,
    part: str = "total",
    dry_gain: float = 1.0,
    bus_gain: float = 1.0,
) -> Peak:
    """Largest steady gain a sine of any frequency can meet on one channel, before the safety stage.

    Looked for on every centre, at fractions of every width about it, and along an even sweep; the highest places
    are then closed in by golden section. Memory stays within some 30 MB; time is about 40 ms for 100 filters,
    0.2 s for 1000, 1 s for 4096 and 7 s for 16,384 on one core of a small server.

    part : "total", the notches times the sum of dry sound and bus; or "bus", the notches times the bus alone
    dry_gain, bus_gain : linear; see ``responses``. The gain at the input is the caller's
    Returns : Peak; (0, 0) for the bus of a preset without resonators
    """
    filters = tuple(filters)
    notches = _bank(filters, "notch", rate_hz, channel)
    resonators = _bank(filters, "resonator", rate_hz, channel)
    dry = dry_gain if part == "total" else 0.0
    if dry == 0.0 and resonators.omega.size == 0:
        return Peak(0.0, 0.0)

    def size(omega: np.ndarray, bus: Callable[[_Bank, np.ndarray], np.ndarray]) -> np.ndarray:
        return np.abs(_chain(notches, omega) * (dry + bus_gain * bus(resonators, omega)))

    grid = _grid(notches, resonators, rate_hz)
    values = size(grid, _bus_far_and_near)
    low, high = _brackets(grid, values)
    omega = _golden_section(lambda at: size(at, _bus), low, high)
    best = np.concatenate([grid[[int(np.argmax(values))]], omega])
    exact = size(best, _bus)
    top = int(np.argmax(exact))
    return Peak(float(exact[top]), float(best[top] * rate_hz / (2.0 * np.pi)))


def trim_gain(
    filters: Iterable[object], rate_hz: float, channels: int, input_gain: float, dry_gain: float, ceiling: float
) -> float:
    """Factor on the resonator bus, at most 1, with which no full-scale sine passes the ceiling on any channel.

    The dry sound takes its share of the room first; notches only cut. 0 when it leaves none.

    channels : how many channels there are
    input_gain, dry_gain, ceiling : linear
    """
    filters = tuple(filters)
    room = max(ceiling - input_gain * dry_gain, 0.0)
    most = sum(one.level(rate_hz) for one in filters if one.kind == "resonator" and one.enabled)
    if input_gain * most <= room:
        # not even if all of them rang in step
        return 1.0
    largest = max(
        steady_peak(filters, rate_hz, group[0], "bus").gain for group in channel_groups(filters, channels)
    )
    return min(1.0, room / (input_gain * largest)) if largest else 1.0


def telling_frequencies(filters: Iterable[object], rate_hz: float, channel: int = 0) -> np.ndarray:
    """Sorted frequencies [Hz], 0 to half the rate, between which the response does nothing unseen."""
    filters = tuple(filters)
    grid = _grid(_bank(filters, "notch", rate_hz, channel), _bank(filters, "resonator", rate_hz, channel), rate_hz)
    return np.minimum(grid * (rate_hz / (2.0 * np.pi)), rate_hz / 2.0)


def bus_limit_db(longest_decay_s: float, ceiling_db: float) -> float:
    """Permitted level of the resonator bus [dBFS]: the ceiling, less 3 dB for each doubling of the longest decay over 1 s.

    A struck resonator radiates energy in proportion to its decay: so long ringing radiates no more than short.
    """
    return ceiling_db - BUS_DB_PER_DOUBLING * math.log2(max(longest_decay_s / BUS_FREE_DECAY_S, 1.0))


def _bank(filters: Iterable[object], kind: str, rate_hz: float, channel: int) -> _Bank:
    used = [
        one for one in filters
        if one.kind == kind and one.enabled and (one.channels is None or channel in one.channels)
    ]
    sections = [one.section(rate_hz) for one in used]
    omega = np.array([section.omega for section in sections], dtype=np.float64)
    tangent = np.array([section.peak / (1.0 - section.peak) for section in sections], dtype=np.float64)
    level = np.array([one.level(rate_hz) for one in used], dtype=np.float64)
    order = np.argsort(omega, kind="stable")
    return _Bank(omega[order], tangent[order], level[order])


def _bandpass(bank: _Bank, omega: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Real and imaginary part of B of each section at each frequency, (sections, frequencies) float64.

    m is the product of sum and difference of sin(w/2) cos(w0/2) and cos(w/2) sin(w0/2), which rounds no worse
    than w itself does.
    """
    first = np.outer(np.cos(0.5 * bank.omega), np.sin(0.5 * omega))
    second = np.outer(np.sin(0.5 * bank.omega), np.cos(0.5 * omega))
    n, m = np.outer(bank.tangent, np.sin(omega)), 2.0 * (first + second) * (first - second)
    share = n / (n * n + m * m)
    return n * share, -m * share


def _pieces(sections: int, points: int) -> Iterable[slice]:
    """Cuts ``points`` so that sections times points stays within CHUNK_CELLS."""
    step = max(1, CHUNK_CELLS // max(sections, 1))
    return (slice(start, start + step) for start in range(0, points, step))


def _chain(bank: _Bank, omega: np.ndarray) -> np.ndarray:
    out = np.ones(omega.size, complex)
    for piece in _pieces(bank.omega.size, omega.size):
        real, imag = _bandpass(bank, omega[piece])
        out[piece] = np.prod(1.0 - bank.level[:, None] * (real + 1j * imag), axis=0)
    return out


def _bus(bank: _Bank, omega: np.ndarray) -> np.ndarray:
    """Summed by einsum and not by a matrix product, whose last bits may depend on how many threads it uses."""
    out = np.zeros(omega.size, complex)
    for piece in _pieces(bank.omega.size, omega.size):
        real, imag = _bandpass(bank, omega[piece])
        out[piece] = np.einsum("i,ij->j", bank.level, real) + 1j * np.einsum("i,ij->j", bank.level, imag)
    return out


def _bus_far_and_near(bank: _Bank, omega: np.ndarray) -> np.ndarray:
    """The bus at sorted frequencies, quickly: within 1e-10 of the sum of all levels.

    A group of neighbouring frequencies sees a far resonator only as a smooth skirt, so all far ones together are
    summed at a few Chebyshev nodes and interpolated; only the near ones are summed at every frequency. With poles
    at least _NEAR half spans from the group's middle the error falls as (3 + sqrt 8)^-nodes = 2e-11.
    """
    out = np.zeros(omega.size, complex)
    nodes = np.cos(np.pi * (np.arange(_NODES) + 0.5) / _NODES)
    fit = np.polynomial.chebyshev.chebvander(nodes, _NODES - 1).T * (2.0 / _NODES)
    fit[0] *= 0.5
    for start in range(0, omega.size, _GROUP_POINTS):
        piece = slice(start, start + _GROUP_POINTS)
        at = omega[piece]
        middle, half = 0.5 * (at[-1] + at[0]), 0.5 * (at[-1] - at[0])
        if half == 0.0:
            out[piece] = _bus(bank, at)
            continue
        low, high = np.searchsorted(bank.omega, [middle - _NEAR * half, middle + _NEAR * half])
        place = middle + half * nodes
        far = _bus(bank.part(slice(0, low)), place) + _bus(bank.part(slice(high, None)), place)
        smooth = np.polynomial.chebyshev.chebvander((at - middle) / half, _NODES - 1) @ (fit @ far)
        out[piece] = _bus(bank.part(slice(low, high)), at) + smooth
    return out


def _grid(notches: _Bank, resonators: _Bank, rate_hz: float) -> np.ndarray:
    """Sorted frequencies [rad/frame] on which no peak can hide between two points."""
    centres = np.concatenate([notches.omega, resonators.omega])
    halves = np.arctan(np.concatenate([notches.tangent, resonators.tangent]))
    around = np.concatenate([
        (centres[:, None] + sign * halves[:, None] * _OFFSETS).ravel() for sign in (-1.0, 1.0)
    ])
    sweep = np.geomspace(2.0 * np.pi * _LOWEST_HZ / rate_hz, np.pi, _SWEEP_POINTS)
    grid = np.unique(np.concatenate([[0.0, np.pi], sweep, around]))
    return grid[(grid >= 0.0) & (grid <= np.pi)]


def _brackets(grid: np.ndarray, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The spans about the local maxima that promise most, by the parabola through each and its neighbours."""
    a, b, c = values[:-2], values[1:-1], values[2:]
    left, right = grid[1:-1] - grid[:-2], grid[2:] - grid[1:-1]
    rise, fall = (b - a) / left, (b - c) / right
    bend = (rise + fall) / (left + right)
    slope = (rise * right - fall * left) / (left + right)
    promise = b + np.divide(slope**2, 4.0 * bend, out=np.zeros_like(b), where=bend > 0.0)
    places = np.flatnonzero((b >= a) & (b >= c))
    chosen = places[np.argsort(promise[places], kind="stable")[-_REFINED:]]
    return grid[chosen], grid[chosen + 2]


def _golden_section(size: Callable[[np.ndarray], np.ndarray], low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """Place of the maximum of ``size`` inside each span [low, high], all spans at once."""
    part = (math.sqrt(5.0) - 1.0) / 2.0
    low, high = low.copy(), high.copy()
    inner, outer = high - part * (high - low), low + part * (high - low)
    at_inner, at_outer = size(inner), size(outer)
    for _ in range(_REFINE_STEPS):
        left = at_inner > at_outer
        low, high = np.where(left, low, inner), np.where(left, outer, high)
        fresh = np.where(left, high - part * (high - low), low + part * (high - low))
        value = size(fresh)
        inner, outer = np.where(left, fresh, outer), np.where(left, inner, fresh)
        at_inner, at_outer = np.where(left, value, at_outer), np.where(left, at_inner, value)
    return 0.5 * (low + high)
