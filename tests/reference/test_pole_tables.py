"""Sections against printed figures: pole radii, widths, the cookbook notch, what mistuning leaves of a notch.

Sources are named beside each table. "Computed" figures were worked out from the stated formula with other code than
this project's and are only as good as that formula.
"""

import math

import numpy as np
import pytest
from scipy.signal import freqz, lfilter

from liveres.engine.processor import Processor
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.theory import poles

RATE_HZ = 48_000

# --- radius, decay, bandwidth, Q --------------------------------------------------------------


def test_440_hertz_ringing_one_second_has_its_published_radius_width_and_q():
    """Q = f0/B = pi f0 T60/ln 1000 and B = 2.19881/T60.

    Source: R = exp(-pi B/fs), J. O. Smith, Introduction to Digital Filters, "Resonator Bandwidth in Terms of Pole
    Radius"; figures computed. The first radius is exp(-ln 1000/fs), the second that of the exact width ln 1000/pi: they
    differ by as little as the two definitions of width do.
    """
    assert Resonator("a4", 440.0, 0.0, decay_s=1.0).radius(RATE_HZ) == pytest.approx(0.9998560987864609, abs=2e-16)
    one = Resonator("a4", 440.0, 0.0, bandwidth_hz=math.log(1000.0) / math.pi)
    assert one.bandwidth_hz == pytest.approx(2.19881, abs=5e-6)
    assert one.radius(RATE_HZ) == pytest.approx(0.9998560987848, abs=5e-13)
    assert Resonator("a4", 440.0, 0.0, q=200.109).radius(RATE_HZ) == pytest.approx(0.9998560987848, abs=5e-10)
    assert poles.decay_from_radius(one.radius(RATE_HZ), RATE_HZ) == pytest.approx(1.0, rel=2e-8)


def test_a_width_of_one_hertz_rings_2_2_seconds():
    """Same source: R .99993455229484 at 48 kHz."""
    radius = Resonator("r", 440.0, 0.0, bandwidth_hz=1.0).radius(RATE_HZ)
    assert radius == pytest.approx(0.99993455229484, abs=5e-13)
    assert poles.decay_from_radius(radius, RATE_HZ) == pytest.approx(2.19881, abs=5e-6)


def test_a_radius_of_0_9999_rings_1_439_seconds():
    """6.908/(1e-4 * 48000), computed; long tails need the radius to be right in its last digits."""
    assert poles.decay_from_radius(0.9999, RATE_HZ) == pytest.approx(1.439, abs=5e-4)


@pytest.mark.parametrize(
    "octaves, q", [(1 / 3, 4.318), (1 / 6, 8.651), (1 / 10, 14.424), (1 / 20, 28.852), (1 / 60, 86.561)]
)
def test_a_fraction_of_an_octave_is_its_published_q(octaves, q):
    """Q = 2^(n/2)/(2^n - 1). Source: van Waterschoot & Moonen, Fifty Years of Acoustic Feedback Control, Proc. IEEE 2011."""
    by_octaves = Notch("n", 1000.0, -6.0, bandwidth_oct=octaves).radius(RATE_HZ)
    by_q = Notch("n", 1000.0, -6.0, q=q).radius(RATE_HZ)
    assert 1.0 - by_octaves == pytest.approx(1.0 - by_q, rel=0.001 / q)


@pytest.mark.parametrize(
    "centre_hz, octaves, decay_s", [(1000.0, 1 / 10, 0.032), (1000.0, 1 / 60, 0.190), (100.0, 1 / 60, 1.90)]
)
def test_a_notch_rings_as_long_as_its_width_says(centre_hz, octaves, decay_s):
    """T60 = 2.199/B, computed: why a sixtieth of an octave is no width for a low live notch."""
    radius = Notch("n", centre_hz, -6.0, bandwidth_oct=octaves).radius(RATE_HZ)
    assert poles.decay_from_radius(radius, RATE_HZ) == pytest.approx(decay_s, rel=0.01)


# --- the constant-peak-gain resonator ---------------------------------------------------------


@pytest.mark.parametrize(
    "radius, angle, peak_omega, width, digits", [(0.99, 0.3, 0.300163, 0.0200993, 5e-8), (0.5, 1.2, 1.276688, 1.080839, 5e-7)]
)
def test_the_peak_lies_off_the_pole_angle_and_the_width_is_exact(radius, angle, peak_omega, width, digits):
    """cos w_pk = 2R/(1+R^2) cos th, width 2 atan((1-R^2)/(1+R^2)); -2 ln R would be 28 % off at R = .5.

    Source: Smith & Angell 1982, Steiglitz 1994, as given in J. O. Smith, "Constant Peak-Gain Resonator"; computed.
    """
    section = poles.design_section(peak_omega * RATE_HZ / (2 * math.pi), radius, RATE_HZ)
    assert math.atan2(section.imag, section.real) == pytest.approx(angle, abs=2e-6)
    assert poles.bandwidth_from_radius(radius, RATE_HZ) * 2 * math.pi / RATE_HZ == pytest.approx(width, abs=digits)

    b0, b1, b2, a1, a2 = section.bandpass()
    omega = np.linspace(peak_omega - 0.01, peak_omega + 0.01, 20_001)
    gains = np.abs(freqz([b0, b1, b2], [1.0, a1, a2], omega)[1])
    assert np.max(gains) == pytest.approx(1.0, abs=1e-12)
    assert omega[np.argmax(gains)] == pytest.approx(peak_omega, abs=1.1e-6)


