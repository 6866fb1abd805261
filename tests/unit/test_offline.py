"""The offline renderer on real files: what goes through, what is kept, what is reported."""

import hashlib
import json
import re
import time
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
import soundfile
from unit.sounds import HALL, MOVES, RATE_HZ, STRAIGHT, noise, raw, write

import liveres
from liveres.engine.moves import Move, save_moves
from liveres.engine.processor import Processor
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.errors import AudioFileError
from liveres.hosts import soundfiles
from liveres.presets import save_preset

FORMATS = [
    (ending, container, subtype)
    for ending, container in (
        ("wav", "WAV"), ("wav", "WAVEX"), ("wav", "RF64"), ("w64", "W64"), ("caf", "CAF"), ("aiff", "AIFF"), ("flac", "FLAC"),
    )
    for subtype in ("PCM_16", "PCM_24", "PCM_32", "FLOAT", "DOUBLE")
    if soundfile.check_format(container, subtype)
]


# --- what goes through ------------------------------------------------------------------------


@pytest.mark.parametrize("ending, container, subtype", FORMATS)
def test_a_preset_without_filters_passes_every_kind_of_file_to_the_bit(tmp_path, ending, container, subtype):
    """Nothing may be lost in reading, converting or writing; rate, channels, container and samples are kept."""
    given = write(tmp_path / f"in.{ending}", noise(), subtype, container)
    report = liveres.render(given, tmp_path / f"out.{ending}", STRAIGHT)
    before, after = soundfile.info(given), soundfile.info(tmp_path / f"out.{ending}")
    assert np.array_equal(raw(given, subtype), raw(tmp_path / f"out.{ending}", subtype))
    assert (after.samplerate, after.channels, after.subtype) == (before.samplerate, before.channels, before.subtype)
    assert after.format == before.format == report["container"]
    assert report["clipped_samples"] == 0 and report["notes"] == []


@pytest.mark.parametrize("subtype", ["PCM_16", "PCM_24", "FLOAT"])
def test_a_render_is_what_a_float32_session_would_have_played(tmp_path, subtype):
    """Offline is the live engine fed from a file, so it must give a live stream's bits."""
    given = write(tmp_path / "in.wav", noise(), subtype)
    liveres.render(given, tmp_path / "out.wav", HALL, block_frames=256)
    x = soundfile.read(given, dtype="float32", always_2d=True)[0]
    processor = Processor(HALL, RATE_HZ, 2)
    y = np.concatenate([processor.process(x[start : start + 64]) for start in range(0, len(x), 64)])
    if subtype == "FLOAT":
        assert np.array_equal(soundfile.read(tmp_path / "out.wav", dtype="float32")[0], y)
    else:
        bits = 16 if subtype == "PCM_16" else 24
        assert np.array_equal(raw(tmp_path / "out.wav", subtype) >> (32 - bits), np.rint(y.astype(float) * 2 ** (bits - 1)))


@pytest.mark.parametrize("subtype", ["PCM_32", "DOUBLE"])
def test_samples_of_more_than_24_bits_are_processed_in_float64(tmp_path, subtype):
    """float32 would throw their last bits away."""
    given = write(tmp_path / "in.wav", noise(), subtype)
    liveres.render(given, tmp_path / "out.wav", HALL)
    y = Processor(HALL, RATE_HZ, 2).process(soundfile.read(given, dtype="float64", always_2d=True)[0])
    expected = y if subtype == "DOUBLE" else np.rint(y * 2**31)
    assert np.array_equal(raw(tmp_path / "out.wav", subtype), expected)


@pytest.mark.parametrize("block_frames", [1, 7, 64, 4096, 65_536])
def test_the_result_does_not_depend_on_the_block(tmp_path, block_frames):
    """With moves, a tail and a look-ahead, the bits stay the same."""
    preset = Preset(HALL.filters, lookahead_s=0.003)
    given = write(tmp_path / "in.wav", noise(level=0.9), "PCM_24")
    one = liveres.render(given, tmp_path / "a.wav", preset, MOVES, tail_s=0.1)
    other = liveres.render(given, tmp_path / "b.wav", preset, MOVES, block_frames, tail_s=0.1)
    assert one["samples_sha256"] == other["samples_sha256"]
    assert one["output_sha256"] == other["output_sha256"]
    assert one["moves_made"] == 3


