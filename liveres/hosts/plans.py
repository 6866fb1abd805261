"""Where the renders of many inputs go. Without the weight of the engine, so that a slip is told at once.

Thread: any.
"""

from __future__ import annotations

import os
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from liveres.errors import ParameterError
from liveres.hosts.soundfiles import EXTENSIONS


@dataclass(frozen=True)
class Plan:
    """One file to be rendered."""

    in_path: Path
    out_path: Path


def plan_renders(inputs: Iterable[str | Path], out_dir: str | Path) -> list[Plan]:
    """Where each input goes: a file under its own name in ``out_dir``, a folder's sound files under their paths in it.

    Sound files in folders are told by their endings; ``out_dir`` itself is left out when it lies in one.
    Raises : ParameterError - a folder without sound files; two inputs that would have the same output; an input that
        is its own output
    """
    plans = []
    for given in map(Path, inputs):
        found = _sound_files(given, Path(out_dir)) if given.is_dir() else [(given, Path(given.name))]
        if not found:
            raise ParameterError(f"{given}: it must hold sound files ({', '.join(EXTENSIONS)}), got none: name another folder")
        plans += [Plan(path, Path(out_dir) / place) for path, place in found]
    taken: dict[str, Plan] = {}
    for plan in plans:
        other = taken.setdefault(os.path.normcase(plan.out_path), plan)
        if other is not plan:
            raise ParameterError(
                f"{plan.in_path} and {other.in_path} would both become {plan.out_path}: render them into two folders"
            )
    sources = {os.path.realpath(plan.in_path) for plan in plans}
    for plan in plans:
        if os.path.realpath(plan.out_path) in sources:
            raise ParameterError(f"{plan.out_path} is an input and must not be written over: choose another folder with -o")
    return plans


def _sound_files(folder: Path, out_dir: Path) -> list[tuple[Path, Path]]:
    found = []
    for place, folders, names in os.walk(folder):
        folders[:] = sorted(name for name in folders if not _same_place(Path(place, name), out_dir))
        found += [Path(place, name) for name in sorted(names) if Path(name).suffix.lower() in EXTENSIONS]
    return [(path, path.relative_to(folder)) for path in found]


def _same_place(one: Path, other: Path) -> bool:
    return os.path.realpath(one) == os.path.realpath(other)
