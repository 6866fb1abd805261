"""The steady response, against direct evaluation of the polynomials and brute force."""

import math
import tracemalloc

import numpy as np
import pytest

from liveres.engine.settings import Notch, Preset, Resonator
from liveres.theory import response
from liveres.units import gain_from_db

RATE_HZ = 48_000


def polynomial_gain(filters, rate_hz, frequencies_hz, dry=1.0):
    """The whole path by its polynomials in z, independently of the form the package uses."""
    z = np.exp(-2j * np.pi * np.asarray(frequencies_hz) / rate_hz)
    notches, bus = np.ones(z.size, complex), np.zeros(z.size, complex)
    for one in filters:
        b0, b1, b2, a1, a2 = one.section(rate_hz).bandpass()
        band = (b0 + b1 * z + b2 * z**2) / (1.0 + a1 * z + a2 * z**2)
        if one.kind == "notch":
            notches *= 1.0 - one.level(rate_hz) * band
        else:
            bus += one.level(rate_hz) * band
    return notches * (dry + bus)


def random_filters(seed, notches=6, resonators=14):
    rng = np.random.default_rng(seed)
    centres = np.exp(rng.uniform(np.log(40), np.log(20_000), notches + resonators))
    made = [
        Notch(f"n{i}", float(centres[i]), float(-rng.uniform(1, 60)), bandwidth_oct=float(rng.uniform(0.02, 0.5)))
        for i in range(notches)
    ]
    made += [
        Resonator(f"r{i}", float(centres[notches + i]), float(rng.uniform(-30, 6)), decay_s=float(rng.uniform(0.2, 8)))
        for i in range(resonators)
    ]
    return made


def test_responses_equal_the_polynomials_evaluated_on_the_circle():
    """The cancellation-free form must be the same filter, not a similar one."""
    filters = random_filters(1)
    at = np.concatenate([np.linspace(0, RATE_HZ / 2, 4001), [one.centre_hz for one in filters]])
    found = response.responses(filters, RATE_HZ, at)
    assert np.max(np.abs(found.total - polynomial_gain(filters, RATE_HZ, at))) < 1e-8
    assert np.allclose(found.total, found.notches * (1.0 + found.bus), rtol=0, atol=1e-15)


@pytest.mark.parametrize("seed", range(8))
def test_no_point_of_a_dense_grid_lies_above_the_steady_peak(seed):
    """A missed narrow peak would make the shown worst case, and the trim built on it, a lie."""
    filters = random_filters(seed)
    halves = [one.section(RATE_HZ).decay_rate * RATE_HZ / (2 * np.pi) for one in filters]
    near = [one.centre_hz + half * np.linspace(-12, 12, 4001) for one, half in zip(filters, halves, strict=True)]
    at = np.concatenate([np.linspace(0, RATE_HZ / 2, 200_001), *near])
    at = at[(at >= 0) & (at <= RATE_HZ / 2)]
    for part, dry in (("total", 1.0), ("bus", 0.0)):
        peak = response.steady_peak(filters, RATE_HZ, 0, part)
        brute = np.max(np.abs(polynomial_gain(filters, RATE_HZ, at, dry)))
        assert peak.gain >= brute * (1 - 1e-7)
        # and it is a gain the preset has, at the frequency named
        assert abs(polynomial_gain(filters, RATE_HZ, [peak.frequency_hz], dry)[0]) == pytest.approx(peak.gain, rel=1e-7)


@pytest.mark.parametrize("rate_hz, centre_hz", [(8_000, 10.0), (48_000, 440.0), (192_000, 10.0), (192_000, 94_000.0)])
def test_the_narrowest_resonator_there_can_be_is_found_at_its_centre(rate_hz, centre_hz):
    """60 s of decay are 0.04 Hz of width: a plain sweep would step over it a thousand times."""
    peak = response.steady_peak([Resonator("r", centre_hz, 12.0, decay_s=60.0)], rate_hz)
    assert peak.gain == pytest.approx(1.0 + gain_from_db(12.0), rel=1e-9)
    assert peak.frequency_hz == pytest.approx(centre_hz, abs=1e-4)


def test_a_notch_in_the_middle_of_a_resonator_leaves_the_higher_shoulder():
    """The largest gain is then at neither centre."""
    filters = [Resonator("r", 1000.0, 6.0, q=20.0), Notch("n", 1000.0, -math.inf, q=60.0)]
    at = np.linspace(900, 1100, 400_001)
    brute = np.abs(polynomial_gain(filters, RATE_HZ, at, 0.0))
    peak = response.steady_peak(filters, RATE_HZ, part="bus")
    assert peak.gain == pytest.approx(brute.max(), rel=1e-9)
    assert abs(peak.frequency_hz - 1000.0) > 5.0


