"""The way to the sound system: PortAudio, or a clear word on what is missing.

Everything offline works without it, so it is imported here and nowhere else.
Thread: control.
"""

from __future__ import annotations

import ctypes
import sys
from pathlib import Path
from types import ModuleType

from liveres.errors import DeviceError, nearest

_CLIENT_NAME = ctypes.c_char_p(b"liveres")
# PortAudio keeps the pointer, so the name lives as long as the module
_OS_RELEASE = Path("/etc/os-release")
_INSTALL = {
    "debian": "sudo apt install libportaudio2",
    "fedora": "sudo dnf install portaudio",
    "arch": "sudo pacman -S portaudio",
    "suse": "sudo zypper install libportaudio2",
}
_FAMILIES = {"ubuntu": "debian", "rhel": "fedora", "centos": "fedora", "opensuse": "suse"}
_OFFLINE = "offline commands work without it (liveres render, response, check)"


def import_sounddevice() -> ModuleType:
    """The sounddevice module with PortAudio running.

    Raises : DeviceError - the PortAudio library is not installed, or it cannot start; with the remedy
    """
    first = "sounddevice" not in sys.modules
    try:
        import sounddevice

        if first:
            _name_jack_client(sounddevice)
    except OSError as error:
        raise DeviceError(f"PortAudio must be installed for live sound, got {error}: {install_line()}; {_OFFLINE}") from None
    except Exception as error:
        # its PortAudioError cannot be named here: the module that holds it failed to load
        if type(error).__name__ != "PortAudioError":
            raise
        raise DeviceError(
            f"the sound system must start for live sound, got {error}: check that sound works in another program; {_OFFLINE}"
        ) from None
    return sounddevice


def check_device(device: object, channels: int) -> None:
    """DeviceError unless there is such a device with so many channels in and out; takes no time and opens nothing.

    device : as sounddevice takes it: None, a number, part of a name, or a pair of these for input and output
    """
    sounddevice = import_sounddevice()
    known = [one["name"] for one in sounddevice.query_devices()]
    if not known:
        raise DeviceError("a sound device must be there, got none: connect one or start the sound server")
    pair = device if isinstance(device, (tuple, list)) else (device, device)
    for one, way in zip(pair, ("input", "output"), strict=True):
        try:
            found = sounddevice.query_devices(one, way)
        except (ValueError, sounddevice.PortAudioError):
            remedy = nearest(str(one), dict.fromkeys(known))
            raise DeviceError(f"device must be one for {way} that liveres devices lists, got {one!r}: {remedy}") from None
        most = found[f"max_{way}_channels"]
        if channels > most:
            raise DeviceError(f"channels must be at most {most} for {way} on {found['name']}, got {channels}: use fewer")


def _name_jack_client(sounddevice: ModuleType) -> None:
    """Have JACK show our ports under our name. PortAudio takes the name when it starts, so it is started again."""
    set_name = getattr(ctypes.CDLL(sounddevice._libname), "PaJack_SetClientName", None)
    if set_name is None:
        return
    sounddevice._terminate()
    set_name(_CLIENT_NAME)
    sounddevice._initialize()


def install_line() -> str:
    """The command that installs PortAudio on this system, as far as the system says what it is."""
    if sys.platform == "darwin":
        return "run: brew install portaudio"
    for name in _system_names():
        name = name.split("-")[0]
        if command := _INSTALL.get(_FAMILIES.get(name, name)):
            return f"run: {command}"
    return "install the PortAudio library with this system's package manager"


def _system_names() -> list[str]:
    """ID and ID_LIKE of os-release(5): this system first, then those it is like."""
    try:
        lines = _OS_RELEASE.read_text(encoding="utf-8").splitlines()
    except OSError:
        return []
    found = dict(line.split("=", 1) for line in lines if "=" in line)
    return [name for key in ("ID", "ID_LIKE") for name in found.get(key, "").strip("\"'").lower().split()]
