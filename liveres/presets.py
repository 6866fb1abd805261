"""Preset files: TOML with the field names of ``liveres.engine.settings``, read strictly, written without loss.

Top-level keys are the fields of Preset, ``[watch]`` holds those of Watch, and every filter is a ``[[filters]]`` table
whose ``kind`` is "notch" or "resonator" and whose other keys are the fields of that class. Faults name their place with
the filters counted from 1, as people count: ``filters[2].centre_hz`` is in the file's second ``[[filters]]`` table.
Thread: control.
"""

from __future__ import annotations

import json
import os
import tomllib
from dataclasses import asdict
from functools import partial
from typing import TYPE_CHECKING

from liveres import limits
from liveres.engine.settings import (
    FILTER_CHECKS,
    KINDS,
    PRESET_CHECKS,
    WIDTHS,
    Check,
    Filter,
    Notch,
    Preset,
    check_one_width,
    excess_kinds,
    repeated_names,
)
from liveres.engine.watch import WATCH_CHECKS, Watch
from liveres.errors import Fault, FileError, ParameterError, nearest, told
from liveres.files import atomic_target, number_text, read_text
from liveres.toml_lines import Place, dotted, line_of, syntax_fault, value_lines

if TYPE_CHECKING:
    from tomlkit import TOMLDocument
    from tomlkit.items import Table

_TOP_KEYS = ("title", "notes", "rate_hz", "input_db", "dry_db", "ceiling_db", "lookahead_s", "guard", "trim")
_FILTER_KEYS = {
    kind: ("kind", "name", "centre_hz", made.level_field, *WIDTHS, *made.extra_fields, "channels", "enabled", "origin")
    for kind, made in KINDS.items()
}
# in the order they are written
_TABLES = ("filters", "watch")
_UNOFFERED = ("origin",)
# legal, but the program's own note of who put a filter there
_KIND_CHECKS = {kind: {key: FILTER_CHECKS[key] for key in keys} for kind, keys in _FILTER_KEYS.items()}
_DEFAULTS = {key: getattr(Preset, key) for key in _TOP_KEYS}
_FILTER_DEFAULTS = {"normalise": "peak", "channels": None, "enabled": True, "origin": "preset"}
# keys that hold these are not added to a file


# --- reading ----------------------------------------------------------------------------------


def load_preset(path: str | os.PathLike[str]) -> Preset:
    """The preset in a TOML file; every fault of the file is reported at once.

    path : the file; UTF-8, at most 16 MB with at most 128 notches and 16,384 resonators
    Returns : Preset; fields the file leaves out have their defaults, rate_hz 48000 among them
    Raises : FileError - no such file, a folder or device, unreadable, too large, empty or not UTF-8; not TOML; an
        unknown or missing key; a value of the wrong type, outside its range or illegal at rate_hz; no width or several; a
        name twice; too many filters
    """
    return _read_preset(path, read_text(path, limits.PRESET_BYTES))


def _read_preset(path: object, text: str) -> Preset:
    data = _parse(path, text)
    faults: list[tuple[Place, str]] = []
    filters = data.pop("filters", [])
    watch = _read_watch(data.pop("watch", None), faults)
    values = _take(data, {key: PRESET_CHECKS[key] for key in _TOP_KEYS}, "a preset", (), faults, _TABLES)
    rate_hz = values.get("rate_hz", None if "rate_hz" in data else Preset.rate_hz)
    made = _read_filters(filters, rate_hz, faults)
    if faults:
        lines = value_lines(text)
        raise FileError(path, [Fault(dotted(place), message, line_of(lines, place)) for place, message in faults])
    return Preset(filters=made, watch=watch, **values)


def _parse(path: object, text: str) -> dict[str, object]:
    try:
        data = tomllib.loads(text)
    except RecursionError:
        raise FileError(path, [Fault("", "file must be TOML, got brackets nested too deeply: write it flatter")]) from None
    except ValueError as error:
        raise FileError(path, [Fault("", *syntax_fault(text, error))]) from None
    if not data:
        raise FileError(path, [Fault("", "file must set at least one key, got comments alone: write a preset into it")])
    return data


def _read_watch(table: object, faults: list[tuple[Place, str]]) -> Watch | None:
    if table is None:
        return None
    if not isinstance(table, dict):
        faults.append((("watch",), f"watch must be a table, got {told(table)}: begin it with [watch]"))
        return None
    good = _take(table, WATCH_CHECKS, "a watch", ("watch",), faults)
    return Watch(**good)


