"""Decibels, notes and cents.

Notes are in equal temperament about a reference A4 (ISO 16: 440 Hz); A4 is MIDI note 69.
"""

from __future__ import annotations

import math
import re

from liveres.errors import ParameterError

A4_HZ = 440.0
# ISO 16:1975, standard tuning frequency
_NAMES = ("C", "C#", "D", "D#", "E", "F", "F#", "G", "G#", "A", "A#", "B")
_STEPS = {"C": 0, "D": 2, "E": 4, "F": 5, "G": 7, "A": 9, "B": 11}
_NOTE = re.compile(r"([A-Ga-g])([#b]?)(-?\d{1,2})([+-]\d+(?:\.\d+)?c)?")


def gain_from_db(level_db: float) -> float:
    """Linear gain of a level: 10^(dB/20); -inf dB is exactly 0.

    >>> gain_from_db(-20.0)
    0.1
    """
    return 0.0 if level_db == -math.inf else 10.0 ** (level_db / 20.0)


def db_from_gain(gain: float) -> float:
    """Level of a linear gain's magnitude: 20 log10 |gain|; 0 is -inf dB.

    >>> db_from_gain(0.1)
    -20.0
    """
    return -math.inf if gain == 0 else 20.0 * math.log10(abs(gain))


def cents_between(from_hz: float, to_hz: float) -> float:
    """Interval in cents: 1200 log2(to/from); positive upward.

    >>> cents_between(440.0, 880.0)
    1200.0
    """
    return 1200.0 * math.log2(to_hz / from_hz)


def shift_cents(centre_hz: float, cents: float) -> float:
    """Frequency that lies ``cents`` above ``centre_hz`` (below, when negative).

    >>> shift_cents(440.0, -1200.0)
    220.0
    """
    return centre_hz * 2.0 ** (cents / 1200.0)


def hz_from_note(note: str, a4_hz: float = A4_HZ) -> float:
    """Frequency of a note name with octave, and cents if wanted: ``C4``, ``F#3``, ``Bb2-14c``.

    Raises : ParameterError - the text is not a note name
    >>> round(hz_from_note("C4"), 3)
    261.626
    """
    match = _NOTE.fullmatch(note.strip())
    if match is None:
        raise ParameterError(
            f"note must be a letter A to G, an optional # or b, and an octave, got {note!r}: write it like C4, F#3 or Bb2-14c"
        )
    letter, accidental, octave, cents = match.groups()
    step = _STEPS[letter.upper()] + {"#": 1, "b": -1, "": 0}[accidental]
    semitones = step + 12 * (int(octave) + 1) - 69
    return a4_hz * 2.0 ** ((semitones + float((cents or "0c")[:-1]) / 100.0) / 12.0)


def note_from_hz(frequency_hz: float, a4_hz: float = A4_HZ) -> tuple[str, float]:
    """Nearest note name and how far above it the frequency lies [cents, -50 to 50].

    >>> note_from_hz(440.0)
    ('A4', 0.0)
    """
    exact = 69.0 + 12.0 * math.log2(frequency_hz / a4_hz)
    number = round(exact)
    return f"{_NAMES[number % 12]}{number // 12 - 1}", 100.0 * (exact - number)
