"""Rendering a sound file through a preset: the engine of a live session, fed from a file.

    file -> float32 (float64 for 32-bit integers and doubles) -> Processor, with its moves -> the same kind of file

Memory does not grow with length. The output is the input's length plus the tail, and frame 0 answers frame 0:
the latency of a look-ahead is taken out again.
Thread: control.
"""

from __future__ import annotations

import math
import os
import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from liveres import limits
from liveres.engine.moves import Move, load_moves, retunes
from liveres.engine.processor import Processor
from liveres.engine.settings import Preset
from liveres.errors import AudioFileError
from liveres.files import atomic_target
from liveres.hosts.report import file_sha256, settings_sha256, versions
from liveres.hosts.soundfiles import Sink, Source, plan_container
from liveres.json_values import for_json
from liveres.presets import load_preset
from liveres.theory.true_peak import TruePeak
from liveres.units import db_from_gain, gain_from_db

_PIECE_FRAMES = 16_384
# read and written at once, rounded up to whole blocks: far above the cost of a call, far below that of memory

_STILL_RINGS_DB = -60.0
# a resonator cut off above this is heard to be cut off

Progress = Callable[[int, int], object]
# called with the frames written and the frames expected, after every piece


def render(
    in_path: str | os.PathLike[str],
    out_path: str | os.PathLike[str],
    preset: Preset | str | os.PathLike[str],
    moves: str | os.PathLike[str] | Iterable[Move] | None = None,
    block_frames: int = 1024,
    tail_s: float = 0.0,
    progress: Progress | None = None,
) -> dict[str, object]:
    """Render a sound file through a preset into another, and report on it.

    in_path : WAV, RF64, W64, CAF, AIFF or FLAC of 16-, 24-, 32-bit integers, floats or doubles; 1 to 32 channels
    out_path : its ending chooses the container; rate, channels and sample type stay. It is complete or not there
    preset : Preset, or the path of a preset file; moved to the file's rate
    moves : Moves in any order, or the path of a moves file; each acts on its exact frame, those of one retune together
    block_frames : int, closed [1, 65536]; the result does not depend on it
    tail_s : float [s], closed [0, 600]; how long to go on after the input has ended
    progress : called as the render goes on; an error it raises ends the render, and nothing is written
    Returns : dict of plain values, fit for JSON
    Raises : ParameterError - a parameter outside its range; a filter that cannot exist at the file's rate; a move of an
        unknown filter. FileError - the preset or moves file is wrong. AudioFileError - in_path cannot be read;
        out_path names a container that cannot hold the sound, or a file this render reads. WriteError - the
        folder of out_path refuses, the disk is full
    """
    block_frames = limits.check_whole("block_frames", block_frames, limits.BLOCK_FRAMES)
    tail_s = limits.TAIL_S.check("tail_s", tail_s)
    began = time.perf_counter()
    preset_path = None if isinstance(preset, Preset) else str(os.fspath(preset))
    moves_path = str(os.fspath(moves)) if isinstance(moves, (str, os.PathLike)) else None
    settings = preset if preset_path is None else load_preset(preset_path)
    with Source(in_path) as source:
        _check_own_place(out_path, (in_path, preset_path, moves_path))
        settings = settings.at_rate(source.rate_hz)
        if moves_path is not None:
            moves = load_moves(moves_path, settings, source.rate_hz)
        tail_frames = round(tail_s * source.rate_hz)
        container, remark = plan_container(source, out_path, source.frames + tail_frames)
        processor = Processor(settings, rate_hz=source.rate_hz, channels=source.channels)
        run = _Run(source, processor, deque(retunes(moves or ())), block_frames, tail_frames)
        with atomic_target(out_path) as temporary:
            sink = Sink(
                temporary, str(out_path), container, source.subtype, source.rate_hz, source.channels,
                gain_from_db(settings.ceiling_db),
            )
            try:
                run.into(sink, progress)
            finally:
                sink.close()
            sink.check()
            digest = file_sha256(temporary)
        report = run.report(sink, time.perf_counter() - began)
    report["notes"] = [remark, *report["notes"]] if remark else report["notes"]
    report |= {
        "input": str(in_path),
        "output": str(out_path),
        "container": container,
        "output_sha256": digest,
        "preset": preset_path,
        "preset_sha256": preset_path and file_sha256(preset_path),
        "settings_sha256": settings_sha256(settings),
        "moves": moves_path,
        "moves_sha256": moves_path and file_sha256(moves_path),
        "versions": versions(),
    }
    return for_json(report)


