"""Rendering many files: where each goes, that one failure harms no other, that a stop leaves nothing half done."""

import contextlib
import os
import signal
import subprocess
import sys
import threading
import time

import numpy as np
import pytest
import soundfile
from unit.sounds import HALL, STRAIGHT, left_behind, noise, raw, write

import liveres
from liveres.engine.settings import Preset, Resonator
from liveres.errors import ParameterError
from liveres.hosts import many, plans
from liveres.presets import save_preset

SLOW = Preset([Resonator(f"r{i}", 100.0 + i, -40.0, decay_s=1.0) for i in range(4000)])


def test_files_keep_their_names_and_folders_their_shape(tmp_path):
    """A season of takes is found again where it was."""
    for place in ("a.wav", "takes/b.flac", "takes/day 2/c.WAV", "takes/notes.txt"):
        (tmp_path / place).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / place).touch()
    planned = plans.plan_renders([tmp_path / "a.wav", tmp_path / "takes"], tmp_path / "out")
    assert [(str(one.in_path.relative_to(tmp_path)), str(one.out_path.relative_to(tmp_path))) for one in planned] == [
        ("a.wav", "out/a.wav"),
        ("takes/b.flac", "out/b.flac"),
        ("takes/day 2/c.WAV", "out/day 2/c.WAV"),
    ]


def test_an_output_folder_inside_an_input_folder_is_not_rendered_again(tmp_path):
    """The second run must not feed on the first."""
    (tmp_path / "out").mkdir()
    (tmp_path / "a.wav").touch()
    (tmp_path / "out" / "a.wav").touch()
    assert [one.in_path for one in plans.plan_renders([tmp_path], tmp_path / "out")] == [tmp_path / "a.wav"]


@pytest.mark.parametrize(
    "inputs, out, message",
    [
        (["x/a.wav", "y/a.wav"], "out", "y/a.wav and x/a.wav would both become out/a.wav: render them into two folders"),
        (["x", "y"], "out", "y/a.wav and x/a.wav would both become out/a.wav: render them into two folders"),
        (["x/a.wav", "x/a.wav"], "out", "x/a.wav and x/a.wav would both become out/a.wav: render them into two folders"),
        (["x/a.wav"], "x", "x/a.wav is an input and must not be written over: choose another folder with -o"),
        (["link/a.wav"], "x", "x/a.wav is an input and must not be written over: choose another folder with -o"),
        (
            ["bare"], "out",
            "bare: it must hold sound files (.wav, .rf64, .w64, .caf, .flac, .aif, .aiff, .aifc), got none: name another folder",
        ),
    ],
)
def test_what_cannot_go_well_is_refused_before_anything_is_rendered(tmp_path, monkeypatch, inputs, out, message):
    """The last of a hundred files is a bad place to learn it."""
    monkeypatch.chdir(tmp_path)
    for place in ("x", "y", "bare"):
        os.mkdir(place)
    for place in ("x/a.wav", "y/a.wav"):
        open(place, "w").close()
    os.symlink("x", "link")
    with pytest.raises(ParameterError) as caught:
        plans.plan_renders(inputs, out)
    assert str(caught.value) == message


def test_many_files_give_what_each_gives_alone_and_a_bad_one_stops_none(tmp_path):
    """Processes share nothing that could colour the sound."""
    (tmp_path / "in").mkdir()
    for seed in range(3):
        write(tmp_path / "in" / f"{seed}.wav", noise(20_000, seed=seed))
    (tmp_path / "in" / "bad.wav").write_text("no sound")
    outcomes = []
    many.render_many(plans.plan_renders([tmp_path / "in"], tmp_path / "out"), {"preset": HALL, "tail_s": 0.1}, outcomes.append, 2)
    errors = [one.error for one in outcomes if one.error]
    assert errors == [
        f"{tmp_path / 'in' / 'bad.wav'}: it must be a sound file in WAV, RF64, W64, CAF, AIFF, FLAC, got something else: "
        "convert it first"
    ]
    for one in outcomes:
        if one.report:
            alone = liveres.render(one.plan.in_path, tmp_path / "alone.wav", HALL, tail_s=0.1)
            assert one.report["samples_sha256"] == alone["samples_sha256"]
    assert sorted(os.listdir(tmp_path / "out")) == ["0.wav", "1.wav", "2.wav"]


