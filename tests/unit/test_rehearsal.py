"""The rehearsal host and its command: the same bits for any blocking, steering, files, and what is said."""

import json
import os
import pty
import re
import subprocess
import sys
import threading
import time

import numpy as np
import pytest
from unit.sounds import HALL, noise, write
from unit.test_cli import liveres_says

from liveres.engine.processor import Processor
from liveres.engine.settings import Notch, Preset
from liveres.errors import AudioFileError, ParameterError
from liveres.hosts.rehearsal import Rehearsal
from liveres.hosts.rehearsal_files import load_room, load_source
from liveres.presets import save_preset
from liveres.rooms.impulse import Room
from liveres.rooms.sources import Looped

RATE_HZ = 48_000


def rehearsal(preset=HALL, name="meeting", source="noise", **settings):
    """A rehearsal with its microphone open."""
    seed = settings.get("seed", 0)
    made = Rehearsal(preset, load_room(name, RATE_HZ)[0], load_source(source, RATE_HZ, seed)[0], **settings)
    made.unmute(ramp_s=0.01)
    return made


def steered(blocks):
    """Microphone and output of one schedule of changes, run in blocks of given lengths."""
    steps = {
        1000: lambda one: one.set_gain_db(9.0, ramp_s=0.05),
        5000: lambda one: one.retune("bell", centre_hz=500.0, ramp_s=0.1),
        9001: lambda one: one.add(Notch("new", 700.0, -12.0, q=10)),
        20_000: lambda one: one.remove("new"),
        24_000: lambda one: one.mute(),
        25_000: lambda one: one.unmute(ramp_s=0.05),
    }
    one, parts, lengths = rehearsal(delay_frames=37), [], iter(blocks)
    marks = [*steps, 40_000]
    for mark in marks:
        while one.frame < mark:
            parts.append(one.advance(min(next(lengths), mark - one.frame)))
        if mark in steps:
            steps[mark](one)
    return np.concatenate([part[0] for part in parts]), np.concatenate([part[1] for part in parts])


def endless(*lengths):
    """Those lengths over and over."""
    while True:
        yield from lengths


def test_the_loop_gives_the_same_bits_for_any_blocking():
    """Otherwise a rehearsal could not be told from another by what was done in it."""
    whole = steered(endless(40_000))
    random = np.random.default_rng(5)
    for lengths in ([64], [1, 63, 65], [1000], random.integers(1, 3000, 50)):
        cut = steered(endless(*map(int, lengths)))
        assert np.array_equal(whole[0], cut[0]) and np.array_equal(whole[1], cut[1])
    assert np.max(np.abs(whole[1])) > 0.01


def test_a_rehearsal_follows_from_its_seed():
    """Deterministic for one, another for another."""
    first, again, other = (rehearsal(seed=seed).advance(10_000)[0] for seed in (3, 3, 4))
    assert np.array_equal(first, again) and not np.array_equal(first, other)


def test_the_recorded_microphone_rendered_with_the_same_moves_is_the_output():
    """What was rehearsed can be done again offline, to the bit."""
    one = rehearsal()
    parts = [one.advance(7777)]
    one.retune("bell", gain_db=-12.0, decay_s=1.0, ramp_s=0.2)
    parts.append(one.advance(20_000))
    offline = Processor(HALL, RATE_HZ, 1)
    offline.mute(ramp_s=0.0)
    offline.unmute(ramp_s=0.01)
    played = [offline.process(parts[0][0])]
    for move in one.moves():
        assert move.frame == 7777
    offline.retune("bell", gain_db=-12.0, decay_s=1.0, ramp_s=0.2)
    played.append(offline.process(parts[1][0]))
    assert {move.field for move in one.moves()} == {"gain_db", "decay_s"}
    assert np.array_equal(np.concatenate(played), np.concatenate([part[1] for part in parts]))


def test_it_starts_muted():
    """As live: nothing sounds before somebody says so."""
    one = Rehearsal(Preset(), load_room("meeting", RATE_HZ)[0], load_source("noise", RATE_HZ)[0])
    heard, answered = one.advance(5000)
    assert np.any(heard) and not np.any(answered)


def test_the_delay_of_the_converters_comes_on_top_of_one_block():
    """Sample-exact: an impulse is back after 64 frames, the converters and the room."""
    sound = np.zeros(10_000)
    sound[100] = 0.5
    one = Rehearsal(Preset(), Room("x", [0.0, 0.25], RATE_HZ), Looped(sound), delay_frames=500)
    one.unmute(ramp_s=0.0)
    heard, _ = one.advance(1000)
    assert np.flatnonzero(np.abs(heard[:, 0]) > 0.01).tolist() == [100, 100 + 64 + 500 + 1]
    assert heard[665, 0] == pytest.approx(0.125, abs=1e-3)


