"""``liveres render``: sound files through a preset."""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import sys
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING

from liveres.commands.compiling import announce_compiling
from liveres.engine.moves import check_moves
from liveres.errors import ParameterError
from liveres.files import atomic_target, make_folder
from liveres.hosts.plans import plan_renders
from liveres.presets import load_preset

if TYPE_CHECKING:
    from liveres.hosts.many import Outcome


def run(args: argparse.Namespace) -> int:
    """Render one file to OUT, or every input into the folder of -o.

    Returns : 0 done; 1 when -o was given and some failed
    Raises : ParameterError, FileError, AudioFileError - the command line or a file is wrong; WriteError, OSError -
        a result cannot be written
    """
    preset = load_preset(args.preset)
    if args.moves is not None:
        check_moves(args.moves, preset)
    if args.out_dir is not None:
        return _render_into_folder(args)
    if len(args.paths) != 2:
        raise ParameterError(f"render takes IN and OUT, got {len(args.paths)} names: give both, or -o DIR for several inputs")
    in_path, out_path = args.paths
    if os.path.isdir(in_path) or os.path.isdir(out_path):
        folder = in_path if os.path.isdir(in_path) else out_path
        raise ParameterError(f"{folder} is a folder and must be a file: give the folder to render into as -o DIR")
    _check_report(args, args.paths)
    announce_compiling()
    from liveres.hosts.offline import render

    with _progress(args.quiet) as advance:
        report = render(in_path, out_path, args.preset, progress=advance, **_settings(args))
    _warn(report)
    _tell(args, report, [] if args.quiet else _summary(report))
    return 0


def _settings(args: argparse.Namespace) -> dict[str, object]:
    return {"moves": args.moves, "block_frames": args.block, "tail_s": args.tail}


def _check_report(args: argparse.Namespace, paths: Iterable[str | Path]) -> None:
    """The report must have a folder, and not fall on a file this render reads or writes."""
    if args.report is None:
        return
    place = os.path.realpath(args.report)
    if not os.path.isdir(os.path.dirname(place)):
        raise ParameterError(f"--report must lie in a folder that exists, got {args.report}: make the folder first")
    for path in (*paths, args.preset, args.moves):
        if path is not None and os.path.realpath(path) == place:
            raise ParameterError(
                f"--report must be a file of its own, got {args.report}, which this render uses: choose another name"
            )


def _render_into_folder(args: argparse.Namespace) -> int:
    if os.path.exists(args.out_dir) and not os.path.isdir(args.out_dir):
        raise ParameterError(f"-o must be a folder, got the file {args.out_dir}: choose another name")
    plans = plan_renders(args.paths, args.out_dir)
    make_folder(args.out_dir)
    _check_report(args, [path for plan in plans for path in (plan.in_path, plan.out_path)])
    announce_compiling()
    from liveres.hosts.many import render_many

    reports, errors = [], []
    with _progress(args.quiet) as advance:

        def ended(outcome: Outcome) -> None:
            if outcome.error is not None:
                errors.append(outcome.error)
                print("\n".join(f"liveres: {line}" for line in outcome.error.splitlines()), file=sys.stderr)
            else:
                reports.append(outcome.report)
                _warn(outcome.report)
                if not (args.quiet or args.json):
                    print(_summary(outcome.report)[0], flush=True)
            advance(len(reports) + len(errors), len(plans))

        render_many(plans, {"preset": args.preset, **_settings(args)}, ended)
    reports.sort(key=lambda report: report["input"])
    _tell(args, {"renders": reports, "errors": sorted(errors)}, [])
    return 1 if errors else 0


@contextlib.contextmanager
def _progress(quiet: bool) -> Iterator[Callable[[int, int], object]]:
    """A bar on the terminal, when standard error is one."""
    if quiet or not sys.stderr.isatty():
        yield lambda done, total: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TimeRemainingColumn

    columns = (BarColumn(), TaskProgressColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("")
        yield lambda done, total: bar.update(task, completed=done, total=total)


def _tell(args: argparse.Namespace, result: dict, lines: list[str]) -> None:
    if args.report is not None:
        with atomic_target(args.report) as temporary:
            Path(temporary).write_text(json.dumps(result, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
    if args.json:
        print(json.dumps(result))
    elif lines:
        print("\n".join(lines))


def _warn(report: dict) -> None:
    for note in report["notes"]:
        print(f"liveres: {report['output']}: {note}", file=sys.stderr)


def _summary(report: dict) -> list[str]:
    """What a person wants to know at the end; the first line stands by itself."""
    meters = report["meters"]
    lines = [
        f"{report['output']}: {report['seconds']:.2f} s, {report['channels']} x {report['rate_hz']:g} Hz, {report['subtype']}, "
        f"peak {_db(meters['peak_out_db'])} dBFS, {report['times_real_time']:.0f} times real time",
        f"  in   peak {_db(meters['peak_in_db'])} dBFS, rms {_db(meters['rms_in_db'])}",
        f"  out  peak {_db(meters['peak_out_db'])} dBFS, rms {_db(meters['rms_out_db'])}, "
        f"true peak {_db(report['true_peak_db'])}",
    ]
    held = {"limiter": "limiter_most_db", "bus limiter": "bus_limiter_most_db", "guard": "guard_most_db"}
    held = [f"{name} {_db(meters[key])} dB" for name, key in held.items() if meters[key] != 0.0]
    if held:
        lines.append(f"  held down at most: {', '.join(held)}")
    if any(meters["traps"].values()):
        lines.append(f"  faults caught: {meters['traps']['input']} input samples, {meters['traps']['state']} filter states")
    return [*lines, f"  samples {report['samples_sha256']}"]


def _db(level_db: float | None) -> str:
    return "-inf" if level_db is None else f"{level_db:.2f}"
