"""Sound files that do not say how long they are, hold nothing that can be read, or are no files at all."""

import os
import sys

import numpy as np
import pytest
import soundfile
from unit.sounds import STRAIGHT, left_behind, noise, raw, write

import liveres
from liveres import cli
from liveres.errors import AudioFileError
from liveres.hosts import soundfiles
from liveres.presets import save_preset

_TOTAL_AT = 21
# of a FLAC file: where the 36 bits of its length begin, in the low half of this byte (RFC 9639, section 8.2)


def of_unknown_length(path, frames=50_001, subtype="PCM_16"):
    """A FLAC file as an encoder leaves it that cannot go back to its header: neither length nor MD5 filled in."""
    held = bytearray(write(path, noise(frames), subtype).read_bytes())
    held[_TOTAL_AT] &= 0xF0
    held[_TOTAL_AT + 1 : _TOTAL_AT + 21] = bytes(20)
    path.write_bytes(held)
    return path


def without_frames(path):
    """A FLAC file whose header is whole and whose sound is lost."""
    held = write(path, noise(50_001)).read_bytes()
    begin = held.index(b"\xff\xf8")
    path.write_bytes(held[:begin] + bytes(2000))
    return path


# --- length unknown ---------------------------------------------------------------------------


@pytest.mark.parametrize("frames", [1, 16_384, 50_001])
@pytest.mark.parametrize("subtype", ["PCM_16", "PCM_24"])
def test_flac_that_does_not_say_how_long_it_is_loses_no_frame(tmp_path, frames, subtype):
    """A recorder that streams writes such files; the last frame of a take counts too."""
    given = of_unknown_length(tmp_path / "in.flac", frames, subtype)
    write(tmp_path / "whole.flac", noise(frames), subtype)
    report = liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    assert np.array_equal(raw(tmp_path / "out.wav", subtype), raw(tmp_path / "whole.flac", subtype))
    assert (report["frames"], report["frames_promised"], report["cut_short"]) == (frames, frames, False)
    assert report["notes"] == [] and report["container"] == soundfile.info(tmp_path / "out.wav").format == "WAV"


def test_check_finds_nothing_wrong_with_flac_of_unknown_length(tmp_path, monkeypatch, capsys):
    """It promises nothing, so nothing is missing."""
    monkeypatch.chdir(tmp_path)
    of_unknown_length(tmp_path / "in.flac")
    assert cli.main(["check", "in.flac"]) == 0
    assert capsys.readouterr().out == "in.flac: OK, sound: FLAC PCM_16, 2 channels, 48000 Hz, 1.04 s\n"


def test_a_long_flac_of_unknown_length_is_planned_for_the_container_that_holds_it(tmp_path, monkeypatch):
    """WAV ends at 4 GB whether or not the input says that it is longer; here it ends sooner."""
    given = of_unknown_length(tmp_path / "in.flac")
    monkeypatch.setattr(soundfiles, "SMALL_FILE_BYTES", 4 * 50_000)
    report = liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    assert report["container"] == "RF64" and report["frames"] == 50_001


# --- nothing to read --------------------------------------------------------------------------


def test_a_header_without_sound_is_the_fault_of_the_input(tmp_path):
    """Not of the disk that the output would have gone to."""
    given = without_frames(tmp_path / "in.flac")
    with pytest.raises(AudioFileError) as caught:
        liveres.render(given, tmp_path / "out.wav", STRAIGHT)
    assert str(caught.value) == (
        f"{given}: its header promises 50001 frames and none can be read: "
        "the file is damaged or cut short, copy or record it again"
    )
    assert left_behind(tmp_path, "in.flac") == []


def test_a_header_without_sound_ends_render_and_check_with_2(tmp_path, monkeypatch, capsys):
    """One line, the usual code for a file that is wrong."""
    monkeypatch.chdir(tmp_path)
    without_frames(tmp_path / "in.flac")
    save_preset(STRAIGHT, "straight.toml")
    for words in ("render in.flac out.flac --preset straight.toml", "check in.flac"):
        assert cli.main(words.split()) == 2
        lines = [line for line in capsys.readouterr().err.splitlines() if "compiling the engine" not in line]
        assert len(lines) == 1 and lines[0].startswith("liveres: in.flac: its header promises 50001 frames and none can be read")
    assert left_behind(tmp_path, "in.flac", "straight.toml") == []


# --- no file at all ---------------------------------------------------------------------------


@pytest.mark.skipif(sys.platform == "win32", reason="named pipes of POSIX")
@pytest.mark.parametrize("name", ["pipe.wav", "pipe.toml", "pipe.csv", "pipe", "/dev/zero"])
def test_check_refuses_a_pipe_or_device_instead_of_waiting_for_it(tmp_path, monkeypatch, capsys, name):
    """A reader that waits for ever looks like a program that hangs."""
    monkeypatch.chdir(tmp_path)
    save_preset(STRAIGHT, "straight.toml")
    if not name.startswith("/"):
        os.mkfifo(name)
    assert cli.main(["check", name, "--preset", "straight.toml"]) == 2
    (line,) = capsys.readouterr().err.splitlines()
    assert line.startswith(f"liveres: {name}: ") and "got a device or pipe: save the " in line


@pytest.mark.skipif(sys.platform == "win32", reason="named pipes of POSIX")
def test_render_refuses_a_pipe_as_its_input(tmp_path):
    """Sound is read twice and by places, which no pipe can do."""
    os.mkfifo(tmp_path / "in.wav")
    with pytest.raises(AudioFileError) as caught:
        liveres.render(tmp_path / "in.wav", tmp_path / "out.wav", STRAIGHT)
    assert str(caught.value) == (
        f"{tmp_path / 'in.wav'}: it must be a sound file, got a device or pipe: save the sound to a file first"
    )
