"""The sound system: found, empty, or missing, and what the person is told."""

import json
import os
import subprocess
import sys

import pytest

from liveres.hosts import portaudio

WITHOUT = """
import ctypes.util, sys
ctypes.util.find_library = lambda name: None
from liveres.cli import main
sys.exit(main(sys.argv[1:]))
"""
RIG = """
</usr/share/alsa/alsa.conf>
pcm.rig { type null }
"""


def run(command, **environment):
    return subprocess.run(
        [sys.executable, *command], capture_output=True, text=True, timeout=60, env={**os.environ, **environment}
    )


@pytest.mark.parametrize(
    "text, line",
    [
        ("ID=debian\n", "run: sudo apt install libportaudio2"),
        ("NAME=Mint\nID=linuxmint\nID_LIKE=\"ubuntu debian\"\n", "run: sudo apt install libportaudio2"),
        ("ID=fedora\n", "run: sudo dnf install portaudio"),
        ("ID=\"rocky\"\nID_LIKE=\"rhel centos fedora\"\n", "run: sudo dnf install portaudio"),
        ("ID=manjaro\nID_LIKE=arch\n", "run: sudo pacman -S portaudio"),
        ("ID=\"opensuse-leap\"\nID_LIKE=\"suse opensuse\"\n", "run: sudo zypper install libportaudio2"),
        ("ID=somethingelse\n", "install the PortAudio library with this system's package manager"),
    ],
)
def test_the_install_line_fits_the_system(tmp_path, monkeypatch, text, line):
    """os-release(5) says what a system is and what it is like."""
    (tmp_path / "os-release").write_text(text)
    monkeypatch.setattr(portaudio, "_OS_RELEASE", tmp_path / "os-release")
    monkeypatch.setattr(sys, "platform", "linux")
    assert portaudio.install_line() == line


def test_the_install_line_of_a_mac_and_of_a_system_that_does_not_say(tmp_path, monkeypatch):
    """Both have no os-release."""
    monkeypatch.setattr(portaudio, "_OS_RELEASE", tmp_path / "none")
    monkeypatch.setattr(sys, "platform", "darwin")
    assert portaudio.install_line() == "run: brew install portaudio"
    monkeypatch.setattr(sys, "platform", "linux")
    assert portaudio.install_line() == "install the PortAudio library with this system's package manager"


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere the library comes with the wheel")
@pytest.mark.parametrize("command", ["devices", "live"])
def test_a_missing_library_is_told_with_the_remedy_and_what_works_without(command):
    """Most likely the first message a new user on Linux sees. The child cannot find the library."""
    done = run(["-c", WITHOUT, command])
    assert (done.returncode, done.stdout) == (1, "")
    assert done.stderr == (
        "liveres: PortAudio must be installed for live sound, got PortAudio library not found: "
        f"{portaudio.install_line()}; offline commands work without it (liveres render, response, check)\n"
    )


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere the library comes with the wheel")
def test_offline_commands_work_without_the_library(tmp_path):
    """Rendering on a server needs no sound system."""
    (tmp_path / "p.toml").write_text("title = 'x'\n")
    done = run(["-c", WITHOUT, "check", str(tmp_path / "p.toml")])
    assert (done.returncode, done.stderr) == (0, "")


@pytest.fixture
def rig(tmp_path):
    """Environment in which ALSA has one device of ours, which swallows all sound, or none."""
    if sys.platform != "linux" or not os.path.exists("/usr/share/alsa/alsa.conf"):
        pytest.skip("needs ALSA's configuration files")
    (tmp_path / "asound.conf").write_text(RIG)
    return {"ALSA_CONFIG_PATH": str(tmp_path / "asound.conf"), "JACK_NO_START_SERVER": "1", "JACK_DEFAULT_SERVER": "none"}


def test_devices_lists_what_portaudio_finds(rig):
    """Its name, host system, channels, and which is the default one. The PortAudio is the real one."""
    done = run(["-m", "liveres", "devices", "--json"], **rig)
    assert (done.returncode, done.stderr) == (0, "")
    found = {one["name"]: one for one in json.loads(done.stdout)["devices"]}
    assert found["rig"]["host"] == "ALSA" and found["rig"]["inputs"] > 0 and found["rig"]["outputs"] > 0
    lines = run(["-m", "liveres", "devices"], **rig).stdout.splitlines()
    row = next(line for line in lines if " rig " in line)
    assert "ALSA" in row and f" {found['rig']['number']} " in row
    assert lines[-1] == "-> default input, <- default output"


def test_a_system_without_devices_says_so_and_is_no_error(rig):
    """A question that has an answer."""
    done = run(["-m", "liveres", "devices"], **rig | {"ALSA_CONFIG_PATH": "/usr/share/alsa/alsa.conf"})
    if done.stdout.endswith("<- default output\n"):
        pytest.skip("this machine has sound devices of its own")
    assert done.returncode == 0
    assert done.stdout == "PortAudio runs and finds no sound device: connect one, or check that sound works in another program\n"
