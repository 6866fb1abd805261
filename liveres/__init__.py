"""liveres: a real-time resonator and notch host. Poles near the unit circle ring; zeros on it erase.

Names load on first use, so that importing the package brings in no compiler, sound system or screen.
"""

from importlib import import_module

__version__ = "0.1.0"

_HOMES = {
    "Notch": "liveres.engine.settings",
    "Resonator": "liveres.engine.settings",
    "Preset": "liveres.engine.settings",
    "Watch": "liveres.engine.watch",
    "Processor": "liveres.engine.processor",
    "Live": "liveres.hosts.live",
    "load_preset": "liveres.presets",
    "save_preset": "liveres.presets",
    "render": "liveres.hosts.offline",
    "LiveresError": "liveres.errors",
    "ParameterError": "liveres.errors",
    "FileError": "liveres.errors",
    "AudioFileError": "liveres.errors",
    "WriteError": "liveres.errors",
    "DeviceError": "liveres.errors",
}

__all__ = [*_HOMES, "__version__"]


def __getattr__(name: str) -> object:
    if name not in _HOMES:
        raise AttributeError(f"module 'liveres' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