@pytest.mark.parametrize("frame", [0, 1, 5000, 11_999])
def test_a_move_acts_on_its_exact_frame(tmp_path, frame):
    """One frame early or late, and a replayed session is another one."""
    preset = Preset([Notch("n", 1000.0, 0.0, q=1.0)])
    given = write(tmp_path / "in.wav", noise(), "FLOAT")
    liveres.render(given, tmp_path / "still.wav", preset)
    liveres.render(given, tmp_path / "moved.wav", preset, [Move(frame, "n", "depth_db", -20.0, 0.0)])
    still, moved = raw(tmp_path / "still.wav", "FLOAT"), raw(tmp_path / "moved.wav", "FLOAT")
    assert np.array_equal(still[:frame], moved[:frame])
    assert np.all(still[frame] != moved[frame])


def test_a_moves_file_and_its_moves_give_the_same_bits(tmp_path):
    """The file is only their written form; presets too may come as files."""
    given = write(tmp_path / "in.wav", noise())
    save_moves(MOVES, tmp_path / "moves.csv")
    save_preset(HALL, tmp_path / "hall.toml")
    plain = liveres.render(given, tmp_path / "a.wav", HALL, MOVES[::-1])
    from_files = liveres.render(given, tmp_path / "b.wav", tmp_path / "hall.toml", tmp_path / "moves.csv")
    assert plain["samples_sha256"] == from_files["samples_sha256"]
    assert plain["settings_sha256"] == from_files["settings_sha256"]
    assert from_files["preset_sha256"] == hashlib.sha256((tmp_path / "hall.toml").read_bytes()).hexdigest()
    assert from_files["moves_sha256"] == hashlib.sha256((tmp_path / "moves.csv").read_bytes()).hexdigest()
    assert plain["preset"] is None and plain["preset_sha256"] is None


def test_moves_of_one_retune_act_together(tmp_path):
    """A live session's step of two fields, replayed from its file, is the same step: its first half alone is not legal."""
    given = write(tmp_path / "in.wav", noise(), "DOUBLE")
    preset = Preset([Notch("wide", 4000.0, -20.0, bandwidth_hz=3000.0)])
    save_moves([Move(5000, "wide", "centre_hz", 100.0), Move(5000, "wide", "bandwidth_hz", 5.0)], tmp_path / "m.csv")
    report = liveres.render(given, tmp_path / "out.wav", preset, tmp_path / "m.csv")
    assert (report["moves_made"], report["moves_left"]) == (2, 0)
    x, processor = raw(given, "DOUBLE"), Processor(preset, RATE_HZ, 2)
    before = processor.process(x[:5000])
    processor.retune("wide", centre_hz=100.0, bandwidth_hz=5.0)
    assert np.array_equal(raw(tmp_path / "out.wav", "DOUBLE"), np.concatenate([before, processor.process(x[5000:])]))


def test_moves_after_the_end_are_counted_and_told(tmp_path):
    """A moves file for a longer take must not pass as played in full."""
    given = write(tmp_path / "in.wav", noise())
    report = liveres.render(given, tmp_path / "out.wav", HALL, [*MOVES, Move(12_000, "bell", "gain_db", -9.0)])
    assert (report["moves_made"], report["moves_left"]) == (3, 1)
    assert report["notes"][-1] == "moves after the end, not made: 1; a longer tail makes room for them"


def test_the_tail_lets_the_ringing_out(tmp_path):
    """The output is longer by exactly the tail, and holds what a longer silent input would have."""
    given = write(tmp_path / "in.wav", noise(), "FLOAT")
    longer = write(tmp_path / "longer.wav", np.concatenate([noise(), np.zeros((24_000, 2))]), "FLOAT")
    report = liveres.render(given, tmp_path / "a.wav", HALL, tail_s=0.5)
    liveres.render(longer, tmp_path / "b.wav", HALL)
    assert report["frames"] == 36_000 and report["frames_in"] == 12_000
    assert np.array_equal(raw(tmp_path / "a.wav", "FLOAT"), raw(tmp_path / "b.wav", "FLOAT"))
    assert np.max(np.abs(raw(tmp_path / "a.wav", "FLOAT")[-2400:])) > 3e-5