def test_two_resonators_nearer_than_their_width_peak_between_them():
    """Adding the two peaks would say too much, taking the larger too little."""
    filters = [Resonator("a", 1000.0, 0.0, bandwidth_hz=10.0), Resonator("b", 1003.0, 0.0, bandwidth_hz=10.0)]
    peak = response.steady_peak(filters, RATE_HZ, part="bus")
    at = np.linspace(990, 1013, 200_001)
    assert peak.gain == pytest.approx(np.abs(polynomial_gain(filters, RATE_HZ, at, 0.0)).max(), rel=1e-9)
    assert 1000.5 < peak.frequency_hz < 1002.5


def test_a_bank_without_resonators_has_no_bus_peak():
    """The trim divides by it."""
    assert response.steady_peak([Notch("n", 100.0, -6.0, q=1)], RATE_HZ, part="bus") == (0.0, 0.0)


def test_only_enabled_filters_of_the_channel_count():
    """Each loudspeaker has its own worst case."""
    filters = [
        Resonator("both", 500.0, 0.0, decay_s=1.0),
        Resonator("left", 900.0, 6.0, decay_s=1.0, channels=[0]),
        Resonator("off", 2000.0, 20.0, decay_s=1.0, enabled=False),
    ]
    assert response.steady_peak(filters, RATE_HZ, 0, "bus").frequency_hz == pytest.approx(900.0, abs=0.01)
    assert response.steady_peak(filters, RATE_HZ, 1, "bus").frequency_hz == pytest.approx(500.0, abs=0.01)


def test_channels_that_pass_the_same_filters_form_one_group():
    """What is the same is reckoned once."""
    filters = [
        Notch("a", 100.0, -6.0, q=2),
        Notch("b", 200.0, -6.0, q=2, channels=[1, 3]),
        Notch("c", 300.0, -6.0, q=2, channels=[3]),
    ]
    assert response.channel_groups(filters, 5) == [(0, 2, 4), (1,), (3,)]
    assert response.channel_groups([], 3) == [(0, 1, 2)]


@pytest.mark.parametrize("depth_db", [-120.0, -20.0, -0.5, 0.0, -math.inf])
@pytest.mark.parametrize("centre_hz, width", [(50.0, {"q": 10.0}), (1000.0, {"decay_s": 2.0}), (15_000.0, {"q": 2.0})])
def test_poles_and_zeros_of_a_notch_are_the_roots_of_its_polynomials(depth_db, centre_hz, width):
    """The plane that is drawn must be the filter that runs."""
    one = Notch("n", centre_hz, depth_db, **width)
    poles, zeros = response.poles_and_zeros(one, RATE_HZ)
    b0, b1, b2, a1, a2 = one.section(RATE_HZ).notch(one.level(RATE_HZ))
    # roots of a polynomial lose half the digits where two of them nearly meet
    assert np.allclose(sorted(poles, key=np.imag), sorted(np.roots([1.0, a1, a2]), key=np.imag), atol=1e-9)
    assert np.allclose(sorted(zeros, key=np.imag), sorted(np.roots([b0, b1, b2]), key=np.imag), atol=1e-9)
    assert poles[0].imag > 0 and zeros[0].imag > 0


def test_zeros_of_a_null_lie_on_the_unit_circle_at_the_centre():
    """That is what a null is."""
    _, zeros = response.poles_and_zeros(Notch("n", 1234.5, -math.inf, q=30.0), RATE_HZ)
    assert abs(zeros[0]) == pytest.approx(1.0, abs=1e-15)
    assert np.angle(zeros[0]) * RATE_HZ / (2 * np.pi) == pytest.approx(1234.5, abs=1e-9)


def test_zeros_of_a_resonator_are_plus_and_minus_one():
    """It passes neither a constant nor half the sample rate."""
    one = Resonator("r", 100.0, 0.0, q=3)
    assert response.poles_and_zeros(one, RATE_HZ)[1].tolist() == [1.0, -1.0]
    assert response.responses([one], RATE_HZ, [0.0, RATE_HZ / 2]).bus == pytest.approx([0.0, 0.0], abs=1e-15)


def test_the_chain_has_the_poles_and_zeros_of_its_enabled_notches():
    """A bypassed notch is as if it were not there."""
    filters = [
        Notch("a", 100.0, -6.0, q=2), Notch("off", 200.0, -6.0, q=2, enabled=False), Resonator("r", 300.0, 0.0, q=9),
        Notch("b", 400.0, -6.0, q=2),
    ]
    poles, zeros = response.chain_poles_and_zeros(filters, RATE_HZ)
    assert poles.size == zeros.size == 4
    assert poles[0] == response.poles_and_zeros(filters[0], RATE_HZ)[0][0]
    assert response.chain_poles_and_zeros([], RATE_HZ)[0].size == 0


