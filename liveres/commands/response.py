"""``liveres response``: what a preset does, in numbers, as sections, as a picture."""

from __future__ import annotations

import argparse
import cmath
import csv
import io
import json
import logging
import math
from pathlib import Path

from liveres.engine.settings import Filter, Preset
from liveres.errors import ParameterError
from liveres.files import atomic_target
from liveres.json_values import for_json
from liveres.limits import CHANNELS
from liveres.presets import load_preset
from liveres.theory import response
from liveres.theory.poles import LN_1000
from liveres.units import db_from_gain, gain_from_db

PICTURES = (".png", ".svg")
_SOS_COLUMNS = ("kind", "name", "b0", "b1", "b2", "a0", "a1", "a2")


def run(args: argparse.Namespace) -> int:
    """Print the table and the totals; write --sos and --plot where asked.

    Raises : FileError, ParameterError - the preset is wrong, cannot exist at --rate, or the picture's name has another
        ending; WriteError - a result cannot be written
    """
    preset = load_preset(args.preset)
    if args.rate is not None:
        preset = preset.at_rate(args.rate)
    if args.plot is not None and Path(args.plot).suffix.lower() not in PICTURES:
        raise ParameterError(f"--plot must end in {' or '.join(PICTURES)}, got {args.plot}: choose one of them")
    shown = [one for one in preset.filters if args.channel is None or _passes(one, args.channel)]
    bank = [one for one in shown if one.kind == "resonator"]
    groups = _groups(preset) if args.channel is None else [(f"channel {args.channel}", args.channel)]
    bus_gain = _bus_gain(preset)
    result = {
        "preset": str(args.preset),
        "title": preset.title,
        "rate_hz": preset.rate_hz,
        "filters": [_row(one, preset.rate_hz) for one in shown],
        "totals": [_total(preset, label, channel, bus_gain) for label, channel in groups],
        "longest_decay_s": response.longest_decay_s(shown, preset.rate_hz),
        "trim_db": db_from_gain(bus_gain),
        "bus_limit_db": response.bus_limit_db(response.longest_decay_s(bank, preset.rate_hz), preset.ceiling_db),
        "ceiling_db": preset.ceiling_db,
    }
    if args.sos is not None:
        _write_sos(args.sos, shown, preset.rate_hz)
    if args.plot is not None:
        # without a home it can write to, it would talk of the temporary folder it makes do with
        logging.getLogger("matplotlib").setLevel(logging.ERROR)
        from liveres.commands.picture import draw

        label, channel = groups[0]
        if len(groups) > 1:
            label += " (the others differ: --channel N draws one)"
        draw(preset, channel, label, bus_gain, args.plot)
    if args.json:
        print(json.dumps(for_json(result)))
    else:
        print("\n".join([*_heading(result), *_table(result["filters"]), *_totals(result)]))
    return 0


def _passes(one: Filter, channel: int) -> bool:
    return one.channels is None or channel in one.channels


def _groups(preset: Preset) -> list[tuple[str, int]]:
    """A label and one channel of every group of channels that pass the same filters."""
    named = max((max(one.channels) for one in preset.filters if one.channels is not None), default=-1)
    rest = named + 1
    # a channel no filter names stands for all such
    groups = response.channel_groups(preset.filters, rest + 1)
    if len(groups) == 1:
        return [("every channel", 0)]
    labelled = []
    for group in groups:
        numbers = [str(channel) for channel in group if channel != rest]
        label = f"channel{'s' if len(numbers) > 1 else ''} {', '.join(numbers)}" if numbers else ""
        labelled.append((" and ".join(filter(None, [label, "all others" if rest in group else ""])), group[0]))
    return labelled


def _row(one: Filter, rate_hz: float) -> dict[str, object]:
    section = one.section(rate_hz)
    # from the section's own numbers, which keep their digits where 1 - R^2 would lose them
    width_hz = rate_hz / math.pi * math.atan(section.peak / (1.0 - section.peak))
    pole_pair, zero_pair = response.poles_and_zeros(one, rate_hz)
    return {
        "name": one.name,
        "kind": one.kind,
        "enabled": one.enabled,
        "centre_hz": one.centre_hz,
        "bandwidth_hz": width_hz,
        "q": one.centre_hz / width_hz,
        "decay_s": LN_1000 / (rate_hz * section.decay_rate),
        "level_db": getattr(one, one.level_field),
        "channels": one.channels,
        "pole": _polar(pole_pair[0]),
        "zero": _polar(zero_pair[0]),
    }


def _polar(number: complex) -> dict[str, float]:
    radius, angle = cmath.polar(number)
    return {"radius": radius, "angle_deg": math.degrees(angle)}


