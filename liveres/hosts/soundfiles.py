"""Sound files read and written as streams, a piece at a time, with every fault in the house's words.

Containers: WAV (RF64 above 4 GB), W64, CAF, AIFF, FLAC. Samples: 16-, 24- and 32-bit integers, 32- and 64-bit
floats. Integer samples are rounded here and written as integers, so that what is written is exactly what was
meant; titles and other tags are not carried over.
Thread: control.
"""

from __future__ import annotations

import errno
import hashlib
import os
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import soundfile

from liveres import limits
from liveres.errors import AudioFileError, ParameterError
from liveres.hosts.headers import CONTAINERS, container_of, promised_frames

EXTENSIONS = {
    ".wav": "WAV", ".rf64": "RF64", ".w64": "W64", ".caf": "CAF", ".flac": "FLAC",
    ".aif": "AIFF", ".aiff": "AIFF", ".aifc": "AIFF",
}
PCM_BITS = {"PCM_16": 16, "PCM_24": 24, "PCM_32": 32}
_BYTES = {"PCM_16": 2, "PCM_24": 3, "PCM_32": 4, "FLOAT": 4, "DOUBLE": 8}
_FAMILIES = {"WAV": "WAV", "WAVEX": "WAV", "RF64": "WAV"}
_FLAC_CHANNELS = 8
# the format has three bits for them
SMALL_FILE_BYTES = (1 << 32) - (1 << 16)
# WAV and AIFF count their bytes in 32 bits; 64 kB are left for headers
_PROBE_BYTES = 1 << 20
_SET_ADD_PEAK_CHUNK = 0x1050
# libsndfile's command of that name: the chunk carries the time of day, and the same render must give the same file
_FRAMES_UNKNOWN = (1 << 63) - 1
# as libsndfile says that the header does not tell: FLAC as stream encoders write it
_COUNTED_FRAMES = 1 << 16


class Source:
    """A sound file being read.

    path : file to read
    Raises : AudioFileError - missing, a folder, empty, not a sound file of a container above, a header cut short,
        samples of another encoding, no frames at all, channels or rate outside the limits

    frames : how many there are; counted by reading them where the header does not tell
    promised : how many the header promises; ``frames`` where it does not
    """

    def __init__(self, path: str | Path):
        self.path = str(path)
        kind = container_of(self.path)
        try:
            self._file = soundfile.SoundFile(self.path)
        except soundfile.LibsndfileError as error:
            raise AudioFileError(
                f"{self.path}: the {kind} header cannot be read ({_reason(error)}): "
                "the file is damaged or cut short, copy or record it again"
            ) from None
        try:
            self._check(kind)
        except AudioFileError:
            self._file.close()
            raise

    def _check(self, kind: str) -> None:
        file = self._file
        self.container, self.subtype = file.format, file.subtype
        self.rate_hz, self.channels, self.frames = file.samplerate, file.channels, file.frames
        if self.subtype not in _BYTES:
            raise AudioFileError(
                f"{self.path}: samples must be {', '.join(_BYTES)}, got {self.subtype}: convert it to PCM_16 or PCM_24 first"
            )
        self.dtype = np.dtype(np.float64 if self.subtype in ("PCM_32", "DOUBLE") else np.float32)
        try:
            limits.RATE_HZ.check("rate_hz", self.rate_hz)
            limits.CHANNELS.check("channels", self.channels)
        except ParameterError as error:
            raise AudioFileError(f"{self.path}: {error}") from None
        self._counts = self.frames == _FRAMES_UNKNOWN
        if self._counts:
            self.frames = self._count()
        self.promised = promised_frames(self.path, kind, self.channels * _BYTES[self.subtype]) or self.frames
        if self.frames == 0:
            raise AudioFileError(f"{self.path}: it must hold at least one frame, got 0: record or export it again")

    def pieces(self, frames: int) -> Iterator[np.ndarray]:
        """All of the sound, in arrays (frames, channels) of ``dtype``; the last may be shorter.

        A file that breaks off is given up to its last frame that can be read; compare what came with ``promised``.
        Raises : AudioFileError - not a single frame can be read
        """
        some = False
        for piece in self._readable(frames):
            some = True
            yield piece
        if not some:
            raise AudioFileError(
                f"{self.path}: its header promises {self.promised} frames and none can be read: "
                "the file is damaged or cut short, copy or record it again"
            )

    def _readable(self, frames: int) -> Iterator[np.ndarray]:
        done = 0
        while True:
            try:
                piece = self._read(self._file, frames)
            except soundfile.LibsndfileError:
                yield from self._last_frames(done, frames)
                return
            if len(piece) == 0:
                return
            done += len(piece)
            yield piece

    def _read(self, file: soundfile.SoundFile, frames: int) -> np.ndarray:
        if not self._counts:
            return file.read(frames, dtype=self.dtype.name, always_2d=True)
        # soundfile seeks after every piece, which fails at an end that the header does not tell: read by the library itself
        piece = np.empty((frames, self.channels), self.dtype)
        kind = "double" if self.dtype == np.float64 else "float"
        read = getattr(soundfile._snd, f"sf_readf_{kind}")
        return piece[: read(file._file, soundfile._ffi.cast(f"{kind}*", piece.ctypes.data), frames)]

    def _count(self) -> int:
        with soundfile.SoundFile(self.path) as file:
            return sum(iter(lambda: len(self._read(file, _COUNTED_FRAMES)), 0))

    def _last_frames(self, done: int, frames: int) -> Iterator[np.ndarray]:
        """What can still be read before the break: ever smaller pieces, each from a fresh start."""
        while frames > 1:
            frames //= 2
            with soundfile.SoundFile(self.path) as file:
                try:
                    file.seek(done)
                    piece = file.read(frames, dtype=self.dtype.name, always_2d=True)
                except soundfile.LibsndfileError:
                    continue
            if len(piece):
                done += len(piece)
                yield piece

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def __enter__(self) -> Source:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()


