"""Decibels, cents and note names."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from liveres.errors import ParameterError
from liveres.units import A4_HZ, cents_between, db_from_gain, gain_from_db, hz_from_note, note_from_hz, shift_cents

FREQUENCIES = st.floats(1.0, 96_000.0)

# --- decibels ---------------------------------------------------------------------------------

LEVELS = [
    # twenty times the common logarithm, worked out with 25-digit arithmetic
    (-120.0, 1e-6),
    (-20.0, 0.1),
    (-6.0, 0.5011872336272722),
    (-3.0, 0.7079457843841379),
    (0.0, 1.0),
    (6.020599913279624, 2.0),
    (24.0, 15.848931924611133),
]


@pytest.mark.parametrize("level_db, gain", LEVELS)
def test_a_level_and_a_gain_are_the_same_thing_written_twice(level_db, gain):
    """Every gain in the engine has come through here."""
    assert gain_from_db(level_db) == pytest.approx(gain, rel=4e-16)
    assert db_from_gain(gain) == pytest.approx(level_db, abs=2e-14)


@given(st.floats(-400.0, 400.0))
def test_a_level_survives_the_way_to_a_gain_and_back(level_db):
    """A setting must read back as it was given."""
    assert db_from_gain(gain_from_db(level_db)) == pytest.approx(level_db, abs=2e-13)


def test_no_sound_is_minus_infinity_and_exactly_nothing():
    """A null and a dry path left out must be exact zeros, not very small numbers."""
    assert gain_from_db(-math.inf) == 0.0
    assert db_from_gain(0.0) == db_from_gain(-0.0) == -math.inf


def test_a_gain_that_turns_the_sign_has_the_level_of_its_magnitude():
    """Polarity is not level."""
    assert db_from_gain(-0.1) == db_from_gain(0.1) == -20.0


# --- cents ------------------------------------------------------------------------------------

INTERVALS = [
    # pure intervals, published in every table of intervals; the last from 1200 log2(215/200) = 125.204
    (2 / 1, 1200.0),
    (3 / 2, 701.9550008654),
    (4 / 3, 498.0449991346),
    (5 / 4, 386.3137138648),
    (6 / 5, 315.6412870006),
    (215 / 200, 125.2040),
    (1 / 2, -1200.0),
    (1 / 1, 0.0),
]


@pytest.mark.parametrize("ratio, cents", INTERVALS)
def test_intervals_have_their_published_size_in_cents(ratio, cents):
    """Bells and chords are tuned in cents."""
    assert cents_between(200.0, 200.0 * ratio) == pytest.approx(cents, abs=5e-5)
    assert shift_cents(200.0, cents) == pytest.approx(200.0 * ratio, rel=1e-7)


@given(FREQUENCIES, st.floats(-12_000.0, 12_000.0))
def test_a_shift_is_undone_by_measuring_it(centre_hz, cents):
    """The two must agree, or a tuning drifts with every edit."""
    assert cents_between(centre_hz, shift_cents(centre_hz, cents)) == pytest.approx(cents, abs=1e-9)


# --- notes ------------------------------------------------------------------------------------

NOTES = [
    # equal temperament about A4 = 440 Hz (ISO 16), as printed in tables of MIDI note frequencies
    ("C-1", 8.1758),
    ("A0", 27.5),
    ("E2", 82.4069),
    ("C4", 261.6256),
    ("A4", 440.0),
    ("F#5", 739.9888),
    ("C8", 4186.0090),
    ("G9", 12543.8540),
]


@pytest.mark.parametrize("note, frequency_hz", NOTES)
def test_notes_have_their_published_frequencies(note, frequency_hz):
    """A player gives notes, not hertz."""
    assert hz_from_note(note) == pytest.approx(frequency_hz, abs=5e-5)
    name, cents = note_from_hz(frequency_hz)
    assert (name, cents) == (note, pytest.approx(0.0, abs=0.02))


@pytest.mark.parametrize("one, other", [("C#4", "Db4"), ("B#3", "C4"), ("Cb4", "B3"), ("E#1", "F1"), ("Fb1", "E1")])
def test_enharmonic_names_are_one_frequency(one, other):
    """The octave number belongs to the letter, so B sharp 3 is C4 and C flat 4 is B3."""
    assert hz_from_note(one) == hz_from_note(other)


@pytest.mark.parametrize("written", ["a4", " A4 ", "A4+0c", "a4-0c", "A4+0.0c"])
def test_small_letters_blanks_and_no_cents_change_nothing(written):
    """What is typed in a hurry is understood."""
    assert hz_from_note(written) == 440.0


def test_a_flat_b_is_told_from_the_note_b():
    """The letter b comes first and the accidental second, so bb2 is B flat."""
    assert hz_from_note("bb2") == hz_from_note("A#2")
    assert hz_from_note("b2") == hz_from_note("Cb3")


@pytest.mark.parametrize("written, cents", [("Bb2-14c", -14.0), ("Bb2+50c", 50.0), ("Bb2+0.5c", 0.5), ("Bb2-1200c", -1200.0)])
def test_cents_after_a_note_are_added_to_it(written, cents):
    """Measured bells are written as a note and what it is off by."""
    assert cents_between(hz_from_note("Bb2"), hz_from_note(written)) == pytest.approx(cents, abs=1e-9)


def test_another_reference_moves_every_note_by_its_ratio():
    """Old pitch: A4 at 415 Hz."""
    assert hz_from_note("A4", 415.0) == 415.0
    assert hz_from_note("C4", 415.0) == pytest.approx(261.6255653 * 415 / 440, rel=1e-9)
    assert note_from_hz(415.0, 415.0) == ("A4", 0.0)


@pytest.mark.parametrize("text", ["", "A", "H4", "4A", "A##4", "A4+5", "A4 +50c", "A444", "A4.5", "A4c", "A--1", "A4+.5c", "440"])
def test_what_is_no_note_is_refused(text):
    """A guess would tune a bank to something nobody asked for."""
    with pytest.raises(ParameterError) as caught:
        hz_from_note(text)
    assert str(caught.value) == (
        f"note must be a letter A to G, an optional # or b, and an octave, got {text!r}: write it like C4, F#3 or Bb2-14c"
    )


@pytest.mark.parametrize("number", range(128))
def test_every_note_number_has_a_name_that_leads_back(number):
    """All 128 MIDI notes, C-1 to G9, come back as themselves."""
    frequency_hz = A4_HZ * 2.0 ** ((number - 69) / 12)
    name, cents = note_from_hz(frequency_hz)
    assert abs(cents) < 1e-10
    assert hz_from_note(name) == pytest.approx(frequency_hz, rel=1e-14)


@given(FREQUENCIES)
def test_a_frequency_is_its_nearest_note_and_what_lies_between(frequency_hz):
    """Never more than half a semitone off, or it would not be the nearest."""
    name, cents = note_from_hz(frequency_hz)
    assert -50.0 <= cents <= 50.0
    assert shift_cents(hz_from_note(name), cents) == pytest.approx(frequency_hz, rel=1e-13)