def _total(preset: Preset, label: str, channel: int, bus_gain: float) -> dict[str, object]:
    through, dry = gain_from_db(preset.input_db), gain_from_db(preset.dry_db)
    whole = response.steady_peak(preset.filters, preset.rate_hz, channel, "total", dry, bus_gain)
    bus = response.steady_peak(preset.filters, preset.rate_hz, channel, "bus", bus_gain=bus_gain)
    return {
        "channels": label,
        "gain_db": db_from_gain(through * whole.gain),
        "frequency_hz": whole.frequency_hz,
        "bus_gain_db": db_from_gain(through * bus.gain),
        "bus_frequency_hz": bus.frequency_hz,
    }


def _bus_gain(preset: Preset) -> float:
    """The factor ``trim`` puts on the resonators, over every channel there may be."""
    if not preset.trim:
        return 1.0
    through, dry, ceiling = (gain_from_db(level) for level in (preset.input_db, preset.dry_db, preset.ceiling_db))
    return response.trim_gain(preset.filters, preset.rate_hz, int(CHANNELS.high), through, dry, ceiling)


def _heading(result: dict) -> list[str]:
    title = f": {result['title']}" if result["title"] else ""
    return [f"{result['preset']}{title}, at {result['rate_hz']:g} Hz", ""]


def _table(rows: list[dict]) -> list[str]:
    if not rows:
        return ["no filters", ""]
    heads = ("name", "kind", "centre Hz", "width Hz", "Q", "decay s", "dB", "channels", "pole", "zero")
    cells = [
        (
            row["name"],
            row["kind"] if row["enabled"] else f"{row['kind']}, off",
            f"{row['centre_hz']:.2f}",
            f"{row['bandwidth_hz']:.4g}",
            f"{row['q']:.4g}",
            f"{row['decay_s']:.4g}",
            f"{row['level_db']:.2f}",
            "all" if row["channels"] is None else " ".join(map(str, row["channels"])),
            _point(row["pole"]),
            _point(row["zero"]),
        )
        for row in rows
    ]
    wide = [max(len(head), *(len(line[column]) for line in cells)) for column, head in enumerate(heads)]
    text = {0, 1, 7}
    return [
        "  ".join(
            cell.ljust(width) if column in text else cell.rjust(width)
            for column, (cell, width) in enumerate(zip(line, wide, strict=True))
        ).rstrip()
        for line in (heads, *cells)
    ] + [""]


def _point(polar: dict) -> str:
    return f"{polar['radius']:.7f} ∠ {polar['angle_deg']:.4f}°"


def _totals(result: dict) -> list[str]:
    lines = []
    for total in result["totals"]:
        lines.append(f"largest steady gain, {total['channels']}: {total['gain_db']:+.2f} dB at {total['frequency_hz']:.3f} Hz")
        if math.isfinite(total["bus_gain_db"]):
            lines.append(f"  of the resonators alone: {total['bus_gain_db']:+.2f} dB at {total['bus_frequency_hz']:.3f} Hz")
        over_db = total["gain_db"] - result["ceiling_db"]
        if over_db > 0:
            lines.append(f"  the limiter holds a full-scale sine there {over_db:.2f} dB down, at {result['ceiling_db']:g} dBFS")
    if result["trim_db"] == -math.inf:
        lines.append("trim: the dry sound alone reaches the ceiling, and no engine takes this preset: lower dry_db")
    elif result["trim_db"] < 0:
        lines.append(f"trim: the resonators are {-result['trim_db']:.2f} dB down, so that no full-scale sine passes the ceiling")
    decay_s, under_db = result["longest_decay_s"], result["ceiling_db"] - result["bus_limit_db"]
    lines.append(f"longest decay: {decay_s:.4g} s" if decay_s else "nothing rings")
    if under_db > 0:
        lines.append(
            f"  for it the resonators are held to {result['bus_limit_db']:.2f} dBFS, {under_db:.2f} dB under the ceiling: "
            "3 dB for each doubling over 1 s"
        )
    return lines


def _write_sos(path: str, filters: list[Filter], rate_hz: float) -> None:
    """Every number with all its digits, so that reading it back gives the same bits."""
    text = io.StringIO()
    rows = csv.writer(text, lineterminator="\n")
    rows.writerow(_SOS_COLUMNS)
    for one, section in zip(filters, response.sos(filters, rate_hz), strict=True):
        rows.writerow([one.kind, one.name, *(repr(float(number)) for number in section)])
    with atomic_target(path) as temporary:
        temporary.write_text(text.getvalue(), encoding="utf-8")