def test_look_ahead_counts_as_delay_of_the_loop():
    """It moves the howl: 100 Hz apart at 480 frames, 75 Hz at 640."""
    preset = Preset(lookahead_s=160 / RATE_HZ)
    one = Rehearsal(preset, Room("x", [0.5], RATE_HZ), Looped(np.zeros(1)), delay_frames=416)
    one.unmute(ramp_s=0.0)
    assert one.latency_frames == 160
    bears = one.highest_stable_gain()
    assert bears.frequency_hz % 75.0 == pytest.approx(0.0, abs=1e-6) or bears.frequency_hz % 75.0 == pytest.approx(75.0, abs=1e-6)


def test_input_and_dry_levels_count_against_the_limit():
    """They are in the loop like the system gain, and not part of it."""
    room = load_room("meeting", RATE_HZ)[0]
    one = Rehearsal(Preset(input_db=4.0, dry_db=-1.0), room, Looped(np.zeros(1)))
    assert one.highest_stable_gain().gain_db == pytest.approx(3.0)


def test_nothing_raises_the_system_gain_but_its_user():
    """A howl, the guard and the limiter leave it where it was set."""
    one = rehearsal(Preset(ceiling_db=-6.0), gain_db=12.0)
    one.advance(3 * RATE_HZ)
    assert one.howl.howled and one.gain_db == 12.0 and one._loop.gain == 10 ** (12 / 20)
    assert [event["kind"] for event in one.events()] == ["guard"]
    assert one.loudspeaker()["clipped_samples"] > 0 and one.loudspeaker()["peak_db"] > 0.0


def test_another_thread_may_steer_while_it_runs():
    """A screen does; every change arrives whole. No more than the lanes there are, should no frame pass meanwhile."""
    one, failures = rehearsal(Preset()), []

    def steer():
        try:
            for number in range(100):
                one.add(Notch(f"n{number}", 500.0 + number, -6.0, q=10), fade_s=0.0)
                one.retune(f"n{number}", depth_db=-3.0, ramp_s=0.001)
                one.remove(f"n{number}", fade_s=0.001)
        except Exception as error:
            failures.append(error)

    thread = threading.Thread(target=steer)
    thread.start()
    while thread.is_alive():
        one.advance(64)
    thread.join()
    _, answered = one.advance(1000)
    assert failures == [] and one.filters == () and len(one.moves()) == 100
    assert np.all(np.isfinite(answered))


@pytest.mark.parametrize(
    "settings, message",
    [
        ({"gain_db": 41}, "gain_db must be from -120 to 40 dB, got 41: 0 dB is 6 dB below what a room bears without filters"),
        (
            {"delay_frames": -1},
            "delay_frames must be from 0 to 48000 frames, got -1: converters and digital links have some hundreds",
        ),
        ({"delay_frames": 0.5}, "delay_frames must be a whole number, got 0.5: round it"),
        ({"seed": -1}, "seed must be from 0 to 999999, got -1: any whole number in the range will do"),
        ({"rate_hz": 44_100}, "room must be at rate_hz 44100, got 48000: run at 48000 or convert it first"),
    ],
)
def test_a_wrong_setting_is_refused(settings, message):
    """Name, rule, value, remedy."""
    with pytest.raises(ParameterError) as caught:
        Rehearsal(Preset(), Room("x", [0.5], RATE_HZ), Looped(np.zeros(1)), **settings)
    assert str(caught.value) == message


# --- files ---------------------------------------------------------------------------------------


@pytest.fixture
def desk(tmp_path, monkeypatch):
    """A folder with sound files of every sort."""
    monkeypatch.chdir(tmp_path)
    impulse = np.zeros((4800, 2))
    impulse[[10, 200, 900], 0] = 0.9, -0.4, 0.3
    impulse[:, 1] = 0.1
    write("mine.wav", impulse, "PCM_24")
    write("other.wav", impulse, rate_hz=44_100)
    write("silent.wav", np.zeros(100))
    write("talk.wav", noise(9600, 1))
    save_preset(Preset([Notch("first", 327.3, -9.0, bandwidth_oct=0.1)]), "hall.toml")
    (tmp_path / "text.wav").write_text("not a sound at all\n")
    return tmp_path


def test_a_measured_room_is_taken_by_its_first_channel_and_said_so(desk):
    """Stereo measurements are common; mixing them would make a room that is nowhere."""
    room, notes = load_room("mine.wav", RATE_HZ)
    assert notes == ["mine.wav: the first of 2 channels is used"]
    assert room.name == "mine" and np.flatnonzero(room.impulse).tolist() == [10, 200, 900]
    assert room.impulse[200] / room.impulse[10] == pytest.approx(-0.4 / 0.9, abs=1e-6)


def test_a_source_from_a_file_is_played_as_it_stands(desk):
    """Its level is the user's."""
    source, notes = load_source("talk.wav", RATE_HZ)
    assert notes == [] and source.part(9600) == pytest.approx(noise(9600, 1)[:, 0], abs=2**-15)


RATE = "it must be at 48000 Hz like the rehearsal, got 44100 Hz: use --rate 44100 or convert it first"