def _check_own_place(out_path: object, used: Iterable[object]) -> None:
    """AudioFileError when the output is, by whatever name or link, a file this render reads."""
    for path in used:
        if path is not None and os.path.exists(out_path) and os.path.samefile(out_path, path):
            raise AudioFileError(
                f"{out_path}: it must not be a file this render reads, got the same file as {path}: choose another name"
            )


@dataclass
class _Run:
    """One render on its way from a source through the engine into a sink."""

    source: Source
    processor: Processor
    retunes: deque[tuple[Move, ...]]
    block_frames: int
    tail_frames: int
    frames_in: int = 0
    moves_made: int = 0
    position: int = 0
    # the next frame the engine hears

    def into(self, sink: Sink, progress: Progress | None) -> None:
        """Everything through the engine, then the tail, then what a look-ahead still holds."""
        self.true_peak = TruePeak(self.source.channels)
        skip = self.processor.latency_frames
        # one piece is measured and written while the next is processed: neither needs the interpreter
        with ThreadPoolExecutor(1) as beside:
            writing: Future[None] | None = None
            for piece in self._input(skip):
                heard = np.concatenate(list(self._processed(piece)))[skip:]
                # the engine keeps but the newest events until they are read
                self.processor.events()
                skip -= min(skip, len(piece))
                if writing is not None:
                    writing.result()
                    if progress is not None:
                        progress(sink.frames, max(sink.frames, self.source.frames + self.tail_frames))
                writing = beside.submit(self._keep, heard, sink)
            if writing is not None:
                writing.result()
        if progress is not None:
            progress(sink.frames, sink.frames)

    def _keep(self, heard: np.ndarray, sink: Sink) -> None:
        if len(heard):
            self.true_peak.feed(sink.write(heard))

    def _input(self, latency: int) -> Iterator[np.ndarray]:
        size = math.ceil(_PIECE_FRAMES / self.block_frames) * self.block_frames
        for piece in self.source.pieces(size):
            self.frames_in += len(piece)
            yield piece
        left = self.tail_frames + latency
        while left > 0:
            yield np.zeros((min(size, left), self.source.channels), self.source.dtype)
            left -= size

    def _processed(self, piece: np.ndarray) -> Iterator[np.ndarray]:
        """The piece in blocks, cut at every move so that each acts on its exact frame."""
        start = 0
        while start < len(piece):
            while self.retunes and self.retunes[0][0].frame <= self.position:
                together = self.retunes.popleft()
                changes = {move.field: move.value for move in together}
                self.processor.retune(together[0].filter, ramp_s=together[0].ramp_s, **changes)
                self.moves_made += len(together)
            end = min(start + self.block_frames, len(piece))
            if self.retunes:
                end = min(end, start + self.retunes[0][0].frame - self.position)
            yield self.processor.process(piece[start:end])
            self.position += end - start
            start = end

    def report(self, sink: Sink, seconds: float) -> dict[str, object]:
        """What was heard on the way, once the sink is closed."""
        source = self.source
        cut_short = self.frames_in < source.promised
        return {
            "rate_hz": source.rate_hz,
            "channels": source.channels,
            "subtype": source.subtype,
            "frames": sink.frames,
            "seconds": sink.frames / source.rate_hz,
            "frames_in": self.frames_in,
            "frames_promised": source.promised,
            "cut_short": cut_short,
            "latency_frames": self.processor.latency_frames,
            "moves_made": self.moves_made,
            "moves_left": self._moves_left(),
            "meters": self.processor.meters(),
            "true_peak_db": db_from_gain(self.true_peak.finish()),
            "events": self.processor.events(),
            "clipped_samples": sink.clipped,
            "samples_sha256": sink.digest.hexdigest(),
            "render_seconds": seconds,
            "times_real_time": sink.frames / source.rate_hz / seconds,
            "notes": list(self._notes(sink, cut_short)),
        }

    def _moves_left(self) -> int:
        return sum(map(len, self.retunes))

    def _notes(self, sink: Sink, cut_short: bool) -> Iterator[str]:
        if cut_short:
            yield (
                f"{self.source.path} is cut short: its header promises {self.source.promised} frames, "
                f"{self.frames_in} can be read, and those were rendered"
            )
        if sink.clipped:
            yield f"samples clipped at full scale: {sink.clipped}; a ceiling_db below 0 leaves them room"
        ringing_db = self.processor.meters()["recent_peak_out_db"]
        if self.processor.longest_decay_s and ringing_db > _STILL_RINGS_DB:
            yield (
                f"the output ends while it still rings at {ringing_db:.0f} dBFS; "
                f"--tail {math.ceil(self.tail_frames / self.source.rate_hz + self.processor.longest_decay_s)} lets it ring out"
            )
        if self.retunes:
            yield f"moves after the end, not made: {self._moves_left()}; a longer tail makes room for them"
