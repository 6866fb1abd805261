"""The fault maker plants what it says, where it says, and nothing else."""

from __future__ import annotations

import numpy as np
import pytest

from tools import faults

X = np.random.default_rng(5).uniform(-0.5, 0.5, (1000, 2)).astype(np.float32)


@pytest.mark.parametrize(
    ("planted", "changed"),
    [
        (faults.click(X, 300, 0.25), [(300, 0), (300, 1)]),
        (faults.click(X, 300, 0.25, channel=1), [(300, 1)]),
        (faults.not_a_number(X, 10, channel=0), [(10, 0)]),
        (faults.dc_step(X, 998, 0.25), [(998, 0), (998, 1), (999, 0), (999, 1)]),
        (faults.blank(X, 0, 1), [(0, 0), (0, 1)]),
    ],
)
def test_a_fault_in_place_changes_only_the_samples_it_names(planted, changed):
    """A meter is judged by what was planted, so a stray change would be blamed on the meter."""
    assert planted.dtype == X.dtype and planted.shape == X.shape
    assert [tuple(place) for place in np.argwhere(planted != X).tolist()] == changed


def test_the_heights_of_clicks_and_steps_are_those_asked_for():
    """Levels read by a meter are compared with these heights."""
    x = np.zeros(10)
    assert faults.click(x, 4, -0.25).tolist() == [0, 0, 0, 0, -0.25, 0, 0, 0, 0, 0]
    assert faults.dc_step(x, 8, 0.5).tolist() == [0, 0, 0, 0, 0, 0, 0, 0, 0.5, 0.5]


def test_cuts_repeats_and_insertions_move_the_rest_by_their_count():
    """Drop-out counting needs the planted count to be exact."""
    x = np.arange(8.0)
    assert faults.drop(x, 2, 3).tolist() == [0, 1, 5, 6, 7]
    assert faults.repeat(x, 4, 2).tolist() == [0, 1, 2, 3, 2, 3, 4, 5, 6, 7]
    assert faults.insert_silence(x, 1, 2).tolist() == [0, 0, 0, 1, 2, 3, 4, 5, 6, 7]


def test_an_added_tone_has_the_level_frequency_and_phase_asked_for():
    """A cosine of 1000 Hz at 8000 Hz has a period of 8 frames and starts at its phase."""
    y = faults.add_tone(np.zeros(16), 8000, 1000.0, -20.0, phase_rad=np.pi)
    root = np.sqrt(0.5)
    assert y == pytest.approx(0.1 * np.array([-1, -root, 0, root, 1, root, 0, -root] * 2), abs=1e-15)


@pytest.mark.parametrize(("frame", "count"), [(-1, 1), (999, 2), (1000, 1), (5, 0)])
def test_a_fault_outside_the_sound_is_refused(frame, count):
    """A fault that was never planted would make a blind meter look good."""
    message = (
        f"fault must lie inside the 1000 frames of the sound, got {count} frames from {frame}: move it or shorten it"
    )
    with pytest.raises(ValueError) as refusal:
        faults.drop(X, frame, count)
    assert str(refusal.value) == message


def test_the_fault_maker_leaves_the_sound_it_was_given_alone():
    """Tests plant several faults in one sound."""
    x = X.copy()
    for make in (faults.click, faults.dc_step):
        make(x, 10, 1.0)
    faults.blank(x, 10, 5)
    faults.drop(x, 10, 5)
    faults.repeat(x, 10, 5)
    faults.add_tone(x, 48000, 440.0, -6.0)
    assert np.array_equal(x, X)
