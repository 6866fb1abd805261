"""Sections and responses against SciPy's own designs, and against arithmetic of fifty digits."""

import math

import mpmath
import numpy as np
import pytest
import scipy.signal

from liveres.engine.settings import Notch, Resonator
from liveres.theory import response
from liveres.units import gain_from_db

RATE_HZ = 48_000
CASES = [(50.0, 5.0), (440.0, 2.5), (1000.0, 33.3), (6300.0, 440.0), (15_000.0, 6000.0), (23_000.0, 100.0)]
# centre and -3 dB width [Hz]


@pytest.mark.parametrize("centre_hz, width_hz", CASES)
def test_a_resonator_is_scipys_iirpeak(centre_hz, width_hz):
    """iirpeak takes its Q from an exact -3 dB width, as bandwidth_hz does; designed from other equations."""
    b, a = scipy.signal.iirpeak(centre_hz, centre_hz / width_hz, fs=RATE_HZ)
    one = Resonator("r", centre_hz, 0.0, bandwidth_hz=width_hz)
    assert response.sos([one], RATE_HZ)[0] == pytest.approx([*b, *a], abs=1e-9)
    at = np.linspace(1.0, RATE_HZ / 2 - 1, 5000)
    expected = scipy.signal.freqz(b, a, at, fs=RATE_HZ)[1]
    assert np.max(np.abs(response.responses([one], RATE_HZ, at).bus - expected)) < 1e-9


@pytest.mark.parametrize("centre_hz, width_hz", CASES)
def test_a_null_is_scipys_iirnotch(centre_hz, width_hz):
    """iirnotch is the null of an exact -3 dB width."""
    b, a = scipy.signal.iirnotch(centre_hz, centre_hz / width_hz, fs=RATE_HZ)
    one = Notch("n", centre_hz, -math.inf, bandwidth_hz=width_hz)
    assert response.sos([one], RATE_HZ)[0] == pytest.approx([*b, *a], abs=1e-9)
    at = np.linspace(1.0, RATE_HZ / 2 - 1, 5000)
    expected = scipy.signal.freqz(b, a, at, fs=RATE_HZ)[1]
    assert np.max(np.abs(response.responses([one], RATE_HZ, at).notches - expected)) < 1e-9


def test_the_path_is_scipys_sections_in_series_times_dry_plus_its_peaks_in_parallel():
    """The whole preset, built a second time from iirpeak and sosfreqz alone."""
    depths_db = [-3.0, -12.0, -40.0, -math.inf]
    notches = [Notch(f"n{i}", c, d, bandwidth_hz=w) for i, ((c, w), d) in enumerate(zip(CASES, depths_db, strict=False))]
    resonators = [Resonator(f"r{i}", c * 1.01, -6.0 * i, bandwidth_hz=w) for i, (c, w) in enumerate(CASES)]
    at = np.concatenate([np.linspace(1.0, RATE_HZ / 2 - 1, 5000), [c for c, _ in CASES]])

    rows = []
    for (centre_hz, width_hz), depth_db in zip(CASES, depths_db, strict=False):
        b, a = scipy.signal.iirpeak(centre_hz, centre_hz / width_hz, fs=RATE_HZ)
        rows.append([*(a - (1.0 - gain_from_db(depth_db)) * b), *a])
    chain = scipy.signal.sosfreqz(np.array(rows), at, fs=RATE_HZ)[1]
    bus = sum(
        gain_from_db(-6.0 * i) * scipy.signal.freqz(*scipy.signal.iirpeak(c * 1.01, c * 1.01 / w, fs=RATE_HZ), at, fs=RATE_HZ)[1]
        for i, (c, w) in enumerate(CASES)
    )
    found = response.responses([*notches, *resonators], RATE_HZ, at, input_gain=0.5, dry_gain=0.25, bus_gain=0.75)
    assert np.max(np.abs(found.notches - chain)) < 1e-9
    assert np.max(np.abs(found.bus - bus)) < 1e-9
    assert np.max(np.abs(found.total - 0.5 * chain * (0.25 + 0.75 * bus))) < 1e-9
    assert np.max(np.abs(scipy.signal.sosfreqz(response.sos(notches, RATE_HZ), at, fs=RATE_HZ)[1] - chain)) < 1e-9


@pytest.mark.parametrize("rate_hz, centre_hz", [(192_000, 10.0), (192_000, 94_000.0), (8_000, 10.0), (48_000, 1000.0)])
def test_the_longest_decay_keeps_its_response_to_a_hundred_millionth(rate_hz, centre_hz):
    """With a pole 4e-7 from the circle the polynomials lose seven digits; fifty-digit arithmetic does not."""
    one = Resonator("r", centre_hz, 0.0, decay_s=60.0)
    with mpmath.workdps(50):
        radius = mpmath.exp(-mpmath.log(1000) / (mpmath.mpf(rate_hz) * 60))
        cosine = mpmath.cos(2 * mpmath.pi * mpmath.mpf(centre_hz) / rate_hz)
        half_hz = float(rate_hz / mpmath.pi * mpmath.atan((1 - radius**2) / (1 + radius**2)) / 2)
        for offset in (-30.0, -1.0, -0.1, 0.0, 0.1, 1.0, 30.0):
            at = centre_hz + offset * half_hz
            z = mpmath.expjpi(-2 * mpmath.mpf(at) / rate_hz)
            exact = (1 - radius**2) / 2 * (1 - z**2) / (1 - (1 + radius**2) * cosine * z + radius**2 * z**2)
            found = response.responses([one], rate_hz, [at]).bus[0]
            assert abs(found - complex(exact)) < 1e-8