def _read_filters(tables: object, rate_hz: float | None, faults: list[tuple[Place, str]]) -> list[Filter | None]:
    if not isinstance(tables, list):
        message = f"filters must be a list of tables, got {told(tables)}: begin each filter with [[filters]], in two brackets"
        faults.append((("filters",), message))
        return []
    made: list[Filter | None] = []
    for number, table in enumerate(tables, start=1):
        if isinstance(table, dict):
            made.append(_read_filter(table, ("filters", number), rate_hz, faults))
        else:
            message = f"filters must hold tables, got {told(table)}: begin each filter with [[filters]]"
            faults.append((("filters", number), message))
    tables = [table if isinstance(table, dict) else {} for table in tables]
    numbers = [number for number, table in enumerate(tables, start=1) if isinstance(table.get("name"), str)]
    for place, message in repeated_names(tables[number - 1]["name"] for number in numbers):
        faults.append((("filters", numbers[place], "name"), message))
    numbers = [number for number, table in enumerate(tables, start=1) if table.get("kind") in tuple(KINDS)]
    for place, message in excess_kinds(tables[number - 1]["kind"] for number in numbers):
        faults.append((("filters", numbers[place]), message))
    return made


def _read_filter(
    table: dict[str, object], place: Place, rate_hz: float | None, faults: list[tuple[Place, str]]
) -> Filter | None:
    """The filter of one table, or None when it has a fault; every fault is added to ``faults``."""
    found: list[tuple[Place, str]] = []
    kind = table.get("kind")
    kind = kind if kind in tuple(KINDS) else None
    checks = _KIND_CHECKS.get(kind, FILTER_CHECKS)
    if rate_hz is not None:
        checks = {**checks, "centre_hz": partial(limits.check_centre, rate_hz=rate_hz)}
    good = _take(table, checks, f"a {kind or 'filter'}", place, found)
    needed = ("kind", "name", "centre_hz", *([KINDS[kind].level_field] if kind else ()))
    found += [((*place, key), f"{key} must be given, got none: add it") for key in needed if key not in table]
    widths = [key for key in table if key in WIDTHS]
    try:
        check_one_width(widths)
    except ParameterError as error:
        found.append(((*place, *widths[1:2]), str(error)))
    made = None
    if not found:
        made = KINDS[kind](**{key: value for key, value in good.items() if key != "kind"})
    if rate_hz is not None and "centre_hz" in good and len(widths) == 1 and widths[0] in good:
        found += _width_faults(made, good, widths[0], place, rate_hz)
    if found:
        name = good.get("name")
        faults += [(where, f"filter {name!r}: {message}" if name else message) for where, message in found]
    return made


def _width_faults(
    made: Filter | None, good: dict[str, object], key: str, place: Place, rate_hz: float
) -> list[tuple[Place, str]]:
    """A width illegal at the rate, also of a filter whose other fields have faults: centre and width suffice."""
    try:
        (made or Notch("stand-in", good["centre_hz"], 0.0, **{key: good[key]})).section(rate_hz)
    except ParameterError as error:
        return [((*place, key), str(error))]
    return []


def _take(
    table: dict[str, object],
    checks: dict[str, Check],
    owner: str,
    place: Place,
    faults: list[tuple[Place, str]],
    tables: tuple[str, ...] = (),
) -> dict[str, object]:
    """The checked values of a table's legal keys; unknown keys and bad values are added to ``faults``.

    tables : further keys to offer for an unknown one
    """
    good = {}
    offered = [key for key in (*checks, *tables) if key not in _UNOFFERED]
    for key, value in table.items():
        try:
            if key not in checks:
                raise ParameterError(f"{key!r} is not a key of {owner}: {nearest(key, offered)}")
            good[key] = checks[key](key, value)
        except ParameterError as error:
            faults.append(((*place, key), str(error)))
    return good


# --- writing ----------------------------------------------------------------------------------


def save_preset(preset: Preset, path: str | os.PathLike[str]) -> None:
    """Write a preset so that loading the file gives an equal one.

    Where ``path`` holds TOML already, its comments and order stay and only what differs is rewritten: filters are
    matched by name, new ones added, missing ones dropped with the comment lines above them. Any other file is
    replaced whole. The old file stands until the new one is complete.

    Raises : WriteError - the folder is missing or refuses, the target is a folder or protected, the disk is full
        ParameterError - a name, title or note holds half a character (a lone surrogate), which no file can
    """
    text = _fresh_text(preset)
    try:
        text = _merged_text(read_text(path, limits.PRESET_BYTES), preset) or text
    except FileError:
        pass  # nothing there to keep, or nothing readable
    try:
        data = text.encode()
    except UnicodeEncodeError as error:
        wrong = text[error.start]
        raise ParameterError(f"title, notes and names must be whole characters, got {wrong!r}: remove it") from None
    with atomic_target(path) as temporary:
        temporary.write_bytes(data)


