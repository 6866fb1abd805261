"""The meters find what was planted, at its place and level, and stay silent otherwise."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
import soundfile

import liveres
from tools import faults, meters
from tools.listen import kept_on_failure

RATE_HZ = 48_000
T = np.arange(RATE_HZ) / RATE_HZ
TONE_300 = np.sin(2 * np.pi * 300 * T)
SWEEP = 0.9 * np.sin(2 * np.pi * 20 / math.log(1000) * (np.exp(T * math.log(1000)) - 1))
# 20 Hz to 20 kHz in a second
CHORD = sum(0.2 * np.sin(2 * np.pi * f * T) for f in (220.0, 277.18, 329.63, 5000.0))
NOISE = np.random.default_rng(11).uniform(-1, 1, (20_000, 2)).astype(np.float32)


def spoken() -> np.ndarray:
    """The passage that liveres carries."""
    return soundfile.read(Path(liveres.__file__).parent / "data" / "speech.flac")[0]


# --- splatter ---------------------------------------------------------------------------------


@pytest.mark.parametrize("phase_rad", [0.0, 1.0, math.pi / 2])
def test_the_splatter_of_a_pure_tone_is_below_140_db_wherever_the_buffer_cuts_it(phase_rad):
    """The meter must not hear the cut ends of the buffer, or no quiet move could be told from a loud one."""
    assert meters.splatter_db(np.cos(2 * np.pi * 300 * T + phase_rad), RATE_HZ) < -140


def test_splatter_reads_a_planted_tone_above_its_edge_at_its_level():
    """A figure in dBFS must be one."""
    for frequency_hz in (5000.0, 5100.0, 8000.0, 20000.0):
        y = faults.add_tone(TONE_300, RATE_HZ, frequency_hz, -90.0)
        assert meters.splatter_db(y, RATE_HZ) == pytest.approx(-90, abs=0.05)


def test_splatter_leaves_out_what_lies_below_its_edge():
    """A full-scale tone below the edge would otherwise drown the click."""
    assert meters.splatter_db(np.sin(2 * np.pi * 4500 * T), RATE_HZ) < -140


@pytest.mark.parametrize("height_db", [-20.0, -80.0, -120.0])
def test_splatter_reads_a_single_bad_sample_as_the_share_of_the_band_above_the_edge(height_db):
    """A click spreads evenly to half the rate; the filter's middle lies at 4750 Hz, so 1 - 2 * 4750/48000 of it is left."""
    y = faults.click(TONE_300, 24_000, 10 ** (height_db / 20))
    assert meters.splatter_db(y, RATE_HZ) == pytest.approx(height_db + 20 * math.log10(1 - 2 * 4750 / 48_000), abs=0.02)