def test_white_noise_loses_what_the_radius_says():
    """Sum of h^2 is (1-R^2)/2, .00995 for R = .99. Same source; computed."""
    b0, b1, b2, a1, a2 = poles.design_section(2292.0, 0.99, RATE_HZ).bandpass()
    impulse = np.zeros(4096)
    impulse[0] = 1.0
    assert np.sum(lfilter([b0, b1, b2], [1.0, a1, a2], impulse) ** 2) == pytest.approx(0.00995, abs=5e-7)


# --- the cookbook notch -----------------------------------------------------------------------


def cookbook_width_hz(centre_hz, q):
    """Exact -3 dB width of the notch of the Audio EQ Cookbook (from memory): fs/pi atan(al), al = sin w0/(2 Q)."""
    return RATE_HZ / math.pi * math.atan(math.sin(2 * math.pi * centre_hz / RATE_HZ) / (2 * q))


def test_the_cookbook_notch_of_1_kilohertz_q_30_comes_out_coefficient_by_coefficient():
    """Its Q is not ours (ours is centre over width), so it is met by its width. Figures computed."""
    width_hz = cookbook_width_hz(1000.0, 30.0)
    assert width_hz == pytest.approx(33.2382, abs=5e-5)
    section = Notch("n", 1000.0, -math.inf, bandwidth_hz=width_hz).section(RATE_HZ)
    b0, b1, b2, a1, a2 = section.notch(1.0)
    assert [b0, a1, a2] == pytest.approx([0.99782928571, -1.97858543570, 0.99565857143], abs=5e-12)
    assert [b1, b2] == pytest.approx([a1, b0], abs=1e-15)
    edges = freqz([b0, b1, b2], [1.0, a1, a2], np.array([983.518, 1016.756]), fs=RATE_HZ)[1]
    assert 20 * np.log10(np.abs(edges)) == pytest.approx([-3.0103, -3.0103], abs=2e-4)


def test_a_cookbook_q_of_5_at_10_kilohertz_is_a_quarter_narrower_than_it_says():
    """1471.26 Hz and not 2000: the reason our Q goes by the exact width. Figures computed."""
    assert cookbook_width_hz(10_000.0, 5.0) == pytest.approx(1471.26, abs=5e-3)
    ours = poles.bandwidth_from_radius(Notch("n", 10_000.0, -6.0, q=5.0).radius(RATE_HZ), RATE_HZ)
    assert ours == pytest.approx(2000.0, rel=1e-12)


# --- a notch beside the howl ------------------------------------------------------------------


@pytest.mark.parametrize(
    "off, depth_db", [(0.5, 3.01), (0.25, 6.99), (0.1, 14.15), (0.05, 20.04), (0.02, 27.97), (0.01, 33.98)]
)
def test_a_null_tuned_beside_the_tone_reaches_its_published_depth(off, depth_db):
    """10 log10(1 + (B/2d)^2) at d off the centre, for a null B wide: why howls must be measured to a fraction of B.

    Source: the ideal notch; figures computed and checked on a digital one.
    """
    bandwidth_hz = 10.0
    section = Notch("n", 1000.0, -math.inf, bandwidth_hz=bandwidth_hz).section(RATE_HZ)
    b0, b1, b2, a1, a2 = section.notch(1.0)
    at = 1000.0 + np.array([-off, off]) * bandwidth_hz
    gains = np.abs(freqz([b0, b1, b2], [1.0, a1, a2], at, fs=RATE_HZ)[1])
    assert -20 * np.log10(gains) == pytest.approx([depth_db] * 2, abs=0.05)


# --- what moving does to a plain direct form --------------------------------------------------

SWITCHES = [
    # radius, two angles taken by turns, frames between, growth of the plain form [dB/frame]; computed
    (0.9, (0.3, 1.5), 3, 20 * math.log10(1.1500)),
    (0.9999, (2 * math.pi * 100 / RATE_HZ, 2 * math.pi * 200 / RATE_HZ), 76, 1577 / RATE_HZ),
]


@pytest.mark.parametrize("radius, angles, frames, growth_db", SWITCHES)
def test_a_plain_direct_form_grows_where_ours_decays(radius, angles, frames, growth_db):
    """A pole radius below one is not enough once it moves; carrying the ringing makes it enough.

    The plain form's growth is the spectral radius of one turn's state matrix. Ours falls by R every frame, whatever
    the angle, as the rotation form does: its matrix has norm R (Laroche 2007, from memory).
    """
    turn = np.eye(2)
    for angle in angles:
        plain = np.array([[2 * radius * math.cos(angle), -(radius**2)], [1.0, 0.0]])
        turn = np.linalg.matrix_power(plain, frames) @ turn
    grown_db = 20 * math.log10(np.max(np.abs(np.linalg.eigvals(turn)))) / (2 * frames)
    assert grown_db == pytest.approx(growth_db, rel=1e-3)

    centres_hz = [math.acos(2 * radius * math.cos(angle) / (1 + radius**2)) * RATE_HZ / (2 * math.pi) for angle in angles]
    one = Resonator("r", centres_hz[0], 0.0, pole_radius=radius)
    engine = Processor(Preset([one], dry_db=-math.inf, ceiling_db=0.0), RATE_HZ, channels=1)
    engine.process(np.eye(3, 1))
    heard = []
    for number in range(600 // frames if radius < 0.99 else 48_000 // frames):
        engine.retune("r", centre_hz=centres_hz[number % 2], ramp_s=0.0)
        heard.append(engine.process(np.zeros((frames, 1))))
    heard = np.abs(np.concatenate(heard)[:, 0])
    envelope = one.section(RATE_HZ).ring_gain * radius ** np.arange(3, 3 + len(heard))
    assert np.max(heard / envelope) == pytest.approx(1.0, abs=0.01)
    assert np.max(heard[-2 * frames :] / envelope[-2 * frames :]) > 0.5