def _top_values(preset: Preset) -> dict[str, object]:
    return {key: getattr(preset, key) for key in _TOP_KEYS}


def _filter_values(one: Filter) -> dict[str, object]:
    """Every key a filter can be written with, in order; of the widths only the one it has."""
    return {key: getattr(one, key) for key in _FILTER_KEYS[one.kind] if key not in WIDTHS or key == one.width[0]}


def _fresh_text(preset: Preset) -> str:
    top = _pairs(_top_values(preset), {"title": "", "notes": ""})
    if preset.watch is not None:
        top += f"\n[watch]\n{_pairs(asdict(preset.watch), {})}"
    return top + "".join(f"\n[[filters]]\n{_pairs(_filter_values(one), _FILTER_DEFAULTS)}" for one in preset.filters)


def _pairs(values: dict[str, object], defaults: dict[str, object]) -> str:
    return "".join(
        f"{key} = {_literal(value)}\n" for key, value in values.items() if key not in defaults or value != defaults[key]
    )


def _literal(value: object) -> str:
    """A value in TOML; several lines of text stay several lines."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, tuple):
        return f"[{', '.join(map(str, value))}]"
    if not isinstance(value, str):
        return number_text(value)
    escaped = [json.dumps(line, ensure_ascii=False).replace("\x7f", "\\u007f")[1:-1] for line in value.split("\n")]
    return f'"{escaped[0]}"' if len(escaped) == 1 else '"""\n' + "\n".join(escaped) + '"""'


def _merged_text(old: str, preset: Preset) -> str | None:
    """The old text changed to hold the preset; None when it is no TOML or cannot be made to hold it."""
    import tomlkit
    from tomlkit.exceptions import TOMLKitError

    try:
        tomllib.loads(old)
        document = tomlkit.parse(old if old.endswith("\n") else old + "\n")
        held, ending = _cut_filters(document)
        watch = document.pop("watch", None) or tomlkit.table()
        _update(document, _top_values(preset), _DEFAULTS)
        if preset.watch is not None:
            _update(watch, asdict(preset.watch), {})
            document.append("watch", watch)
        if preset.filters:
            document.append("filters", tomlkit.aot())
        for one in preset.filters:
            table, above = held.get(one.name) or (tomlkit.parse("[[filters]]\n")["filters"][0], "\n")
            _update(table, _filter_values(one), _FILTER_DEFAULTS)
            document["filters"].append(table)
            table.trivia.indent = above
        text = document.as_string() + ending
        return text if _read_preset("", text) == preset else None
    except (TOMLKitError, ValueError, RecursionError):
        return None


def _cut_filters(document: TOMLDocument) -> tuple[dict[str, tuple[Table, str]], str]:
    """Take the filters out of a document: each one's table and the lines above it, by name; and the last lines.

    tomlkit counts all lines up to the next header to the table before. Those from the first blank one on, or all
    where none is blank, go with the filter below them instead, wherever it goes.
    """
    from tomlkit.items import AoT

    tables = document.get("filters")
    if not isinstance(tables, AoT):
        return {}, ""
    held = {}
    lines = _cut_tail(document.body, [item for _, item in document.body].index(tables))
    for table in tables:
        held[str(table.get("name"))] = table, lines + table.trivia.indent
        lines = _cut_tail(table.value.body, len(table.value.body))
    del document["filters"]
    return held, lines


def _cut_tail(body: list, end: int) -> str:
    """Cut the comments and blank lines that stand just before position ``end``, and return their text."""
    from tomlkit.items import Null, Whitespace

    start = end
    while start and body[start - 1][0] is None:
        start -= 1
    start = next((at for at in range(start, end) if isinstance(body[at][1], Whitespace)), start)
    text = "".join(item.as_string() for _, item in body[start:end])
    for at in range(start, end):  # a place keeper: tomlkit remembers positions
        body[at] = (None, Null())
    return text


def _update(table: TOMLDocument | Table, values: dict[str, object], defaults: dict[str, object]) -> None:
    """Make a table hold the values and nothing else; those that are equal already keep their spelling."""
    import tomlkit

    old = {**defaults, **table.unwrap()}
    for key in [key for key in table if values.get(key) is None]:
        del table[key]
    for key, value in values.items():
        held = tuple(old[key]) if isinstance(old.get(key), list) else old.get(key)
        if value is not None and (held != value or isinstance(held, bool) != isinstance(value, bool)):
            table[key] = tomlkit.value(_literal(value))
