"""Pole pairs: conversions there and back, the ends of ranges, and the digits that are kept."""

import math

import mpmath
import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.signal import lfilter

from liveres import limits
from liveres.errors import ParameterError
from liveres.theory import poles

RATES = [8_000, 44_100, 48_000, 96_000, 192_000]
RATE_HZ = st.floats(8_000, 192_000)


def refusal(check, *arguments):
    """The message with which a check refuses."""
    with pytest.raises(ParameterError) as caught:
        check(*arguments)
    return str(caught.value)


# --- there and back ---------------------------------------------------------------------------


@given(st.floats(0.001, 60.0), RATE_HZ)
def test_a_decay_survives_the_way_to_a_radius_and_back(decay_s, rate_hz):
    """1 - R is 6.9/(fs T60), so a radius holds a decay to 1e-16 fs T60 / 6.9: 2e-10 at the worst."""
    radius = poles.radius_from_decay(decay_s, rate_hz)
    assert 0.0 < radius < 1.0
    assert poles.decay_from_radius(radius, rate_hz) == pytest.approx(decay_s, rel=2e-10)


@given(st.floats(1e-7, 0.2499), RATE_HZ)
def test_a_width_survives_the_way_to_a_radius_and_back(part, rate_hz):
    """A width under a quarter of the rate is one pole radius and no other."""
    radius = poles.radius_from_bandwidth(part * rate_hz, rate_hz)
    assert poles.bandwidth_from_radius(radius, rate_hz) == pytest.approx(part * rate_hz, rel=1e-9)


@given(st.floats(10.0, 94_080.0), st.floats(0.0005, 2.5))
def test_octaves_survive_the_way_to_hertz_and_back(centre_hz, octaves):
    """Both name the same two edges."""
    width_hz = poles.bandwidth_from_octaves(centre_hz, octaves)
    assert poles.octaves_from_bandwidth(centre_hz, width_hz) == pytest.approx(octaves, rel=1e-12)


@given(st.floats(10.0, 94_080.0), st.floats(0.0005, 2.5))
def test_a_band_in_octaves_has_its_centre_at_the_geometric_mean_of_its_edges(centre_hz, octaves):
    """Edges f0 2^(n/2) and f0 2^(-n/2): their ratio is the octaves, their difference the width."""
    high_hz, low_hz = centre_hz * 2 ** (octaves / 2), centre_hz * 2 ** (-octaves / 2)
    assert poles.bandwidth_from_octaves(centre_hz, octaves) == pytest.approx(high_hz - low_hz, rel=2e-11)


# --- what a section does ----------------------------------------------------------------------


def exact_section(centre_hz, decay_s, rate_hz):
    """Pole and numerator in fifty digits: the textbook equations, roots of the denominator and all."""
    radius = mpmath.exp(-mpmath.log(1000) / (mpmath.mpf(rate_hz) * mpmath.mpf(decay_s)))
    cosine = (1 + radius**2) / (2 * radius) * mpmath.cos(2 * mpmath.pi * mpmath.mpf(centre_hz) / rate_hz)
    pole = radius * mpmath.expj(mpmath.acos(cosine))
    return pole, (1 - radius**2) / 2


@pytest.mark.parametrize("rate_hz", RATES)
@pytest.mark.parametrize("centre_hz", [10.0, 20.0, 50.0, 440.0, 3000.0, 3919.0])
@pytest.mark.parametrize("decay_s", [0.25, 2.0, 20.0, 60.0])
def test_low_centres_at_high_rates_keep_their_digits(rate_hz, centre_hz, decay_s):
    """At 192 kHz a 10 Hz pole lies 3e-4 above the real axis: the plain difference of squares loses half its digits.

    What remains is that a radius near one is itself rounded, 1e-16 of 1 - R = 6.9/(fs T60).
    """
    with mpmath.workdps(50):
        pole, peak = exact_section(centre_hz, decay_s, rate_hz)
        section = poles.design_section(centre_hz, poles.radius_from_decay(decay_s, rate_hz), rate_hz)
        rounding = 2e-16 * rate_hz * decay_s / 6.9
        assert section.real == pytest.approx(float(pole.real), rel=4e-16)
        assert section.imag == pytest.approx(float(pole.imag), rel=1e-15 + 1e-3 * rounding)
        assert section.peak == pytest.approx(float(peak), rel=1e-15 + rounding)
        assert section.decay_rate == pytest.approx(float(-mpmath.log(abs(pole))), rel=1e-15 + rounding)
        assert section.omega == pytest.approx(2 * math.pi * centre_hz / rate_hz, rel=4e-16)


