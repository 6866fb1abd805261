"""Rooms and sources of a rehearsal by name or from a sound file. Nothing is resampled.

Thread: control.
"""

from __future__ import annotations

from importlib.resources import as_file, files
from pathlib import Path

import numpy as np

from liveres import limits
from liveres.errors import AudioFileError, ParameterError, nearest
from liveres.hosts.soundfiles import EXTENSIONS, Source
from liveres.rooms.bounds import IMPULSE_S, ROOMS, SEED, SOURCES
from liveres.rooms.impulse import Room
from liveres.rooms.sources import Looped, Noise, plucked_tune
from liveres.units import gain_from_db

SPEECH_GAIN = gain_from_db(-12.0)
# brings the recording's peak of -6 dBFS to -18: a talker a hand's width from the microphone, with room for the loop
NOISE_RMS = gain_from_db(-40.0)
_SOURCE_S = 600
# longer files are read so far
_PIECE = 1 << 16


def load_room(name: str, rate_hz: float) -> tuple[Room, list[str]]:
    """A room that ships with the program, or one measured: scaled so that it bears +6 dB (see ``Room.scaled``).

    name : one of ROOMS, or the path of a sound file holding an impulse response
    Returns : the room, and remarks on how the file was taken
    Raises : ParameterError - no such room. AudioFileError - the file cannot be read, is at another rate, is too long or
        holds no impulse response
    """
    if name in ROOMS:
        with as_file(files("liveres") / "data" / "rooms" / f"{name}.flac") as path:
            impulse, _ = _read(str(path), rate_hz, IMPULSE_S.high)
        return Room(name, impulse, rate_hz).scaled(), []
    if not _is_path(name):
        raise ParameterError(f"room must be one that ships or a sound file, got {name!r}: {nearest(name, ROOMS)}")
    impulse, notes = _read(name, rate_hz, IMPULSE_S.high)
    try:
        room = Room(Path(name).stem, impulse, rate_hz).scaled()
    except ParameterError as error:
        raise AudioFileError(f"{name}: {error}") from None
    return room, notes


def load_source(name: str, rate_hz: float, seed: int = 0) -> tuple[object, list[str]]:
    """What stands before the microphone.

    name : one of SOURCES, or the path of a sound file, played over and over as it stands
    seed : int, 0 to 999999; the noise follows from it
    Returns : an object with ``part(frames)``, and remarks on how a file was taken
    Raises : ParameterError - no such source. AudioFileError - the file cannot be read, or is at another rate
    """
    if name == "none":
        return Looped(np.zeros(1)), []
    if name == "noise":
        # a stream of its own beside that of the microphone, which is the bare seed
        return Noise(NOISE_RMS, [limits.check_whole("seed", seed, SEED), 1]), []
    if name == "music":
        return Looped(plucked_tune(rate_hz)), []
    if name == "speech":
        with as_file(files("liveres") / "data" / "speech.flac") as path:
            sound, _ = _read(str(path), rate_hz, _SOURCE_S)
        return Looped(SPEECH_GAIN * sound), []
    if not _is_path(name):
        raise ParameterError(f"source must be one that ships or a sound file, got {name!r}: {nearest(name, SOURCES)}")
    sound, notes = _read(name, rate_hz, _SOURCE_S)
    return Looped(sound), notes


def _is_path(name: str) -> bool:
    return Path(name).suffix.lower() in EXTENSIONS or Path(name).exists()


def _read(path: str, rate_hz: float, most_s: float) -> tuple[np.ndarray, list[str]]:
    """The first channel of a sound file, (frames,) float64, and remarks."""
    with Source(path) as source:
        if source.rate_hz != rate_hz:
            raise AudioFileError(
                f"{path}: it must be at {rate_hz:g} Hz like the rehearsal, got {source.rate_hz} Hz: "
                f"use --rate {source.rate_hz} or convert it first"
            )
        notes = [f"{path}: the first of {source.channels} channels is used"] if source.channels > 1 else []
        left, pieces = round(most_s * rate_hz), []
        for piece in source.pieces(_PIECE):
            pieces.append(piece[:left, 0].astype(np.float64))
            left -= len(pieces[-1])
            if left == 0:
                break
        if left == 0 and source.frames > round(most_s * rate_hz):
            notes.append(f"{path}: the first {most_s:g} s are used")
    return np.concatenate(pieces), notes