def test_sections_stand_in_the_order_of_the_filters_with_their_levels():
    """Rows are matched with names by their place."""
    filters = random_filters(3, 2, 2)
    table = response.sos(filters, RATE_HZ)
    assert table.shape == (4, 6) and np.all(table[:, 3] == 1.0)
    b0, b1, b2, a1, a2 = filters[0].section(RATE_HZ).notch(filters[0].level(RATE_HZ))
    assert table[0].tolist() == [b0, b1, b2, 1.0, a1, a2]
    assert table[2, 0] == filters[2].level(RATE_HZ) * filters[2].section(RATE_HZ).peak
    assert response.sos([], RATE_HZ).shape == (0, 6)


def test_trim_brings_the_largest_steady_gain_to_the_ceiling_and_no_further():
    """No full-scale sine passes, and no loudness is given away without need."""
    filters = [Resonator("a", 500.0, 12.0, decay_s=1.0), Resonator("b", 501.0, 12.0, decay_s=1.0), Notch("n", 90.0, -9.0, q=3)]
    ceiling, dry = gain_from_db(-1.0), gain_from_db(-20.0)
    gain = response.trim_gain(filters, RATE_HZ, 2, 1.0, dry, ceiling)
    assert 0.0 < gain < 1.0
    peak = response.steady_peak(filters, RATE_HZ, 0, "total", dry, gain)
    assert 0.9 * ceiling < peak.gain <= ceiling * (1 + 1e-9)
    alone = response.trim_gain(filters, RATE_HZ, 2, 2.0, 0.0, ceiling)
    assert 2.0 * response.steady_peak(filters, RATE_HZ, 0, "bus", bus_gain=alone).gain == pytest.approx(ceiling, rel=1e-9)


def test_trim_looks_at_the_loudest_channel():
    """One factor serves all channels."""
    filters = [Resonator("a", 500.0, 0.0, decay_s=1.0), Resonator("b", 900.0, 20.0, decay_s=1.0, channels=[1])]
    assert response.trim_gain(filters, RATE_HZ, 2, 1.0, 0.0, 1.0) == pytest.approx(0.1, rel=1e-3)
    assert response.trim_gain(filters, RATE_HZ, 1, 1.0, 0.0, 1.0) == 1.0


def test_trim_leaves_alone_what_fits_and_closes_what_has_no_room():
    """The dry sound is served first."""
    filters = [Resonator("a", 500.0, -40.0, decay_s=1.0)]
    assert response.trim_gain(filters, RATE_HZ, 1, 1.0, 0.5, 0.9) == 1.0
    assert response.trim_gain(filters, RATE_HZ, 1, 1.0, 1.0, 0.9) == 0.0
    assert response.trim_gain([], RATE_HZ, 1, 1.0, 1.0, 0.9) == 1.0


@pytest.mark.parametrize("decay_s, limit_db", [(0.1, -1.0), (1.0, -1.0), (2.0, -4.0), (8.0, -10.0)])
def test_the_bus_limit_falls_three_decibels_a_doubling_beyond_a_second(decay_s, limit_db):
    """A struck resonator radiates energy in proportion to its decay."""
    assert response.bus_limit_db(decay_s, -1.0) == pytest.approx(limit_db, abs=1e-9)


def test_longest_decay_is_that_of_the_enabled_filter_that_rings_longest():
    """It is shown, and sets the bus limit."""
    filters = [Notch("n", 100.0, -6.0, decay_s=3.0), Resonator("off", 500.0, 0.0, decay_s=9.0, enabled=False)]
    assert response.longest_decay_s(filters, RATE_HZ) == pytest.approx(3.0)
    assert response.longest_decay_s([], RATE_HZ) == 0.0


def test_thousands_of_resonators_keep_to_bounded_memory_and_to_the_plain_sum():
    """The quick sum over far and near resonators must not be a different one."""
    rng = np.random.default_rng(5)
    filters = Preset([
        Resonator(f"r{i}", float(centre_hz), -20.0, decay_s=float(rng.uniform(0.2, 20)))
        for i, centre_hz in enumerate(np.exp(rng.uniform(np.log(30), np.log(22_000), 2000)))
    ]).filters
    tracemalloc.start()
    peak = response.steady_peak(filters, RATE_HZ, part="bus")
    _, most_bytes = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert most_bytes < 60e6
    at = np.sort(np.concatenate([rng.uniform(1, RATE_HZ / 2, 3000), [peak.frequency_hz]]))
    exact = polynomial_gain(filters, RATE_HZ, at, 0.0)
    assert np.max(np.abs(response.responses(filters, RATE_HZ, at).bus - exact)) < 1e-7
    assert np.max(np.abs(exact)) <= peak.gain * (1 + 1e-9)


def test_telling_frequencies_are_sorted_and_hold_every_centre():
    """A picture drawn through them shows every peak and dip."""
    filters = random_filters(2)
    at = response.telling_frequencies(filters, RATE_HZ)
    assert np.all(np.diff(at) > 0) and at[0] == 0.0 and at[-1] == RATE_HZ / 2
    assert all(np.min(np.abs(at - one.centre_hz)) < 1e-6 for one in filters)