@pytest.mark.parametrize(
    "words, message",
    [
        ("--room hal", "room must be one that ships or a sound file, got 'hal': did you mean hall?"),
        ("--source speach", "source must be one that ships or a sound file, got 'speach': did you mean speech?"),
        ("--room other.wav", f"other.wav: {RATE}"),
        ("--source other.wav", f"other.wav: {RATE}"),
        ("--room gone.wav", "gone.wav: there is no such file: check the name"),
        ("--room silent.wav", "silent.wav: impulse must hold a sound, got zeros only: measure or export it again"),
        ("--gain loud", "--gain must be a number, got 'loud': write digits"),
        ("--gain 99", "--gain must be from -120 to 40 dB, got 99: 0 dB is 6 dB below what a room bears without filters"),
    ],
)
def test_a_wrong_command_line_is_one_clear_message(desk, capsys, words, message):
    """Exit code 2, and what to do."""
    code, out, errors = liveres_says(f"rehearse {words}", capsys)
    assert (code, out, errors) == (2, "", f"liveres: {message}\n")


def test_a_file_that_is_no_sound_is_refused(desk):
    """In the words every sound file gets."""
    with pytest.raises(AudioFileError, match=r"text\.wav: it must be a sound file"):
        load_room("text.wav", RATE_HZ)


# --- the command ---------------------------------------------------------------------------------


def test_the_summary_says_what_the_room_bears_and_what_happened(desk, capsys):
    """Past the limit by 4 dB it howls; the notch in the preset is counted in."""
    code, out, errors = liveres_says("rehearse --no-screen --gain 10 --seconds 4 --source noise", capsys)
    assert code == 0 and errors == ""
    assert "highest stable gain  +6.00 dB; beyond it, a howl at 327.3 Hz" in out
    assert "system gain          +10.00 dB, 4.00 dB past it" in out
    assert "howled               at " in out and "4.0 s, " in out
    code, out, _ = liveres_says("rehearse --no-screen --preset hall.toml --seconds 1", capsys)
    assert "without the filters  +6.00 dB" in out and "notch                first: 327.3 Hz, -9 dB" in out
    assert "howled               no: " in out
    code, out, _ = liveres_says("rehearse --no-screen --room church --gain 7 --source none --seconds 1", capsys)
    assert "1.00 dB past it" in out and "howled               not yet: " in out


def test_json_holds_the_same_in_numbers(desk, capsys):
    """For scripts; one object and nothing else."""
    code, out, _ = liveres_says("rehearse --json --preset hall.toml --room mine.wav --source none --seconds 0.5 --seed 7", capsys)
    said = json.loads(out)
    assert code == 0 and said["room"]["name"] == "mine" and said["seconds"] == 0.5 and said["seed"] == 7
    assert said["margin_db"] == said["highest_stable_gain_db"] - said["gain_db"]
    assert said["howl"] == {"howled": False, "from_s": None, "frequency_hz": None}
    assert said["notches"][0]["centre_hz"] == 327.3 and said["events"] == []
    assert said["without_filters"]["highest_stable_gain_db"] == pytest.approx(6.0)


def test_the_command_gives_the_same_for_any_block(desk, capsys):
    """--block is how much is done in one go, not what is done."""
    told = []
    for block in (64, 999):
        _, out, _ = liveres_says(f"rehearse --json --seconds 1 --gain 5 --block {block}", capsys)
        said = json.loads(out)
        # the engine's short-term meters read whole calls
        meters = [said["meters"][name] for name in ("peak_in_db", "rms_in_db", "peak_out_db", "rms_out_db")]
        told.append((said["howl"], said["loudspeaker"], said["seconds"], meters))
    assert told[0] == told[1]


def test_on_a_terminal_it_runs_in_real_time_with_a_line_of_meters(desk):
    """One second takes one second there, and the line tells the gain and what the room bears."""
    us, theirs = pty.openpty()
    words = [sys.executable, "-m", "liveres", "rehearse", "--seconds", "1"]
    child = subprocess.Popen(words, stdout=theirs, stderr=subprocess.PIPE)
    os.close(theirs)
    shown = b""
    while True:
        try:
            shown += os.read(us, 65536)
        except OSError:
            # the other end is closed
            break
    os.close(us)
    assert child.wait(timeout=60) == 0, child.stderr.read()
    child.stderr.close()
    text = shown.decode()
    assert 9 <= text.count("gain +0.0 of +6.0 dB") <= 11
    # on a busy machine it may fall behind, and then it does not hurry after
    assert int(re.search(r"rehearsed            1\.0 s, (\d+) times real time", text)[1]) <= 1


@pytest.mark.timing
def test_a_room_of_point_eight_seconds_runs_ten_times_faster_than_time():
    """Best of ten quarters of a second, so that another program's hiccup does not count."""
    impulse = np.random.default_rng(0).standard_normal(38_400) * 10.0 ** (-3.0 * np.arange(38_400) / 38_400)
    one = Rehearsal(Preset(), Room("x", impulse, RATE_HZ).scaled(), load_source("speech", RATE_HZ)[0])
    took = []
    for _ in range(10):
        began = time.perf_counter()
        for _ in range(188):
            one.advance(64)
        took.append(time.perf_counter() - began)
    assert min(took) < 0.1 * 188 * 64 / RATE_HZ