@pytest.mark.parametrize("frames", [1, 5, 240, 12_000])
def test_the_latency_of_a_look_ahead_is_taken_out_again(tmp_path, frames):
    """Frame 0 answers frame 0, and the length stays, even for a sound shorter than the look-ahead."""
    given = write(tmp_path / "in.wav", noise(frames), "FLOAT")
    report = liveres.render(given, tmp_path / "out.wav", Preset(lookahead_s=0.005))
    assert report["latency_frames"] == 240 and report["frames"] == frames
    assert np.array_equal(raw(given, "FLOAT"), raw(tmp_path / "out.wav", "FLOAT"))


@pytest.mark.parametrize("rate_hz", [8_000, 11_025, 22_050, 44_100, 48_000, 88_200, 96_000, 192_000])
def test_every_rate_keeps_centres_and_decays(tmp_path, rate_hz):
    """A preset written at 48 kHz rings at the same pitch in a file of any rate."""
    impulse = np.zeros((rate_hz, 1))
    impulse[0] = 0.5
    given = write(tmp_path / "in.wav", impulse, "FLOAT", rate_hz=rate_hz)
    preset = Preset([Resonator("r", 440.0, -6.0, pole_radius=0.9999, normalise="strike")], dry_db=-np.inf)
    report = liveres.render(given, tmp_path / "out.wav", preset)
    heard = raw(tmp_path / "out.wav", "FLOAT")[:, 0]
    spectrum = np.abs(np.fft.rfft(heard * np.hanning(rate_hz)))
    assert report["rate_hz"] == soundfile.info(tmp_path / "out.wav").samplerate == rate_hz
    assert abs(int(np.argmax(spectrum)) - 440) <= 1
    # T60 of R 0.9999 at 48 kHz is ln 1000 / (48000 * -ln 0.9999) = 1.4391 s, so 30 dB take half of it
    first, later = (np.max(np.abs(heard[int(s * rate_hz) :][: rate_hz // 100])) for s in (0.1, 0.1 + 1.4391 / 2))
    assert 20 * np.log10(first / later) == pytest.approx(30.0, abs=0.5)


def test_32_channels_keep_their_order(tmp_path):
    """A stage box in one file."""
    sound = noise(3000, 32) * np.linspace(0.1, 1.0, 32)
    given = write(tmp_path / "in.wav", sound, "PCM_24")
    report = liveres.render(given, tmp_path / "out.wav", Preset([Notch("n", 1000.0, -20.0, q=1.0, channels=[31])]))
    before, after = raw(given, "PCM_24"), raw(tmp_path / "out.wav", "PCM_24")
    assert report["channels"] == 32
    assert np.array_equal(before[:, :31], after[:, :31])
    assert not np.array_equal(before[:, 31], after[:, 31])


@pytest.mark.parametrize("given, wanted, container", [("wav", "flac", "FLAC"), ("flac", "aif", "AIFF"), ("aiff", "wav", "WAV")])
def test_the_ending_of_the_output_chooses_the_container(tmp_path, given, wanted, container):
    """The samples stay, whatever they are wrapped in."""
    write(tmp_path / f"in.{given}", noise(), "PCM_24")
    liveres.render(tmp_path / f"in.{given}", tmp_path / f"out.{wanted}", STRAIGHT)
    assert soundfile.info(tmp_path / f"out.{wanted}").format == container
    assert np.array_equal(raw(tmp_path / f"in.{given}", "PCM_24"), raw(tmp_path / f"out.{wanted}", "PCM_24"))


# --- full scale and the ceiling ---------------------------------------------------------------


@pytest.mark.parametrize("subtype, bits", [("PCM_16", 16), ("PCM_24", 24), ("PCM_32", 32)])
@pytest.mark.parametrize("ceiling_db", [-1.0, -20.0, -0.3])
def test_no_integer_sample_passes_the_ceiling_after_rounding(tmp_path, subtype, bits, ceiling_db):
    """Rounding up by half a step is enough to break the promise."""
    given = write(tmp_path / "in.wav", noise(level=1.0), subtype)
    report = liveres.render(given, tmp_path / "out.wav", Preset(input_db=12.0, ceiling_db=ceiling_db))
    most = np.max(np.abs(raw(tmp_path / "out.wav", subtype).astype(np.int64))) >> (32 - bits)
    ceiling = 10 ** (ceiling_db / 20) * 2 ** (bits - 1)
    assert ceiling - 2 ** max(0, bits - 22) - 1 <= most <= ceiling
    assert report["clipped_samples"] == 0


def test_samples_that_no_integer_can_hold_are_clipped_counted_and_told(tmp_path):
    """At a ceiling of 0 dBFS a limited +1.0 has no 16-bit number."""
    square = np.where(np.arange(4800)[:, None] % 96 < 48, 0.9, -0.9)
    given = write(tmp_path / "in.wav", square)
    report = liveres.render(given, tmp_path / "out.wav", Preset(input_db=12.0, ceiling_db=0.0, guard=False))
    numbers = soundfile.read(tmp_path / "out.wav", dtype="int16")[0]
    assert numbers.max() == 32_767 and numbers.min() == -32_768
    assert report["clipped_samples"] == np.count_nonzero(numbers == 32_767) > 2000
    assert report["notes"] == [
        f"samples clipped at full scale: {report['clipped_samples']}; a ceiling_db below 0 leaves them room"
    ]


# --- the report -------------------------------------------------------------------------------


@pytest.mark.parametrize("subtype, width", [("PCM_16", 2), ("PCM_24", 3), ("PCM_32", 4), ("FLOAT", 4), ("DOUBLE", 8)])
def test_the_hash_of_the_samples_is_that_of_their_bytes(tmp_path, subtype, width):
    """Anyone can reckon it again from the file; a WAV holds exactly these bytes in its data chunk."""
    given = write(tmp_path / "in.wav", noise(), subtype)
    report = liveres.render(given, tmp_path / "out.wav", HALL)
    held = (tmp_path / "out.wav").read_bytes()
    begin = held.index(b"data") + 8
    assert report["samples_sha256"] == hashlib.sha256(held[begin : begin + 12_000 * 2 * width]).hexdigest()
    assert report["output_sha256"] == hashlib.sha256(held).hexdigest()


def test_the_same_render_gives_the_same_file_on_another_day(tmp_path):
    """No time of day may creep into a float file's header."""
    given = write(tmp_path / "in.wav", noise(), "FLOAT")
    first = liveres.render(given, tmp_path / "a.wav", HALL)
    time.sleep(1.1)
    assert liveres.render(given, tmp_path / "b.wav", HALL)["output_sha256"] == first["output_sha256"]


def test_the_report_is_json_even_of_silence(tmp_path):
    """Silence has no level in dB, and JSON has no infinity."""
    given = write(tmp_path / "in.wav", np.zeros((4800, 1)))
    report = liveres.render(given, tmp_path / "out.wav", HALL)
    assert json.loads(json.dumps(report, allow_nan=False)) == report
    assert report["meters"]["peak_out_db"] is None and report["true_peak_db"] is None
    assert set(report["versions"]) == {"liveres", "python", "numpy", "numba", "soundfile", "libsndfile"}
    assert report["times_real_time"] > 0 and report["seconds"] == 0.1


def test_the_report_tells_levels_limiter_guard_and_faults(tmp_path):
    """Afterwards one must be able to say what happened, when and why."""
    tone = np.sin(2 * np.pi * 1000 * np.arange(3 * RATE_HZ) / RATE_HZ)[:, None]
    tone[100] = np.nan
    given = write(tmp_path / "in.wav", tone, "FLOAT")
    report = liveres.render(given, tmp_path / "out.wav", Preset())
    meters = report["meters"]
    assert meters["peak_in_db"] == pytest.approx(0.0, abs=0.01) and meters["peak_out_db"] == pytest.approx(-1.0, abs=0.01)
    assert meters["limiter_most_db"] == pytest.approx(-1.0, abs=0.01)
    assert meters["guard_most_db"] < -11.0
    assert meters["traps"] == {"input": 1, "state": 0}
    assert "guard" in {event["kind"] for event in report["events"]}


class Poisoned(Processor):
    """An engine whose filters are corrupted before every block."""

    def process(self, x):
        """The block, after the fault."""
        self.memory.ringing[:] = np.nan
        return super().process(x)


def test_no_event_of_a_long_render_is_dropped(tmp_path, monkeypatch):
    """The engine's own list of events holds 1024; a night's recording may have more."""
    monkeypatch.setattr("liveres.hosts.offline.Processor", Poisoned)
    given = write(tmp_path / "in.wav", noise(70 * 1024, 16))
    report = liveres.render(given, tmp_path / "out.wav", HALL, block_frames=1024)
    heard = [(event["frame"], event["channel"]) for event in report["events"]]
    assert heard == [(1024 * number, channel) for number in range(70) for channel in range(16)]


def test_true_peak_of_the_report_is_that_of_the_samples_written(tmp_path):
    """A sine of a quarter of the rate at 45 degrees hides 3 dB between its samples (ITU-R BS.1770-5, annex 2)."""
    # faded in and out, for an edge has a peak of its own
    tone = (0.5 * np.sin(np.pi / 2 * np.arange(4800) + np.pi / 4) * np.minimum(1.0, 10.0 * np.hanning(4800)))[:, None]
    given = write(tmp_path / "in.wav", tone, "PCM_24")
    report = liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    assert report["meters"]["peak_out_db"] == pytest.approx(20 * np.log10(0.5) - 3.01, abs=0.01)
    assert report["true_peak_db"] == pytest.approx(20 * np.log10(0.5) + 0.045, abs=0.005)


def test_progress_is_told_as_the_render_goes_on(tmp_path):
    """A bar needs to know how far and how much."""
    given = write(tmp_path / "in.wav", noise(50_000))
    heard = []
    liveres.render(given, tmp_path / "out.wav", STRAIGHT, tail_s=1.0, progress=lambda done, total: heard.append((done, total)))
    assert heard[-1] == (98_000, 98_000)
    assert [done for done, _ in heard] == sorted(done for done, _ in heard) and {total for _, total in heard} == {98_000}


def test_memory_does_not_grow_with_length(tmp_path):
    """An hour must render as a minute does."""
    given = tmp_path / "in.wav"
    with soundfile.SoundFile(given, "w", 8000, 1, "FLOAT") as file:
        for seed in range(10):
            file.write(noise(600_000, 1, seed=seed))
    liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    tracemalloc.start()
    liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    _, most_bytes = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    # the sound itself is 24 MB
    assert most_bytes < 8e6


# --- large files ------------------------------------------------------------------------------


def test_a_wav_beyond_4_gb_becomes_rf64_and_says_so(tmp_path, monkeypatch):
    """The 32-bit sizes of WAV end there; the limit is lowered here, the path is the real one."""
    given = write(tmp_path / "in.wav", noise())
    monkeypatch.setattr(soundfiles, "SMALL_FILE_BYTES", 12_000 * 4 - 1)
    report = liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    assert soundfile.info(tmp_path / "out.wav").format == report["container"] == "RF64"
    assert report["notes"] == ["written as RF64, because WAV ends at 4 GB"]
    assert np.array_equal(raw(given, "PCM_16"), raw(tmp_path / "out.wav", "PCM_16"))
    with pytest.raises(AudioFileError, match=r"AIFF ends at 4 GB, and this is longer: choose \.wav, \.w64, \.caf or \.flac"):
        liveres.render(given, tmp_path / "out.aiff", STRAIGHT)


def test_a_path_may_be_text_or_a_path(tmp_path):
    """Both are common, and reports carry plain text."""
    given = write(tmp_path / "in.wav", noise(100))
    save_preset(HALL, tmp_path / "hall.toml")
    report = liveres.render(str(given), str(tmp_path / "out.wav"), str(tmp_path / "hall.toml"))
    assert report["input"] == str(given) and Path(report["output"]).exists()


def test_a_ring_that_is_cut_off_is_said_with_the_tail_it_needs(tmp_path):
    """Forgetting the tail of a bell is easily done and hard to hear in a mix."""
    soundfile.write(tmp_path / "in.wav", np.full(4800, 0.1), 48_000)
    preset = Preset([Resonator("r", 440, 20, decay_s=6.0)])
    cut = liveres.render(tmp_path / "in.wav", tmp_path / "out.wav", preset)
    assert len(cut["notes"]) == 1
    assert re.fullmatch(r"the output ends while it still rings at -\d+ dBFS; --tail [67] lets it ring out", cut["notes"][0])
    assert liveres.render(tmp_path / "in.wav", tmp_path / "out.wav", preset, tail_s=7.0)["notes"] == []
