"""What the first bytes of a sound file say: which container it is, and how many frames it promises.

A reader of sound gives what is there; only the header tells that there should have been more.
Layouts: RIFF/WAVE (Microsoft and IBM, 1991), RF64 (EBU Tech 3306), AIFF (Apple, 1989), Wave64; FLAC and CAF are
told by their first four bytes only.
Thread: control.
"""

from __future__ import annotations

import os
import struct
from typing import BinaryIO

from liveres.errors import AudioFileError

CONTAINERS = ("WAV", "RF64", "W64", "CAF", "AIFF", "FLAC")
_MARKS = {b"RIFF": "WAV", b"RF64": "RF64", b"FORM": "AIFF", b"riff": "W64", b"fLaC": "FLAC", b"caff": "CAF"}
_UNKNOWN = 0xFFFFFFFF
# a size still to be filled in; in RF64 it stands in the ds64 chunk


def is_sound(path: str) -> bool:
    """True when the file begins like one of CONTAINERS."""
    try:
        # a pipe would make the reader wait for ever
        if not os.path.isfile(path):
            return False
        with open(path, "rb") as file:
            return file.read(4) in _MARKS
    except OSError:
        return False


def container_of(path: str) -> str:
    """The container a file begins like.

    Raises : AudioFileError - missing, a folder, a device or pipe, not readable, empty, or none of CONTAINERS
    """
    if os.path.isdir(path):
        raise AudioFileError(f"{path}: it must be a sound file, got a folder: name a file in it")
    if os.path.exists(path) and not os.path.isfile(path):
        raise AudioFileError(f"{path}: it must be a sound file, got a device or pipe: save the sound to a file first")
    try:
        with open(path, "rb") as file:
            mark = file.read(4)
    except FileNotFoundError:
        raise AudioFileError(f"{path}: there is no such file: check the name") from None
    except OSError as error:
        raise AudioFileError(f"{path}: it cannot be read ({error.strerror}): check its permissions") from None
    if not mark:
        raise AudioFileError(f"{path}: it must be a sound file, got an empty file: record or export it again")
    if mark not in _MARKS:
        raise AudioFileError(f"{path}: it must be a sound file in {', '.join(CONTAINERS)}, got something else: convert it first")
    return _MARKS[mark]


def promised_frames(path: str, container: str, frame_bytes: int) -> int | None:
    """Frames the header of a WAV, RF64, W64 or AIFF file promises; None where it does not say."""
    readers = {"WAV": _wav_bytes, "RF64": _wav_bytes, "W64": _w64_bytes}
    try:
        with open(path, "rb") as file:
            if container == "AIFF":
                return _aiff_frames(file)
            size = readers[container](file) if container in readers else None
    except struct.error:
        return None
    return None if size is None else size // frame_bytes


def _wav_bytes(file: BinaryIO) -> int | None:
    file.seek(12)
    large = None
    while True:
        mark, size = struct.unpack("<4sI", file.read(8))
        if mark == b"data":
            if size == _UNKNOWN:
                return large
            return size or None
        if mark == b"ds64":
            _, large = struct.unpack("<QQ", file.read(16))
            file.seek(-16, os.SEEK_CUR)
        file.seek(size + size % 2, os.SEEK_CUR)


def _w64_bytes(file: BinaryIO) -> int | None:
    file.seek(40)
    while True:
        mark, _, size = struct.unpack("<4s12sQ", file.read(24))
        if mark == b"data" or size < 24:
            return size - 24 if size > 24 else None
        file.seek((size + 7) // 8 * 8 - 24, os.SEEK_CUR)


def _aiff_frames(file: BinaryIO) -> int | None:
    file.seek(12)
    while True:
        mark, size = struct.unpack(">4sI", file.read(8))
        if mark == b"COMM":
            _, frames = struct.unpack(">hI", file.read(6))
            return frames
        file.seek(size + size % 2, os.SEEK_CUR)
