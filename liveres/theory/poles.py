"""One conjugate pole pair: exact conversions between its descriptions, and the section it makes.

    B(z) = (1 - R^2)/2 (1 - z^-2) / (1 - 2 R cos(theta) z^-1 + R^2 z^-2)

Peak gain exactly 1 at the centre w0 [rad/frame], where cos(w0) = 2 R cos(theta) / (1 + R^2).
A resonator is g B(z); a notch is 1 - d B(z), whose gain at the centre is 1 - d.

Letters: R pole radius, theta pole angle, w0 centre, fs sample rate, t = tan(pi B / fs) for a -3 dB width B [Hz].
Source: the constant-peak-gain resonator (Smith & Angell 1982; Steiglitz 1994); widths by the bilinear
transform of an analogue resonance, tan(width/2) = (1 - R^2)/(1 + R^2).
Thread: any.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from liveres.errors import ParameterError
from liveres.limits import DECAY_S, RADIUS_MIN

LN_1000 = math.log(1000.0)
# 60 dB in nepers
PAIR_MARGIN = 1e-4
# how far, as a share of sin(w0)^2, the poles must be from turning real: closer, a moving pair loses its digits


def radius_from_decay(decay_s: float, rate_hz: float) -> float:
    """Pole radius whose ringing falls 60 dB in ``decay_s``: R = exp(-ln 1000 / (fs T60))."""
    return math.exp(-LN_1000 / (rate_hz * decay_s))


def decay_from_radius(radius: float, rate_hz: float) -> float:
    """Time [s] for the ringing to fall 60 dB: T60 = ln 1000 / (-fs ln R)."""
    return LN_1000 / (-rate_hz * math.log(radius))


def radius_from_bandwidth(bandwidth_hz: float, rate_hz: float) -> float:
    """Pole radius of an exact -3 dB width: R^2 = (1 - t)/(1 + t); needs a width under a quarter of the rate."""
    t = math.tan(math.pi * bandwidth_hz / rate_hz)
    return math.sqrt((1.0 - t) / (1.0 + t))


def bandwidth_from_radius(radius: float, rate_hz: float) -> float:
    """Exact -3 dB width [Hz]: fs/pi atan((1 - R^2)/(1 + R^2))."""
    return rate_hz / math.pi * math.atan((1.0 - radius**2) / (1.0 + radius**2))


def bandwidth_from_octaves(centre_hz: float, bandwidth_oct: float) -> float:
    """Width [Hz] of a band ``bandwidth_oct`` wide with edges at equal ratios: f0 (2^(n/2) - 2^(-n/2)).

    >>> round(1000.0 / bandwidth_from_octaves(1000.0, 1 / 3), 3)
    4.318
    """
    return centre_hz * 2.0 * math.sinh(bandwidth_oct * math.log(2.0) / 2.0)


def octaves_from_bandwidth(centre_hz: float, bandwidth_hz: float) -> float:
    """Width in octaves of a band of ``bandwidth_hz`` about ``centre_hz``; inverse of bandwidth_from_octaves."""
    return 2.0 / math.log(2.0) * math.asinh(bandwidth_hz / (2.0 * centre_hz))


@dataclass(frozen=True)
class Section:
    """A designed pole pair.

    omega : centre [rad/frame], open (0, pi)
    decay_rate : -ln R [neper/frame], above 0
    real, imag : the pole R e^(j theta), imag above 0
    peak : (1 - R^2)/2, the numerator of B
    """

    omega: float
    decay_rate: float
    real: float
    imag: float
    peak: float

    @property
    def radius(self) -> float:
        """Pole radius."""
        return math.exp(-self.decay_rate)

    @property
    def ring_gain(self) -> float:
        """Envelope at frame 0 of what B rings after a unit impulse: peak |p^2 - 1| / (R Im p).

        Twice the residue of B at its upper pole p, by partial fractions.
        """
        pole = complex(self.real, self.imag)
        return self.peak * abs(pole * pole - 1.0) / (self.radius * self.imag)

    def bandpass(self) -> tuple[float, float, float, float, float]:
        """b0 b1 b2 a1 a2 of B(z), with a0 = 1."""
        return self.peak, 0.0, -self.peak, -2.0 * self.real, self.real**2 + self.imag**2

    def notch(self, cut: float) -> tuple[float, float, float, float, float]:
        """b0 b1 b2 a1 a2 of 1 - d B(z), with a0 = 1; ``cut`` d is 1 - centre gain, 0 to 1."""
        b0, _, b2, a1, a2 = self.bandpass()
        return 1.0 - cut * b0, a1, a2 - cut * b2, a1, a2


def design_section(centre_hz: float, radius: float, rate_hz: float) -> Section:
    """Pole pair of radius ``radius`` whose band-pass peaks exactly at ``centre_hz``.

    R cos(theta) = (1 + R^2)/2 cos(w0);  R sin(theta) = sqrt(R^2 - (R cos(theta))^2), the difference
    taken as ((1 + R^2)^2 sin(w0)^2 - (1 - R^2)^2)/4 so that low centres lose no digits.

    centre_hz : float [Hz], open (0, rate_hz/2)
    radius : float, closed [RADIUS_MIN, that of the longest decay]; at 1 it would ring for ever, which is refused
    Raises : ParameterError - radius outside its range; so wide that the poles turn real (Q about 0.5)
    """
    check_radius("pole_radius", radius, rate_hz)
    omega = 2.0 * math.pi * centre_hz / rate_hz
    decay_rate = -math.log(radius)
    one_minus = -math.expm1(-2.0 * decay_rate)
    one_plus = 2.0 - one_minus
    square = (one_plus * math.sin(omega)) ** 2 - one_minus**2
    if not square > PAIR_MARGIN * (one_plus * math.sin(omega)) ** 2:
        widest_hz = rate_hz / math.pi * math.atan(math.sqrt(1.0 - PAIR_MARGIN) * math.sin(omega))
        raise ParameterError(
            f"bandwidth must be below {widest_hz:.6g} Hz at centre_hz {centre_hz:.12g} and rate_hz {rate_hz:.12g} "
            f"(Q 0.5, where the poles stop being a pair), got {bandwidth_from_radius(radius, rate_hz):.6g} Hz: "
            "narrow it or move the centre"
        )
    return Section(omega, decay_rate, 0.5 * one_plus * math.cos(omega), 0.5 * math.sqrt(square), 0.5 * one_minus)


def radius_max(rate_hz: float) -> float:
    """Largest permitted pole radius at this rate: the one of the longest permitted decay."""
    return radius_from_decay(DECAY_S.high, rate_hz)


def check_radius(name: str, radius: float, rate_hz: float) -> None:
    """ParameterError unless RADIUS_MIN <= radius <= radius_max(rate_hz), with room for rounding."""
    top = radius_max(rate_hz)
    if not RADIUS_MIN <= radius <= top * (1.0 + 1e-15):
        raise ParameterError(
            f"{name} must be from {RADIUS_MIN:g} to {top:.10f} (a decay of {DECAY_S.high:g} s at rate_hz {rate_hz:.12g}; "
            f"at 1 it would ring for ever), got {radius:.12g}: "
            + ("raise it" if radius < RADIUS_MIN else "lower it")
        )