def test_splatter_of_a_notch_engaged_over_10_ms_is_the_figure_of_the_design():
    """A notch on the tone it sits on is a change of gain, here to -24 dB in 480 frames; the design names -87 dBFS for it."""
    depth = (1 - 10 ** (-24 / 20)) * np.clip((np.arange(RATE_HZ) - RATE_HZ // 2) / 480, 0, 1)
    assert meters.splatter_db(TONE_300 * (1 - depth), RATE_HZ) == pytest.approx(-87, abs=0.5)


def test_splatter_is_that_of_the_worst_channel_and_silence_has_none():
    """A click in one channel must not be averaged away."""
    both = np.stack([TONE_300, faults.click(TONE_300, 24_000, 0.01)], axis=1)
    assert meters.splatter_db(both, RATE_HZ) == meters.splatter_db(both[:, 1], RATE_HZ)
    assert meters.splatter_db(np.zeros(RATE_HZ), RATE_HZ) == -math.inf


# --- clicks -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "sound",
    [
        TONE_300,
        TONE_300.astype(np.float32),
        np.round(TONE_300 * 32767) / 32768,
        np.sin(2 * np.pi * 12 * T),
        0.9 * np.sin(2 * np.pi * 15_000 * T),
        SWEEP,
        CHORD,
        np.sin(2 * np.pi * 440 * T) * 10 ** (-3 * T / 0.3),
        TONE_300 * (1 + 0.9 * np.sin(2 * np.pi * 7 * T)) / 2,
        np.random.default_rng(3).standard_normal(RATE_HZ) * 0.2,
        np.zeros(RATE_HZ),
    ],
    ids=["tone", "float32", "16 bit", "12 Hz", "15 kHz", "sweep", "chord", "ringing", "tremolo", "noise", "silence"],
)
def test_no_clicks_are_found_in_clean_sound(sound):
    """A meter that cries wolf gets its threshold raised until it is deaf."""
    assert meters.find_clicks(sound, RATE_HZ).tolist() == []


def test_no_clicks_are_found_in_clean_speech():
    """Speech is full of sharp edges that are no faults."""
    assert meters.find_clicks(spoken(), RATE_HZ).tolist() == []


@pytest.mark.parametrize("height", [0.5, 1e-3, -1e-4])
@pytest.mark.parametrize("sound", [TONE_300, TONE_300.astype(np.float32)], ids=["float64", "float32"])
def test_a_bad_sample_and_a_step_are_found_at_their_frame_down_to_minus_80_db(sound, height):
    """The place of a click says which block or which move made it."""
    assert meters.find_clicks(faults.click(sound, 20_000, height), RATE_HZ).tolist() == [20_000]
    assert meters.find_clicks(faults.dc_step(sound, 20_001, height), RATE_HZ).tolist() == [20_001]


@pytest.mark.parametrize("count", [1, 5, 37, 64])
@pytest.mark.parametrize("sound", [TONE_300, SWEEP, CHORD], ids=["tone", "sweep", "chord"])
def test_dropped_and_repeated_stretches_are_found_at_their_frame(sound, count):
    """Lost and doubled blocks are the commonest fault of a live stream."""
    assert meters.find_clicks(faults.drop(sound, 20_003, count), RATE_HZ).tolist() == [20_003]
    assert meters.find_clicks(faults.repeat(sound, 20_003, count), RATE_HZ).tolist() == [20_003]


def test_clicks_of_minus_30_db_are_found_in_speech():
    """Clicks matter in the sound people listen to, not only under tones."""
    planted = list(range(60_000, 660_000, 40_000))
    y = spoken()
    for frame in planted:
        y = faults.click(y, frame, 10 ** (-30 / 20))
    assert meters.find_clicks(y, RATE_HZ).tolist() == planted


def test_several_clicks_in_several_channels_are_each_found_once():
    """One fault must count as one, and none may hide another."""
    y = np.stack([TONE_300, CHORD], axis=1)
    for frame, channel in ((5000, 0), (5100, 1), (30_000, 0), (30_000, 1), (47_000, 1)):
        y = faults.click(y, frame, 0.01, channel)
    assert meters.find_clicks(y, RATE_HZ).tolist() == [5000, 5100, 30_000, 47_000]


def test_clicks_are_found_at_other_rates():
    """The windows are in seconds."""
    for rate_hz in (8000, 44_100, 96_000):
        y = np.sin(2 * np.pi * 300 * np.arange(rate_hz) / rate_hz)
        assert meters.find_clicks(y, rate_hz).tolist() == []
        assert meters.find_clicks(faults.click(y, 4000, 0.001), rate_hz).tolist() == [4000]


# --- level and true peak ----------------------------------------------------------------------


def test_levels_are_those_of_a_sine_and_of_silence():
    """Full scale is 1.0: a full-scale sine peaks at 0 dBFS and has an RMS of -3.01 dBFS."""
    level = meters.level_db(0.1 * np.stack([TONE_300, 0.5 * TONE_300], axis=1))
    assert (level.rms_db, level.peak_db) == pytest.approx((-20 - 10 * math.log10(2), -20), abs=1e-3)
    assert meters.level_db(np.zeros(10)) == meters.Level(-math.inf, -math.inf)


def test_the_true_peak_filter_has_the_sums_of_the_published_table():
    """Source: ITU-R BS.1770-5, annex 2, table of coefficients; a mistyped coefficient would show here."""
    assert meters.TRUE_PEAK_TAPS.sum(axis=1) == pytest.approx([1.001587, 0.973022, 0.973022, 1.001587], abs=5e-7)


@pytest.mark.parametrize(
    ("part_of_rate", "phase_rad", "sample_peak_db", "true_peak_db"),
    [(0.25, math.pi / 4, -3.0103, 0.045), (0.45, 0.0, 0.0, -0.42)],
)
def test_true_peak_of_a_sine_is_what_the_published_filter_gives(part_of_rate, phase_rad, sample_peak_db, true_peak_db):
    """Source: computed from the coefficients of ITU-R BS.1770-5, annex 2; at 0.45 of the rate the filter reads low."""
    edge = np.clip(np.minimum(np.arange(RATE_HZ), np.arange(RATE_HZ)[::-1]) / 4800, 0, 1)
    y = np.sin(2 * np.pi * part_of_rate * np.arange(RATE_HZ) + phase_rad) * np.sin(0.5 * np.pi * edge) ** 2
    assert meters.level_db(y).peak_db == pytest.approx(sample_peak_db, abs=1e-3)
    assert meters.true_peak_db(y) == pytest.approx(true_peak_db, abs=0.02)


# --- tone -------------------------------------------------------------------------------------


@pytest.mark.parametrize("frequency_hz", [20.0, 55.51, 1000.1234, 20_000.7])
@pytest.mark.parametrize("phase_rad", [0.0, 1.0, -3.0])
def test_the_frequency_level_and_phase_of_a_tone_are_found_to_ten_digits(frequency_hz, phase_rad):
    """Centres and gains are measured with it; an offset must not disturb it."""
    y = faults.add_tone(np.full(RATE_HZ // 2, 0.1), RATE_HZ, frequency_hz, -9.0, phase_rad)
    found = meters.tone(y, RATE_HZ)
    assert found.frequency_hz == pytest.approx(frequency_hz, rel=1e-10)
    assert found.level_db == pytest.approx(-9.0, abs=1e-9)
    assert found.phase_rad == pytest.approx(phase_rad, abs=1e-9)
    assert found.rest_db < -180


def test_the_tone_in_noise_is_found_as_well_as_theory_permits():
    """Source: Cramer-Rao bound, Rife and Boorstyn 1974 (from memory): 0.0808 Hz at 48 kHz, 1024 frames, 20 dB."""
    random = np.random.default_rng(17)
    sigma = math.sqrt(0.5 / 100)
    errors = []
    for _ in range(300):
        phase_rad = random.uniform(-3, 3)
        clean = np.cos(2 * np.pi * 5003.0 / RATE_HZ * np.arange(1024) + phase_rad)
        errors.append(meters.tone(clean + sigma * random.standard_normal(1024), RATE_HZ).frequency_hz - 5003.0)
    # the spread of 300 errors is itself known to 4 %; 15 % is more than three times that
    assert math.sqrt(np.mean(np.square(errors))) == pytest.approx(0.0808, rel=0.15)


def test_the_strongest_of_two_tones_is_found_and_the_other_is_the_rest():
    """A howl over music, a harmonic over a fundamental."""
    y = faults.add_tone(faults.add_tone(np.zeros(RATE_HZ), RATE_HZ, 3000.0, -6.0), RATE_HZ, 440.0, -26.0)
    found = meters.tone(y, RATE_HZ)
    assert (found.frequency_hz, found.level_db) == pytest.approx((3000.0, -6.0), abs=1e-3)
    assert found.rest_db == pytest.approx(-26 - 10 * math.log10(2), abs=1e-3)


@pytest.mark.parametrize("sound", [np.zeros(1000), np.sin(2 * np.pi * 300 * T[:400]), np.zeros((1000, 2))])
def test_a_tone_is_refused_in_silence_in_fewer_than_four_periods_and_in_two_channels(sound):
    """A figure made of nothing would pass for a measurement."""
    with pytest.raises(ValueError, match="tone needs"):
        meters.tone(sound, RATE_HZ)


# --- decay ------------------------------------------------------------------------------------


@pytest.mark.parametrize("decay_s", [0.1, 1.0, 5.0])
def test_the_decay_of_a_ringing_tone_is_found_within_half_a_percent(decay_s):
    """Source of the tolerance: ISO 3382, synthetic exponential (from memory)."""
    t = np.arange(round(1.1 * decay_s * RATE_HZ)) / RATE_HZ
    assert meters.decay_s(np.sin(2 * np.pi * 440 * t) * 10 ** (-3 * t / decay_s), RATE_HZ) == pytest.approx(decay_s, rel=0.005)


def test_the_decay_over_a_shorter_range_needs_a_shorter_record():
    """A resonator of 20 s need not be run for 20 s."""
    t = np.arange(round(0.75 * RATE_HZ)) / RATE_HZ
    y = np.sin(2 * np.pi * 440 * t) * 10 ** (-3 * t)
    assert meters.decay_s(y, RATE_HZ, to_db=-15.0) == pytest.approx(1.0, rel=0.005)
    with pytest.raises(ValueError, match="last tenth must lie below -55 dB of the whole"):
        meters.decay_s(y, RATE_HZ)


def test_the_decay_is_refused_when_noise_bends_the_line():
    """A noise floor 40 dB down would make every decay look longer."""
    noisy = 10 ** (-3 * T) * TONE_300 + 0.01 * np.random.default_rng(2).standard_normal(RATE_HZ)
    with pytest.raises(ValueError, match="last tenth"):
        meters.decay_s(noisy, RATE_HZ)


# --- two recordings ---------------------------------------------------------------------------


def delayed(x: np.ndarray, lag: int = 1536) -> np.ndarray:
    """What a loop through a sound system records: latency, the sound, and silence."""
    return np.concatenate([np.zeros((lag, 2), np.float32), x, np.zeros((1000, 2), np.float32)])


def test_an_exact_recording_is_called_exact_and_its_lag_found():
    """The proof of every live path rests on this."""
    match = meters.dropped_frames(NOISE, delayed(NOISE))
    assert match.exact and match.lag_frames == 1536
    assert meters.dropped_frames(NOISE, NOISE).lag_frames == 0


def test_one_sample_off_by_the_last_digit_is_not_exact():
    """Bit for bit means the last bit."""
    y = delayed(NOISE)
    y[1536 + 777, 1] = np.nextafter(y[1536 + 777, 1], np.float32(2))
    match = meters.dropped_frames(NOISE, y)
    assert not match.exact and match.differing.tolist() == [777]
    assert meters.dropped_frames(NOISE, y, tolerance=1e-6).exact


@pytest.mark.parametrize("frame", [40, 7000, 19_900])
@pytest.mark.parametrize("count", [1, 64, 999])
def test_gaps_repeats_and_insertions_are_told_apart_and_counted(frame, count):
    """Lost input, doubled output and inserted silence have different causes."""
    lost = min(count, len(NOISE) - frame - 50)
    gap = meters.dropped_frames(NOISE, delayed(faults.drop(NOISE, frame, lost)))
    assert (gap.gaps, gap.repeats, gap.inserted, gap.differing.tolist()) == (((frame, lost),), (), (), [])
    silence = meters.dropped_frames(NOISE, delayed(faults.insert_silence(NOISE, frame, count)))
    assert (silence.gaps, silence.repeats, silence.inserted, silence.differing.tolist()) == ((), (), ((frame, count),), [])
    doubled = min(count, frame - meters.MATCH_FRAMES)
    again = meters.dropped_frames(NOISE, delayed(faults.repeat(NOISE, frame, doubled)))
    assert (again.gaps, again.repeats, again.inserted, again.differing.tolist()) == ((), ((frame, doubled),), (), [])


def test_frames_lost_in_place_are_counted_where_they_are():
    """A driver that plays silence for a lost block keeps the rest in its place."""
    match = meters.dropped_frames(NOISE, delayed(faults.blank(NOISE, 5000, 64)))
    assert match.differing.tolist() == list(range(5000, 5064))
    assert (match.lag_frames, match.gaps, match.repeats, match.inserted) == (1536, (), (), ())


def test_a_recording_that_starts_late_or_stops_early_has_a_gap_there():
    """The first and the last block are the ones most often lost."""
    late = meters.dropped_frames(NOISE, NOISE[300:])
    assert (late.lag_frames, late.gaps) == (-300, ((0, 300),))
    early = meters.dropped_frames(NOISE, delayed(NOISE)[: 1536 + 19_000])
    assert (early.lag_frames, early.gaps) == (1536, ((19_000, 1000),))
    assert not late.exact and not early.exact


def test_several_faults_in_one_recording_are_each_reported():
    """One fault must not hide the next."""
    y = faults.repeat(faults.drop(faults.click(NOISE, 12_000, 0.5), 9000, 10), 4000, 128)
    match = meters.dropped_frames(NOISE, delayed(y))
    assert match.repeats == ((4000, 128),) and match.gaps == ((9000, 10),) and match.differing.tolist() == [12_000]


def test_a_recording_of_something_else_is_different_everywhere():
    """Nothing may be called a match for want of a better one."""
    other = np.random.default_rng(12).uniform(-1, 1, NOISE.shape).astype(np.float32)
    match = meters.dropped_frames(NOISE, other)
    assert len(match.differing) + sum(count for _, count in match.gaps) == len(NOISE)


def test_a_processed_recording_is_aligned_by_its_correlation():
    """Latency is measured through filters too, where no sample is the same."""
    y = delayed(0.5 * NOISE + 0.01 * np.roll(NOISE, 1, axis=0))
    assert meters.dropped_frames(NOISE, y).lag_frames == 1536


# --- all --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "meter",
    [
        meters.level_db,
        meters.true_peak_db,
        lambda y: meters.splatter_db(y, RATE_HZ),
        lambda y: meters.find_clicks(y, RATE_HZ),
        lambda y: meters.tone(y, RATE_HZ),
        lambda y: meters.decay_s(y, RATE_HZ),
        lambda y: meters.dropped_frames(TONE_300, y),
    ],
)
def test_every_meter_refuses_nan_and_says_where_it_is(meter):
    """A comparison with NaN is neither true nor false, so NaN would slip through a test written the wrong way round."""
    with pytest.raises(ValueError, match="got NaN or infinity in 1 frames, first 4321: find out why"):
        meter(faults.not_a_number(TONE_300, 4321))


def test_the_sound_of_a_failing_test_is_kept_and_that_of_a_passing_one_is_not(tmp_path, monkeypatch):
    """A failure one can listen to is half understood."""
    monkeypatch.delenv("LIVERES_KEEP_WAV", raising=False)
    with kept_on_failure(NOISE, RATE_HZ, tmp_path, "passing"):
        pass
    with pytest.raises(AssertionError) as failure, kept_on_failure(NOISE, RATE_HZ, tmp_path, "failing"):
        raise AssertionError("planted")
    assert [path.name for path in tmp_path.iterdir()] == ["failing.wav"]
    assert failure.value.__notes__ == [f"sound kept in {tmp_path / 'failing.wav'}"]
    assert np.array_equal(soundfile.read(tmp_path / "failing.wav", dtype="float32")[0], NOISE)
    monkeypatch.setenv("LIVERES_KEEP_WAV", str(tmp_path / "kept"))
    with pytest.raises(AssertionError), kept_on_failure(NOISE, RATE_HZ, tmp_path):
        raise AssertionError("planted")
    assert (tmp_path / "kept" / "heard.wav").exists()
