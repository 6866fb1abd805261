"""The offline renderer and files that are wrong, cut short, in the way, or too much for the disk."""

import os
import struct
import subprocess
import sys

import numpy as np
import pytest
from unit.sounds import HALL, MOVES, STRAIGHT, left_behind, noise, raw, write

import liveres
from liveres.engine.moves import save_moves
from liveres.engine.settings import Notch, Preset
from liveres.errors import AudioFileError, FileError, ParameterError, WriteError
from liveres.presets import save_preset

ENDINGS = ".wav, .rf64, .w64, .caf, .flac, .aif, .aiff, .aifc"

# --- files that are wrong ---------------------------------------------------------------------


@pytest.mark.parametrize(
    "ending, container", [("wav", "WAV"), ("wav", "RF64"), ("w64", "W64"), ("aiff", "AIFF"), ("flac", "FLAC")]
)
def test_a_file_cut_short_is_rendered_as_far_as_it_goes_and_reported(tmp_path, ending, container):
    """What is there is worth having, and that something is missing is worth knowing."""
    whole = write(tmp_path / f"whole.{ending}", noise(48_000), "PCM_24", container)
    cut = tmp_path / f"cut.{ending}"
    cut.write_bytes(whole.read_bytes()[: whole.stat().st_size // 2])
    report = liveres.render(cut, tmp_path / f"out.{ending}", STRAIGHT)
    held = raw(tmp_path / f"out.{ending}", "PCM_24")
    assert report["cut_short"] is True and report["frames_promised"] == 48_000
    assert 20_000 < report["frames"] == report["frames_in"] == len(held) < 25_000
    assert np.array_equal(held, raw(whole, "PCM_24")[: len(held)])
    assert report["notes"] == [
        f"{cut} is cut short: its header promises 48000 frames, {len(held)} can be read, and those were rendered"
    ]


def test_a_wav_whose_writer_never_filled_in_its_length_is_read_to_its_end(tmp_path):
    """Recorders that stream leave the size at all ones; that is not a promise."""
    given = write(tmp_path / "in.wav", noise())
    held = bytearray(given.read_bytes())
    place = held.index(b"data") + 4
    held[place : place + 4] = struct.pack("<I", 0xFFFFFFFF)
    given.write_bytes(held)
    report = liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    assert report["cut_short"] is False and report["frames"] == 12_000


def made_wrong(folder):
    """Files that are no good, by name."""
    write(folder / "good.wav", noise(100))
    (folder / "empty.wav").write_bytes(b"")
    (folder / "text.wav").write_text("this is not sound\n" * 50)
    (folder / "header.wav").write_bytes((folder / "good.wav").read_bytes()[:30])
    (folder / "folder.wav").mkdir()
    write(folder / "none.wav", np.zeros((0, 2)))
    write(folder / "wide.wav", noise(10, 33))
    write(folder / "slow.wav", noise(10), rate_hz=7999)
    write(folder / "fast.wav", noise(10), rate_hz=192_001)
    write(folder / "law.wav", noise(10), "ULAW")


BAD_INPUTS = {
    "missing.wav": "there is no such file: check the name",
    "folder.wav": "it must be a sound file, got a folder: name a file in it",
    "empty.wav": "it must be a sound file, got an empty file: record or export it again",
    "text.wav": "it must be a sound file in WAV, RF64, W64, CAF, AIFF, FLAC, got something else: convert it first",
    "header.wav": "the WAV header cannot be read (Error in WAV file. No 'data' chunk marker): "
    "the file is damaged or cut short, copy or record it again",
    "none.wav": "it must hold at least one frame, got 0: record or export it again",
    "wide.wav": "channels must be from 1 to 32, got 33: use fewer channels, or several runs",
    "slow.wav": "rate_hz must be from 8000 to 192000 Hz, got 7999: use a sample rate sound devices and files have",
    "fast.wav": "rate_hz must be from 8000 to 192000 Hz, got 192001: use a sample rate sound devices and files have",
    "law.wav": "samples must be PCM_16, PCM_24, PCM_32, FLOAT, DOUBLE, got ULAW: convert it to PCM_16 or PCM_24 first",
}


@pytest.mark.parametrize("name", BAD_INPUTS)
def test_an_input_that_cannot_be_read_gets_one_clear_message(tmp_path, name):
    """What is wrong, with which file, and what to do; and nothing is written."""
    made_wrong(tmp_path)
    with pytest.raises(AudioFileError) as caught:
        liveres.render(tmp_path / name, tmp_path / "out.wav", STRAIGHT)
    assert str(caught.value) == f"{tmp_path / name}: {BAD_INPUTS[name]}"
    assert not (tmp_path / "out.wav").exists()


@pytest.mark.parametrize(
    "out, subtype, channels, message",
    [
        ("out.mp3", "PCM_16", 1, f"the name must end in one of {ENDINGS}, got .mp3: the ending chooses the container"),
        ("out", "PCM_16", 1, f"the name must end in one of {ENDINGS}, got no ending: the ending chooses the container"),
        (
            "out.flac", "FLOAT", 1,
            "FLAC cannot hold FLOAT samples, which {in_path} has: choose an ending for WAV, RF64, W64, CAF, AIFF",
        ),
        ("out.flac", "PCM_16", 9, "FLAC holds at most 8 channels, got 9: choose .wav"),
    ],
)
def test_a_container_that_cannot_hold_the_sound_is_refused(tmp_path, out, subtype, channels, message):
    """Nothing is converted behind anyone's back."""
    given = write(tmp_path / "in.wav", noise(10, channels), subtype)
    with pytest.raises(AudioFileError) as caught:
        liveres.render(given, tmp_path / out, STRAIGHT)
    assert str(caught.value) == f"{tmp_path / out}: {message.format(in_path=given)}"


@pytest.mark.parametrize("link", ["same", "dots", "symlink", "hard"])
def test_an_input_is_never_written_over_by_whatever_name(tmp_path, link):
    """The only recording of a show may lie there."""
    given = write(tmp_path / "in.wav", noise())
    before = given.read_bytes()
    other = {"same": given, "dots": tmp_path / "x" / ".." / "in.wav"}.get(link, tmp_path / "other.wav")
    (tmp_path / "x").mkdir()
    if link == "symlink":
        other.symlink_to(given)
    elif link == "hard":
        os.link(given, other)
    with pytest.raises(AudioFileError) as caught:
        liveres.render(given, other, HALL)
    assert str(caught.value) == (
        f"{other}: it must not be a file this render reads, got the same file as {given}: choose another name"
    )
    assert given.read_bytes() == before


@pytest.mark.parametrize("victim", ["hall.wav", "moves.wav"])
def test_preset_and_moves_are_never_written_over(tmp_path, victim):
    """An hour of tuning may lie there."""
    given = write(tmp_path / "in.wav", noise())
    save_preset(HALL, tmp_path / "hall.wav")
    save_moves(MOVES, tmp_path / "moves.wav")
    with pytest.raises(AudioFileError, match="must not be a file this render reads"):
        liveres.render(given, tmp_path / victim, tmp_path / "hall.wav", tmp_path / "moves.wav")


@pytest.mark.parametrize(
    "keywords, message",
    [
        ({"block_frames": 0}, "block_frames must be from 1 to 65536 frames, got 0: 64 to 1024 is usual"),
        ({"block_frames": 1.5}, "block_frames must be a whole number, got 1.5: round it"),
        ({"tail_s": -1}, "tail_s must be from 0 to 600 s, got -1: 60 s outlasts everything a preset can ring"),
        ({"tail_s": float("nan")}, "tail_s must be from 0 to 600 s, got nan: 60 s outlasts everything a preset can ring"),
    ],
)
def test_parameters_outside_their_range_are_refused(tmp_path, keywords, message):
    """Before anything is read or written."""
    with pytest.raises(ParameterError) as caught:
        liveres.render(tmp_path / "none.wav", tmp_path / "out.wav", STRAIGHT, **keywords)
    assert str(caught.value) == message


def test_a_preset_that_cannot_exist_at_the_rate_of_the_file_is_refused(tmp_path):
    """A centre above half the rate would fold down to another pitch."""
    given = write(tmp_path / "in.wav", noise(10), rate_hz=8000)
    with pytest.raises(ParameterError, match="filter 'high': centre_hz must be from 10 to 3920 Hz"):
        liveres.render(given, tmp_path / "out.wav", Preset([Notch("high", 5000.0, -6.0, q=2.0)]))


def test_faulty_preset_and_moves_files_are_told_with_their_lines(tmp_path):
    """The renderer adds nothing and hides nothing."""
    given = write(tmp_path / "in.wav", noise(10))
    (tmp_path / "bad.toml").write_text("ceiling_db = 3\n")
    with pytest.raises(FileError, match=r"bad\.toml:1: ceiling_db: "):
        liveres.render(given, tmp_path / "out.wav", tmp_path / "bad.toml")
    (tmp_path / "bad.csv").write_text("frame,filter,field,value\n0,nobody,gain_db,0\n")
    with pytest.raises(FileError, match=r"bad\.csv:2: filter: "):
        liveres.render(given, tmp_path / "out.wav", HALL, tmp_path / "bad.csv")


# --- faults on the way ------------------------------------------------------------------------


def test_an_error_on_the_way_leaves_the_old_output_and_nothing_else(tmp_path):
    """A render that failed must be as if it had never begun."""
    given = write(tmp_path / "in.wav", noise(60_000))
    (tmp_path / "out.wav").write_bytes(b"the old take")

    def fail(done, total):
        raise RuntimeError("half way")

    with pytest.raises(RuntimeError, match="half way"):
        liveres.render(given, tmp_path / "out.wav", HALL, progress=fail)
    assert (tmp_path / "out.wav").read_bytes() == b"the old take"
    assert left_behind(tmp_path, "in.wav", "out.wav") == []


def test_a_missing_output_folder_is_told_before_the_work_begins(tmp_path):
    """Not after an hour of it."""
    given = write(tmp_path / "in.wav", noise(100))
    with pytest.raises(WriteError, match=r"out.wav: folder .* must exist, got none: make it or choose another place"):
        liveres.render(given, tmp_path / "nowhere" / "out.wav", STRAIGHT, progress=lambda done, total: pytest.fail("it began"))


FULL = """
import resource, sys
import liveres
resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000))
try:
    liveres.render(sys.argv[1], sys.argv[2], liveres.Preset())
except liveres.LiveresError as error:
    print(type(error).__name__, error)
"""


@pytest.mark.skipif(sys.platform == "win32", reason="Windows has no limit on a process's file size")
@pytest.mark.parametrize("ending, subtype", [("wav", "PCM_16"), ("wav", "DOUBLE"), ("flac", "PCM_16")])
def test_a_file_that_outgrows_what_the_system_permits_fails_clearly(tmp_path, ending, subtype):
    """The old output survives, and the half one is gone. The limit is the system's own, on a process of its own."""
    given = write(tmp_path / f"in.{ending}", noise(200_000), subtype)
    (tmp_path / f"out.{ending}").write_bytes(b"the old take")
    command = [sys.executable, "-c", FULL, str(given), str(tmp_path / f"out.{ending}")]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120)
    assert done.stdout == (
        f"WriteError {tmp_path / f'out.{ending}'}: the file grew larger than this disk or account permits: "
        "write less of it, or write it elsewhere\n"
    )
    assert done.stderr == ""
    assert (tmp_path / f"out.{ending}").read_bytes() == b"the old take"
    assert left_behind(tmp_path, given.name, f"out.{ending}") == []


@pytest.fixture
def small_disk(tmp_path):
    """A disk of one megabyte, where this account may mount one."""
    place = tmp_path / "disk"
    place.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(place)]
    if sys.platform != "linux" or subprocess.run(command, capture_output=True).returncode != 0:
        pytest.skip("mounting a small disk needs Linux and root")
    yield place
    subprocess.run(["umount", str(place)], check=True)


@pytest.mark.parametrize("ending", ["wav", "flac"])
def test_a_full_disk_fails_clearly(tmp_path, small_disk, ending):
    """The message names the cause, and no half file takes up the last room."""
    given = write(tmp_path / f"in.{ending}", noise(500_000))
    with pytest.raises(WriteError) as caught:
        liveres.render(given, small_disk / f"out.{ending}", STRAIGHT)
    assert str(caught.value) == f"{small_disk / f'out.{ending}'}: the disk is full: free some space and try again"
    assert os.listdir(small_disk) == []