def test_an_error_in_the_listener_stops_the_workers(tmp_path):
    """Whatever ends the wait, no process may go on by itself."""
    for seed in range(4):
        write(tmp_path / f"{seed}.wav", noise(2000, seed=seed))

    def fail(outcome):
        raise RuntimeError("enough")

    with pytest.raises(RuntimeError, match="enough"):
        many.render_many(plans.plan_renders([tmp_path], tmp_path / "out"), {"preset": STRAIGHT}, fail, 1)
    assert all(name.endswith(".wav") and not name.startswith(".") for name in os.listdir(tmp_path / "out"))


# --- stopped from outside ---------------------------------------------------------------------


def wait_for(condition, seconds=120.0):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited too long"
        time.sleep(0.01)


def growing(folder, how_many=1):
    """True once so many files are being written under their temporary names."""
    if not folder.exists():
        return False
    begun = [name for name in os.listdir(folder) if name.startswith(".")]
    sizes = [os.path.getsize(folder / name) for name in begun if os.path.exists(folder / name)]
    return sum(size > 10_000 for size in sizes) >= how_many


def start(arguments):
    command = [sys.executable, "-m", "liveres", "render", *map(str, arguments)]
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True)


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals")
@pytest.mark.parametrize(
    "number, code, words",
    [
        (signal.SIGINT, 130, "stopped by Ctrl-C; no file is left half written"),
        (signal.SIGTERM, 143, "told to end; no file is left half written"),
        (signal.SIGHUP, 143, "told to end; no file is left half written"),
    ],
)
def test_a_render_that_is_stopped_leaves_the_old_output_and_nothing_else(tmp_path, number, code, words):
    """A real signal to a real process, in the middle of its work."""
    write(tmp_path / "in.wav", np.tile(noise(48_000), (60, 1)))
    save_preset(SLOW, tmp_path / "slow.toml")
    (tmp_path / "out.wav").write_bytes(b"the old take")
    process = start([tmp_path / "in.wav", tmp_path / "out.wav", "--preset", tmp_path / "slow.toml"])
    wait_for(lambda: growing(tmp_path) or process.poll() is not None)
    process.send_signal(number)
    out, errors = process.communicate(timeout=60)
    assert (process.returncode, out) == (code, "")
    assert errors.splitlines()[-1] == f"liveres: {words}" and "Traceback" not in errors
    assert (tmp_path / "out.wav").read_bytes() == b"the old take"
    assert left_behind(tmp_path, "in.wav", "out.wav", "slow.toml") == []


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals")
@pytest.mark.parametrize("number, whole_group, code", [(signal.SIGINT, True, 130), (signal.SIGTERM, False, 143)])
def test_many_renders_that_are_stopped_leave_only_whole_files_and_no_process(tmp_path, number, whole_group, code):
    """Ctrl-C reaches every process of the terminal at once, SIGTERM only the first."""
    (tmp_path / "in").mkdir()
    for seed in range(4):
        write(tmp_path / "in" / f"{seed}.wav", np.tile(noise(48_000, seed=seed), (60, 1)))
    save_preset(SLOW, tmp_path / "slow.toml")
    process = start([tmp_path / "in", "-o", tmp_path / "out", "--preset", tmp_path / "slow.toml"])
    wait_for(lambda: growing(tmp_path / "out", min(2, many.core_count())) or process.poll() is not None)
    if whole_group:
        os.killpg(process.pid, number)
    else:
        process.send_signal(number)
    _, errors = process.communicate(timeout=60)
    assert process.returncode == code
    assert "Traceback" not in errors and "no file is left half written" in errors.splitlines()[-1]
    for name in os.listdir(tmp_path / "out"):
        # one may have been done in time
        assert not name.startswith(".") and soundfile.info(tmp_path / "out" / name).frames == 60 * 48_000
    wait_for(lambda: not group_lives(process.pid), 30.0)