def gain_at(section, omega):
    """|B| on the unit circle, from the section's own coefficients in fifty digits."""
    b0, b1, b2, a1, a2 = map(mpmath.mpf, section.bandpass())
    z = mpmath.expj(-mpmath.mpf(omega))
    return float(abs((b0 + b1 * z + b2 * z**2) / (1 + a1 * z + a2 * z**2)))


@pytest.mark.parametrize("centre_hz, bandwidth_hz", [(50, 1), (440, 30), (1000, 800), (12_000, 11_000), (23_000, 500)])
def test_the_gain_is_one_at_the_centre_and_three_decibels_less_at_the_edges_of_the_width(centre_hz, bandwidth_hz):
    """Exact by design, not an approximation for narrow bands; edges found by bisection, not by formula."""
    section = poles.design_section(centre_hz, poles.radius_from_bandwidth(bandwidth_hz, 48_000), 48_000)
    with mpmath.workdps(50):
        assert gain_at(section, section.omega) == pytest.approx(1.0, abs=1e-11)
        assert gain_at(section, section.omega * 1.001) < 1.0 > gain_at(section, section.omega * 0.999)
        edges = []
        for far in (0.0, math.pi):
            near = section.omega
            for _ in range(60):
                middle = (near + far) / 2
                near, far = (middle, far) if gain_at(section, middle) > math.sqrt(0.5) else (near, middle)
            edges.append(near)
    assert (edges[1] - edges[0]) * 48_000 / (2 * math.pi) == pytest.approx(bandwidth_hz, rel=1e-9)


@pytest.mark.parametrize("cut", [0.0, 0.25, 0.9, 1.0])
def test_a_notch_is_one_minus_its_share_of_the_band_pass(cut):
    """Centre gain 1 - d, and exactly one at both ends of the band."""
    section = poles.design_section(1000.0, 0.995, 48_000)
    b0, b1, b2, a1, a2 = section.notch(cut)
    z = np.exp(-1j * np.array([0.0, section.omega, math.pi]))
    gains = np.abs((b0 + b1 * z + b2 * z**2) / (1 + a1 * z + a2 * z**2))
    assert gains == pytest.approx([1.0, 1.0 - cut, 1.0], abs=1e-12)


@pytest.mark.parametrize("centre_hz, radius", [(100.0, 0.9999), (440.0, 0.99), (5000.0, 0.8), (12_000.0, 0.3), (23_000.0, 0.999)])
def test_the_ring_gain_is_the_envelope_of_what_rings_after_a_unit_impulse(centre_hz, radius):
    """strike divides by it, so that a struck bar of any decay starts at the stated amplitude."""
    section = poles.design_section(centre_hz, radius, 48_000)
    b0, b1, b2, a1, a2 = section.bandpass()
    x = np.zeros(12)
    x[0] = 1.0
    h = lfilter([b0, b1, b2], [1.0, a1, a2], x)
    angle = math.atan2(section.imag, section.real)
    for n in range(1, 10):
        # one sample and the next give cosine and sine of the ringing, and so its amplitude
        quadrature = (h[n] * math.cos(angle) - h[n + 1] / radius) / math.sin(angle)
        assert math.hypot(h[n], quadrature) / radius**n == pytest.approx(section.ring_gain, rel=1e-9)


