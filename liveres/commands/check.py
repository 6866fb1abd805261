"""``liveres check``: can these files be used, and if not, what is wrong with them."""

from __future__ import annotations

import argparse
import json
import os
import sys
from pathlib import Path

import numpy as np

from liveres.engine.moves import load_moves
from liveres.engine.settings import Preset, check_playable
from liveres.errors import AudioFileError, FileError, ParameterError
from liveres.hosts.headers import is_sound
from liveres.hosts.soundfiles import EXTENSIONS, Source
from liveres.limits import INPUT_MAX
from liveres.presets import load_preset

_OTHER_SOUND = (".aac", ".au", ".m4a", ".mp3", ".oga", ".ogg", ".opus", ".wma")
# sound all the same: its reader says which formats it takes
_PIECE_FRAMES = 65_536
_SNIFFED_BYTES = 4096
# of a file whose name tells nothing: a header line of moves stands well within


def run(args: argparse.Namespace) -> int:
    """Print a line for every file, and every fault of it.

    Returns : 0 when all can be used, 2 when one cannot
    Raises : FileError - the file of --preset is wrong
    """
    preset = None if args.preset is None else load_preset(args.preset)
    results = [_check(path, preset) for path in args.paths]
    if args.json:
        print(json.dumps({"files": results}))
    for result in results:
        if result["ok"] and not args.json:
            print(f"{result['path']}: OK, {result['kind']}: {result['holds']}")
        for fault in result["faults"]:
            print(f"liveres: {fault}", file=sys.stderr)
    return 0 if all(result["ok"] for result in results) else 2


def _check(path: str, preset: Preset | None) -> dict[str, object]:
    kind = _kind(path)
    faults: list[str] = []
    holds = None
    try:
        if kind == "sound":
            holds = _check_sound(path, faults)
        elif kind == "moves":
            holds = _check_moves(path, preset)
        else:
            holds = _check_preset(path)
    except (FileError, AudioFileError, ParameterError) as error:
        faults += str(error).splitlines()
    return {"path": path, "kind": kind, "ok": not faults, "holds": holds, "faults": faults}


def _kind(path: str) -> str:
    suffix = Path(path).suffix.lower()
    if suffix in EXTENSIONS or suffix in _OTHER_SOUND or is_sound(path):
        return "sound"
    if suffix in (".csv", ".toml"):
        return "moves" if suffix == ".csv" else "preset"
    if not os.path.isfile(path):
        # the reader of presets says what is the matter
        return "preset"
    if not os.path.isfile(path):
        # the reader of presets says what is the matter; a pipe would keep this one waiting
        return "preset"
    try:
        with open(path, "rb") as file:
            begin = file.read(_SNIFFED_BYTES).decode("utf-8", "replace")
    except OSError:
        return "preset"
    lines = [line for line in begin.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    return "moves" if lines and {"filter", "field"} <= {cell.strip() for cell in lines[0].split(",")} else "preset"


def _check_preset(path: str) -> str:
    preset = load_preset(path)
    try:
        check_playable(preset)
    except ParameterError as error:
        raise ParameterError(f"{path}: {error}") from None
    kinds = [one.kind for one in preset.filters]
    notches, resonators = kinds.count("notch"), kinds.count("resonator")
    return f"{_count(notches, 'notch', 'es')}, {_count(resonators, 'resonator')}, {preset.rate_hz:g} Hz"


def _check_moves(path: str, preset: Preset | None) -> str:
    if preset is None:
        raise ParameterError(f"{path}: moves are for one preset, got none: name it with --preset")
    moves = load_moves(path, preset, preset.rate_hz)
    seconds = moves[-1].frame / preset.rate_hz if moves else 0.0
    return f"{_count(len(moves), 'move')}, the last at {seconds:.3f} s"


def _check_sound(path: str, faults: list[str]) -> str:
    frames = wrong = 0
    with Source(path) as source:
        for piece in source.pieces(_PIECE_FRAMES):
            frames += len(piece)
            # as the engine traps them; "not inside" counts NaN too
            wrong += int(np.count_nonzero(~(np.abs(piece) <= INPUT_MAX)))
    if frames < source.promised:
        faults.append(
            f"{path}: it must hold the {source.promised} frames its header promises, got {frames}: copy or record it again"
        )
    if wrong:
        faults.append(
            f"{path}: every sample must be a number from {-INPUT_MAX:g} to {INPUT_MAX:g}, where 1 is full scale, "
            f"got {wrong} that are not: export it again"
        )
    seconds = frames / source.rate_hz
    return f"{source.container} {source.subtype}, {_count(source.channels, 'channel')}, {source.rate_hz} Hz, {seconds:.2f} s"


def _count(number: int, word: str, plural: str = "s") -> str:
    return f"{number} {word}{'' if number == 1 else plural}"
