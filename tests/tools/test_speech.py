"""The spoken passage that liveres carries is fit for tests and demonstrations."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import soundfile

import liveres
from tools import meters

SPEECH = Path(liveres.__file__).parent / "data" / "speech.flac"


def test_the_passage_is_short_mono_16_bit_at_48_khz_and_small():
    """It travels with every installation."""
    info = soundfile.info(SPEECH)
    assert (info.format, info.subtype, info.samplerate, info.channels) == ("FLAC", "PCM_16", 48_000, 1)
    assert 12.0 <= info.duration <= 15.0 and SPEECH.stat().st_size < 600_000


def test_the_passage_peaks_at_minus_6_db_and_is_nowhere_digital_silence():
    """Head-room for gain, and pauses as a hall has them: a detector must not be tried on zeros alone."""
    speech = soundfile.read(SPEECH)[0]
    assert abs(meters.level_db(speech).peak_db + 6.0) < 0.01
    pieces = speech[: len(speech) // 4800 * 4800].reshape(-1, 4800)
    quietest_db = min(meters.level_db(piece).rms_db for piece in pieces)
    assert -78.0 < quietest_db < -68.0
    assert np.count_nonzero([meters.level_db(piece).rms_db < -60.0 for piece in pieces]) > 20
    # more than 2 s of pauses, in pieces of 0.1 s