# --- ends of ranges ---------------------------------------------------------------------------


@pytest.mark.parametrize("rate_hz", RATES)
def test_the_longest_and_the_shortest_radius_are_permitted_and_nothing_beyond(rate_hz):
    """60 s at the one end, a pole that has forgotten everything at the other."""
    top = poles.radius_max(rate_hz)
    assert top == pytest.approx(math.exp(-math.log(1000.0) / (60.0 * rate_hz)), rel=1e-15)
    assert poles.design_section(1000.0, top, rate_hz).radius == pytest.approx(top, rel=1e-15)
    poles.check_radius("pole_radius", limits.RADIUS_MIN, rate_hz)
    for radius in (top + 2e-15, 1.0, 1.5, math.inf, math.nan, 0.0, -0.5, math.nextafter(limits.RADIUS_MIN, 0)):
        assert refusal(poles.design_section, rate_hz / 4, radius, rate_hz).startswith("pole_radius must be from 0.001 to 0.99")


@pytest.mark.parametrize(
    "radius, end",
    [
        (1.0, "got 1: lower it"),
        (1.5, "got 1.5: lower it"),
        (math.nan, "got nan: lower it"),
        (0.0005, "got 0.0005: raise it"),
        (-1.0, "got -1: raise it"),
    ],
)
def test_a_radius_outside_is_refused_with_the_bound_worked_out(radius, end):
    """At the rate at hand, and in seconds, which is what a user can hear."""
    assert refusal(poles.check_radius, "pole_radius", radius, 48_000) == (
        "pole_radius must be from 0.001 to 0.9999976015 (a decay of 60 s at rate_hz 48000; at 1 it would ring for ever), " + end
    )


def test_a_section_so_wide_that_its_poles_turn_real_is_refused():
    """Past Q 0.5 there is no pair left and nothing rings: never mis-designed, always said."""
    assert refusal(poles.design_section, 100.0, 0.98, 48_000) == (
        "bandwidth must be below 199.973 Hz at centre_hz 100 and rate_hz 48000 (Q 0.5, where the poles stop being a pair), "
        "got 308.591 Hz: narrow it or move the centre"
    )


@given(st.floats(10.0, 0.49 * 48_000))
def test_the_widest_section_at_a_centre_is_the_one_the_message_names(centre_hz):
    """Poles turn real at a width of fs/pi atan(sin w0); one part in 10,000 of sin(w0)^2 before it is the bound."""
    turning = 0.9999**0.5 * math.sin(2 * math.pi * centre_hz / 48_000)
    widest_hz = 48_000 / math.pi * math.atan(turning)
    section = poles.design_section(centre_hz, poles.radius_from_bandwidth(widest_hz * (1 - 1e-8), 48_000), 48_000)
    assert section.imag == pytest.approx(0.005 * (1 + section.radius**2) * math.sin(section.omega), rel=1e-3)
    over = poles.radius_from_bandwidth(widest_hz * (1 + 1e-8), 48_000)
    assert f"bandwidth must be below {widest_hz:.6g} Hz" in refusal(poles.design_section, centre_hz, over, 48_000)


@given(st.floats(10.0, 0.49 * 192_000), st.floats(0.001, 60.0), st.sampled_from(RATES))
def test_every_section_that_can_be_made_is_a_stable_pair(centre_hz, decay_s, rate_hz):
    """Inside the circle, off the real axis, with a peak between nothing and a half."""
    assume(centre_hz <= 0.49 * rate_hz)
    try:
        section = poles.design_section(centre_hz, poles.radius_from_decay(decay_s, rate_hz), rate_hz)
    except ParameterError as error:
        assert str(error).startswith("bandwidth must be below ")
        return
    assert math.hypot(section.real, section.imag) == pytest.approx(section.radius, rel=1e-14)
    assert 0.0 < section.radius < 1.0
    assert section.imag > 0.0
    assert 0.0 < section.peak < 0.5
    assert section.ring_gain > 0.0