@pytest.mark.skipif(sys.platform != "linux", reason="uses Linux process groups")
def test_workers_end_when_their_parent_is_killed(tmp_path):
    """A parent that cannot say goodbye must not leave processes that wait for ever."""
    (tmp_path / "in").mkdir()
    for seed in range(2):
        write(tmp_path / "in" / f"{seed}.wav", np.tile(noise(48_000, seed=seed), (60, 1)))
    save_preset(SLOW, tmp_path / "slow.toml")
    process = start([tmp_path / "in", "-o", tmp_path / "out", "--preset", tmp_path / "slow.toml"])
    wait_for(lambda: growing(tmp_path / "out") or process.poll() is not None)
    process.kill()
    process.wait()
    wait_for(lambda: not group_lives(process.pid), 30.0)
    assert all(not name.startswith(".") for name in os.listdir(tmp_path / "out"))
    process.communicate()


@pytest.mark.skipif(sys.platform != "linux", reason="kills processes by number, as Linux does when memory runs out")
def test_a_worker_that_is_killed_costs_nothing(tmp_path):
    """As when memory runs out: its file is rendered by another, and nothing half done lies about."""
    (tmp_path / "in").mkdir()
    for seed in range(3):
        write(tmp_path / "in" / f"{seed}.wav", np.tile(noise(48_000, seed=seed), (20, 1)))
    save_preset(SLOW, tmp_path / "slow.toml")
    process = start([tmp_path / "in", "-o", tmp_path / "out", "--preset", tmp_path / "slow.toml"])
    wait_for(lambda: growing(tmp_path / "out") or process.poll() is not None)
    (begun, *_) = [name for name in os.listdir(tmp_path / "out") if name.startswith(".")]
    os.kill(int(begun[1:].split("-")[0]), signal.SIGKILL)
    _, errors = process.communicate(timeout=300)
    assert process.returncode == 0, errors
    assert sorted(os.listdir(tmp_path / "out")) == ["0.wav", "1.wav", "2.wav"]
    assert all(soundfile.info(tmp_path / "out" / f"{seed}.wav").frames == 20 * 48_000 for seed in range(3))


@pytest.mark.skipif(sys.platform != "linux", reason="kills processes by number, as Linux does when memory runs out")
def test_only_the_file_that_kills_its_worker_twice_is_reported(tmp_path):
    """One take too large for the memory must not cost the others."""
    (tmp_path / "in").mkdir()
    for seed in range(3):
        write(tmp_path / "in" / f"{seed}.wav", np.tile(noise(48_000, seed=seed), (60 if seed == 0 else 1, 1)))
    outcomes, shot = [], []
    over = threading.Event()

    def shoot():
        while not over.wait(0.002):
            for name in os.listdir(tmp_path / "out") if (tmp_path / "out").exists() else []:
                # only the long file grows so large
                path = tmp_path / "out" / name
                with contextlib.suppress(OSError):
                    if name.startswith(".") and path.stat().st_size > 1_000_000:
                        number = int(name[1:].split("-")[0])
                        os.kill(number, signal.SIGKILL)
                        shot.append(number)

    hunter = threading.Thread(target=shoot)
    hunter.start()
    try:
        many.render_many(plans.plan_renders([tmp_path / "in"], tmp_path / "out"), {"preset": SLOW}, outcomes.append, 2)
    finally:
        over.set()
        hunter.join()
    assert [one.error for one in outcomes if one.error] == [
        f"{tmp_path / 'in' / '0.wav'}: the process that rendered it was killed, twice: free some memory, or render it alone"
    ]
    assert len(set(shot)) == 2
    assert sorted(os.listdir(tmp_path / "out")) == ["1.wav", "2.wav"]


def group_lives(group):
    try:
        os.killpg(group, 0)
    except ProcessLookupError:
        return False
    return True


def test_the_same_samples_come_out_of_one_worker_or_two(tmp_path):
    """How many cores a machine has must not be heard."""
    for seed in range(2):
        write(tmp_path / f"{seed}.wav", noise(20_000, seed=seed))
    for workers in (1, 2):
        planned = plans.plan_renders([tmp_path / "0.wav", tmp_path / "1.wav"], tmp_path / f"out{workers}")
        many.render_many(planned, {"preset": HALL}, lambda outcome: None, workers)
    for seed in range(2):
        assert np.array_equal(raw(tmp_path / "out1" / f"{seed}.wav", "PCM_16"), raw(tmp_path / "out2" / f"{seed}.wav", "PCM_16"))