class Sink:
    """A sound file being written.

    target : where to write; ``path`` is what messages call it
    container, subtype, rate_hz, channels : as ``plan_container`` and the source give them
    ceiling : largest magnitude [linear] a sample may have, also after rounding to integers
    clipped : samples so far that no integer of the subtype could hold
    digest : SHA-256 of the samples so far, as the little-endian bytes of the subtype
    """

    def __init__(self, target: str | Path, path: str, container: str, subtype: str, rate_hz: int, channels: int, ceiling: float):
        self._target, self._subtype = str(target), subtype
        self.frames = self.clipped = 0
        self.digest = hashlib.sha256()
        if subtype in PCM_BITS:
            scale = 1 << (PCM_BITS[subtype] - 1)
            self._scale = float(scale)
            self._low, self._high = float(-scale), float(scale - 1)
            self._bound = float(np.floor(ceiling * scale))
        try:
            self._file = soundfile.SoundFile(self._target, "w", int(rate_hz), channels, subtype, format=container)
        except soundfile.LibsndfileError as error:
            raise AudioFileError(f"{path}: {container} cannot be written so ({_reason(error)}): choose another ending") from None
        soundfile._snd.sf_command(self._file._file, _SET_ADD_PEAK_CHUNK, soundfile._ffi.NULL, 0)

    def write(self, block: np.ndarray) -> np.ndarray:
        """Add frames (frames, channels) float; returns them as they now stand in the file.

        Raises : OSError - the system did not take it all
        """
        raw, written, packed = self._encode(block)
        try:
            self._file.write(raw)
        except (soundfile.LibsndfileError, AssertionError):
            # soundfile asserts that every frame was taken
            raise self._refusal() from None
        self.digest.update(packed)
        self.frames += len(block)
        return written

    def _encode(self, block: np.ndarray) -> tuple[np.ndarray, np.ndarray, bytes]:
        if self._subtype not in PCM_BITS:
            raw = block.astype(np.float32 if self._subtype == "FLOAT" else np.float64)
            return raw, raw, raw.astype(raw.dtype.newbyteorder("<")).tobytes()
        grid = np.rint(block.astype(np.float64) * self._scale)
        self.clipped += int(np.count_nonzero((grid < self._low) | (grid > self._high)))
        grid = np.clip(grid, max(self._low, -self._bound), min(self._high, self._bound))
        numbers = grid.astype("<i4")
        if self._subtype == "PCM_16":
            return numbers.astype(np.int16), grid / self._scale, numbers.astype("<i2").tobytes()
        if self._subtype == "PCM_24":
            low_bytes = numbers.reshape(-1, 1).view(np.uint8)[:, :3]
            return (numbers << 8).astype(np.int32), grid / self._scale, low_bytes.tobytes()
        return numbers.astype(np.int32), grid / self._scale, numbers.tobytes()

    def close(self) -> None:
        """Finish the file, whole or not."""
        self._file.close()

    def check(self) -> None:
        """Make sure that all of a closed file is there; the sound library does not tell when its last write fails.

        Raises : OSError - the system did not take it all
        """
        try:
            with soundfile.SoundFile(self._target) as file:
                file.seek(self.frames - 1)
                whole = file.frames == self.frames and len(file.read(1, always_2d=True)) == 1
        except soundfile.LibsndfileError:
            whole = False
        if not whole:
            raise self._refusal()

    def _refusal(self) -> OSError:
        """The system's own reason, which the sound library keeps to itself: got by trying to write once more."""
        try:
            with open(self._target, "ab") as file:
                file.write(bytes(_PROBE_BYTES))
                file.flush()
                os.fsync(file.fileno())
        except OSError as error:
            return OSError(error.errno, error.strerror)
        return OSError(errno.EIO, os.strerror(errno.EIO))


def plan_container(source: Source, out_path: str | Path, frames: int) -> tuple[str, str | None]:
    """The container ``out_path`` asks for by its extension, and a remark when it is not quite that one.

    frames : how many will be written
    Raises : AudioFileError - unknown extension; a container that cannot hold the subtype, the channels or the length
    """
    suffix = Path(out_path).suffix.lower()
    if suffix not in EXTENSIONS:
        raise AudioFileError(
            f"{out_path}: the name must end in one of {', '.join(EXTENSIONS)}, got {suffix or 'no ending'}: "
            "the ending chooses the container"
        )
    container = EXTENSIONS[suffix]
    if container == _FAMILIES.get(source.container):
        container = source.container
    if not soundfile.check_format(container, source.subtype):
        able = [name for name in CONTAINERS if soundfile.check_format(name, source.subtype)]
        raise AudioFileError(
            f"{out_path}: {container} cannot hold {source.subtype} samples, which {source.path} has: "
            f"choose an ending for {', '.join(able)}"
        )
    if container == "FLAC" and source.channels > _FLAC_CHANNELS:
        raise AudioFileError(f"{out_path}: FLAC holds at most {_FLAC_CHANNELS} channels, got {source.channels}: choose .wav")
    if frames * source.channels * _BYTES[source.subtype] <= SMALL_FILE_BYTES:
        return container, None
    if container in ("WAV", "WAVEX"):
        return "RF64", "written as RF64, because WAV ends at 4 GB"
    if container == "AIFF":
        raise AudioFileError(f"{out_path}: AIFF ends at 4 GB, and this is longer: choose .wav, .w64, .caf or .flac")
    return container, None


def _reason(error: Exception) -> str:
    text = getattr(error, "error_string", str(error)).strip().rstrip(".")
    return text or "no reason given"
