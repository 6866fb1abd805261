"""The true peak meter, against the values Recommendation ITU-R BS.1770-5, annex 2, implies."""

import numpy as np
import pytest

from liveres.theory.true_peak import PHASES, TruePeak


def true_peak(sound, block_frames=None):
    meter = TruePeak(sound.shape[1])
    for start in range(0, len(sound), block_frames or len(sound)):
        meter.feed(sound[start : start + (block_frames or len(sound))])
    return meter.finish()


def tone(frequency, phase=0.0, frames=20_000):
    """A sine of full scale, frequency in parts of the rate, faded at both ends, for an edge has a peak of its own."""
    fade = np.minimum(1.0, 10.0 * np.hanning(frames))
    return (fade * np.sin(2 * np.pi * frequency * np.arange(frames) + phase))[:, None]


def test_the_four_phases_have_the_sums_of_the_printed_table():
    """One digit wrong among 48 would show here; reckoned from the table, 1.001587 and 0.973022."""
    assert PHASES.sum(axis=1) == pytest.approx([1.001587, 0.973022, 0.973022, 1.001587], abs=5e-7)
    assert np.array_equal(PHASES[2:], PHASES[1::-1, ::-1])


def test_a_peak_between_the_samples_is_found():
    """A quarter of the rate at 45 degrees: every sample is 3.01 dB down, the curve through them is not; +0.045 dB reckoned."""
    sound = tone(0.25, np.pi / 4)
    assert 20 * np.log10(np.max(np.abs(sound))) == pytest.approx(-3.0103, abs=0.001)
    assert 20 * np.log10(true_peak(sound)) == pytest.approx(0.045, abs=0.005)


def test_the_reading_near_half_the_rate_is_low_by_what_four_points_a_frame_miss():
    """At 0.45 of the rate the filter reads -0.42 dB: known, stated, not hidden."""
    assert 20 * np.log10(true_peak(tone(0.45))) == pytest.approx(-0.42, abs=0.02)


@pytest.mark.parametrize("block_frames", [1, 5, 11, 12, 1000])
def test_the_reading_does_not_depend_on_the_blocks(block_frames):
    """It looks back over eleven frames, whatever was fed when."""
    sound = np.random.default_rng(0).uniform(-1, 1, (2000, 2))
    assert true_peak(sound, block_frames) == true_peak(sound)


def test_the_loudest_channel_counts():
    """One clipped channel is enough to distort."""
    sound = np.hstack([0.1 * tone(0.01), 0.7 * tone(0.01)])
    assert true_peak(sound) == pytest.approx(0.7, rel=0.003)


def test_the_last_samples_are_heard_to_their_end():
    """A peak in the last frame only shows after it."""
    sound = np.zeros((100, 1))
    sound[-1] = 0.5
    assert true_peak(sound) == pytest.approx(0.5 * np.max(np.abs(PHASES)), rel=1e-12)


def test_samples_that_are_not_finite_count_as_zero():
    """A meter must not be poisoned for the rest of the take."""
    sound = 0.5 * tone(0.01)
    sound[1000:1003, 0] = np.nan, np.inf, -np.inf
    assert 0.49 < true_peak(sound) < 0.75
    assert true_peak(np.zeros((10, 1))) == 0.0
