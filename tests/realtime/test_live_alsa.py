"""A live session through a real PortAudio stream is repeated offline to the bit, moves and all."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile
from tools import meters

from liveres import Notch, Preset, Resonator, render, save_preset

PROGRAM = str(Path(__file__).with_name("live_on_rig.py"))

FRAMES = 1_920_000
# 40 s of sound, which the unpaced rig plays in about a second: time for many moves
PRESET = Preset(
    [
        Notch("n0", 500, -12, bandwidth_oct=0.1),
        Notch("n1", 2000, float("-inf"), q=20, channels=[1]),
        Resonator("r0", 440, -6, decay_s=2.0),
        Resonator("r1", 880, 0, q=80, channels=[0]),
    ],
    input_db=-6.0,
)


@pytest.mark.parametrize(("block_frames", "lookahead_s"), [(64, 0.0), (256, 0.0), (480, 0.0), (64, 0.002)])
def test_a_live_session_is_rendered_again_to_the_bit(alsa_rig, tmp_path, block_frames, lookahead_s):
    """The promise that anything heard can be repeated, on the real stream, for several block sizes."""
    rng = np.random.default_rng(block_frames)
    x = (0.5 * rng.standard_normal((FRAMES, 2))).astype(np.float32)
    save_preset(Preset(PRESET.filters, input_db=PRESET.input_db, lookahead_s=lookahead_s), tmp_path / "p.toml")
    alsa_rig.play(x)
    ended = alsa_rig.run(
        [sys.executable, PROGRAM, "rig", str(block_frames), str(FRAMES), str(tmp_path / "p.toml"), str(tmp_path / "m.csv")]
    )
    assert ended.returncode == 0, ended.stderr
    did = json.loads(ended.stdout)
    assert did["moves"] > 20 and did["first"] < FRAMES / 4 and did["last"] > FRAMES / 2
    soundfile.write(tmp_path / "in.wav", x, 48_000, subtype="FLOAT")
    render(tmp_path / "in.wav", tmp_path / "out.wav", tmp_path / "p.toml", moves=tmp_path / "m.csv", block_frames=1000)
    expected, _ = soundfile.read(tmp_path / "out.wav", dtype="float32")
    known = FRAMES - 144_000
    # what the live session did after its last noted move, such as fading out, is not in the file
    match = meters.dropped_frames(expected[:known], alsa_rig.recorded())
    assert match.exact, match


def test_the_live_command_runs_on_the_rig_and_ends_on_an_interrupt(alsa_rig, tmp_path):
    """What a user types, with the real stream behind it."""
    save_preset(PRESET, tmp_path / "p.toml")
    alsa_rig.play(np.full((480_000, 2), 0.1, np.float32))
    command = [sys.executable, "-m", "liveres", "live", "--preset", str(tmp_path / "p.toml"), "--device", "rig", "--no-screen"]
    ended = alsa_rig.run_until(command, 480_000)
    assert ended.returncode == 0, ended.stderr
    assert "Mind your ears" in ended.stdout and "callbacks" in ended.stdout
    first = alsa_rig.recorded(4096 + 1024)
    assert np.abs(first).max() < 0.02


def test_a_device_or_rate_that_is_not_there_is_named(alsa_rig):
    """Wrong device, wrong channel count: one clear line, exit code 1, no traceback."""
    for words, expected in (
        (["--device", "nosuch"], "device must be one for input that liveres devices lists, got 'nosuch'"),
        (["--device", "99"], "device must be one for input that liveres devices lists, got 99"),
        (["--device", "-1"], "device must be one for input that liveres devices lists, got -1"),
        (["--device", "rigg"], "did you mean rig?"),
    ):
        ended = alsa_rig.run([sys.executable, "-m", "liveres", "live", "--seconds", "1", *words])
        assert ended.returncode == 1
        lines = [line for line in ended.stderr.splitlines() if line.startswith("liveres: ")]
        assert len(lines) == 1 and expected in lines[0], ended.stderr
        assert "Traceback" not in ended.stderr
