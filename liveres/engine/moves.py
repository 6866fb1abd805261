"""Moves files: changes to filters at exact frames, as CSV, read strictly and written without loss.

    time_s,filter,field,value,ramp_s
    0.5,bell,gain_db,-3,0.02

The header names the columns, in any order: ``time_s`` or ``frame``, ``filter``, ``field``, ``value`` and, if wanted,
``ramp_s``. Blank lines and lines that begin with # count for nothing (a name that begins with # and stands first goes
in quotes). Rows may stand in any order; those of one frame act in file order, and neighbours among them that move
different fields of one filter over the same ramp act together, as one retune.
Thread: control.
"""

from __future__ import annotations

import csv
import io
import itertools
import os
import re
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction

from liveres import limits
from liveres.engine.settings import FILTER_CHECKS, KINDS, WIDTHS, Filter, Preset
from liveres.errors import Fault, FileError, ParameterError, nearest
from liveres.files import atomic_target, number_text, read_text

MOVABLE = {kind: ("centre_hz", made.level_field, *WIDTHS, "enabled") for kind, made in KINDS.items()}
_ANY_FIELD = tuple(dict.fromkeys(itertools.chain(*MOVABLE.values())))
# the fields a move may change, by kind of filter and of all kinds

COLUMNS = ("time_s", "frame", "filter", "field", "value", "ramp_s")

_NAMES_TO_LIST = 64
# beyond it a list of names helps nobody, and a file of wrong names would take minutes to compare

_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?|[+-]?inf|nan", re.ASCII)


@dataclass(frozen=True)
class Move:
    """One change of one field of one filter.

    frame : int, closed [0, 2^53]; the first frame it acts on
    filter : str; name of the filter
    field : "centre_hz", "depth_db", "gain_db", "enabled" or a width, which takes the place of the filter's width
    value : float in the field's unit and range, or bool for "enabled"
    ramp_s : float [s], closed [0, 600]; 0 jumps; None is 0.02, limits.RETUNE_S
    Raises : ParameterError - a frame, field, value or ramp outside its range
    >>> Move(24000, "bell", "gain_db", -3).ramp_s
    0.02
    """

    frame: int
    filter: str
    field: str
    value: float | bool
    ramp_s: float | None = None

    def __post_init__(self) -> None:
        ramp_s = limits.RETUNE_S if self.ramp_s is None else self.ramp_s
        checked = {
            "frame": limits.check_whole("frame", self.frame, limits.MOVE_FRAME),
            "filter": FILTER_CHECKS["name"]("filter", self.filter),
            "field": _check_field(self.field, _ANY_FIELD, "a filter"),
            "value": FILTER_CHECKS[self.field](self.field, self.value),
            "ramp_s": limits.RAMP_S.check("ramp_s", ramp_s),
        }
        for key, value in checked.items():
            object.__setattr__(self, key, value)


def _check_field(field: str, known: tuple[str, ...], owner: str) -> str:
    if field not in known:
        raise ParameterError(f"field must be one that moves can change in {owner}, got {field!r}: {nearest(str(field), known)}")
    return field


# --- reading ----------------------------------------------------------------------------------


def load_moves(path: str | os.PathLike[str], preset: Preset, rate_hz: float) -> tuple[Move, ...]:
    """The moves in a CSV file, in order of their frames; every fault of the file is reported at once.

    frame = round(time_s rate_hz), reckoned exactly however large the time; half a frame goes to the even one.
    Every move must leave its filter legal at the rate, given the moves before it.

    path : the file; UTF-8, at most 64 MB
    preset : the preset the moves play upon
    rate_hz : float [Hz], closed [8000, 192000]; the rate it is played at, which pole_radius moves refer to
    Raises : FileError - no such file, a folder or device, unreadable, too large, empty or not UTF-8; a column missing,
        unknown or twice; a row with too few or too many cells; a filter not in the preset; a field that filter has
        not; a value, time or ramp that is no number or outside its range; a filter made illegal at rate_hz
        ParameterError - the preset cannot exist at rate_hz
    """
    preset = preset.at_rate(rate_hz)
    faults: list[Fault] = []
    found = _read_moves(path, preset, rate_hz, faults)
    faults += _state_faults(found, preset, rate_hz)
    if faults:
        raise FileError(path, faults)
    return tuple(move for _, move in found)


def check_moves(path: str | os.PathLike[str], preset: Preset) -> None:
    """Refuse a moves file for what is wrong with it at every sample rate, while the one it will play at is not known.

    Raises : FileError - as ``load_moves``, but for times out of range and filters made illegal at a rate
    """
    faults: list[Fault] = []
    # the lowest rate has room for the longest times
    _read_moves(path, preset, limits.RATE_HZ.low, faults)
    if faults:
        raise FileError(path, faults)


def retunes(moves: Iterable[Move]) -> Iterator[tuple[Move, ...]]:
    """Moves in order of their frames, those that act together in one tuple.

    These are neighbours of one frame, filter and ramp. The same field again, or a second width, begins a new retune.
    """
    together: list[Move] = []
    for move in sorted(moves, key=lambda move: move.frame):
        if together and not _acts_with(move, together):
            yield tuple(together)
            together = []
        together.append(move)
    if together:
        yield tuple(together)


def _acts_with(move: Move, together: list[Move]) -> bool:
    first = together[0]
    if (move.frame, move.filter, move.ramp_s) != (first.frame, first.filter, first.ramp_s):
        return False
    fields = {one.field for one in together}
    return move.field not in fields and not (move.field in WIDTHS and fields.intersection(WIDTHS))


def _read_moves(path: str | os.PathLike[str], preset: Preset, rate_hz: float, faults: list[Fault]) -> list[tuple[int, Move]]:
    """Line and move of every row without a fault, in order of frames; every fault is added to ``faults``."""
    found: list[tuple[int, Move]] = []
    rows = _rows(read_text(path, limits.MOVES_BYTES), faults)
    columns = _check_header(next(rows, None), faults)
    if columns:
        filters = {one.name: one for one in preset.filters}
        for line, cells in rows:
            move = _read_row(line, cells, columns, filters, rate_hz, faults)
            if move:
                found.append((line, move))
    found.sort(key=lambda entry: entry[1].frame)
    return found


def _rows(text: str, faults: list[Fault]) -> Iterator[tuple[int, list[str]]]:
    """Line number, counted from 1, and cells of each row that is no comment and not blank."""
    lines = io.StringIO(text, newline="")
    number = 0
    for first in lines:
        number += 1
        if first.lstrip().startswith("#"):
            continue
        # one reader a row: a quoted cell may run over several lines, in which # is text
        reader = csv.reader(itertools.chain([first], lines), strict=True, skipinitialspace=True)
        start = number
        try:
            cells = next(reader)
        except csv.Error as error:
            faults.append(Fault("", f"row must be cells parted by commas, and is not ({error}): mend its quotes", start))
            cells = []
        number += reader.line_num - 1
        if any(cell.strip() for cell in cells):
            yield start, cells


def _check_header(row: tuple[int, list[str]] | None, faults: list[Fault]) -> tuple[str, ...]:
    """The columns in file order; nothing when they will not do."""
    rule = "header line must name time_s or frame, filter, field and value, and may name ramp_s"
    if row is None:
        faults.append(Fault("", f"{rule}, got none: write it first"))
        return ()
    line, cells = row
    for mark, marks in ((";", "semicolons"), ("\t", "tabs")):
        if len(cells) == 1 and mark in cells[0]:
            faults.append(Fault("", f"cells must be parted by commas, got {marks}: export it with commas", line))
            return ()
    columns = tuple(cell.strip() for cell in cells)
    found = []
    there = set(columns)
    for column in dict.fromkeys(columns):
        if column not in COLUMNS:
            remedy = nearest(column, COLUMNS)
            found.append(f"{rule}, got {column!r}: {remedy}")
            # one that is only misspelt is not missing too
            there |= {known for known in COLUMNS if remedy == f"did you mean {known}?"}
        elif columns.count(column) > 1:
            found.append(f"{rule}, got {column} twice: keep one")
    clocks = [column for column in ("time_s", "frame") if column in there]
    if len(clocks) != 1:
        found.append(f"{rule}, got {'both time_s and frame: keep one' if clocks else 'neither time_s nor frame: add one'}")
    missing = [column for column in ("filter", "field", "value") if column not in there]
    if missing:
        found.append(f"{rule}, got no {' and no '.join(missing)}: add what is missing")
    faults += [Fault("", message, line) for message in found]
    return () if found else columns


def _read_row(
    line: int, cells: list[str], columns: tuple[str, ...], filters: dict[str, Filter], rate_hz: float, faults: list[Fault]
) -> Move | None:
    """The move of one row, or None when it has a fault; every fault is added to ``faults``."""
    if len(cells) != len(columns):
        message = (
            f"row must have {len(columns)} cells ({', '.join(columns)}), got {len(cells)}: "
            "part cells by commas, write numbers with a decimal point, put names that hold commas in quotes"
        )
        faults.append(Fault("", message, line))
        return None
    row = dict(zip(columns, cells, strict=True))
    name = row["filter"] if row["filter"] in filters else row["filter"].strip()
    field = row["field"].strip()
    before = len(faults)

    def take(key: str, read: Callable[[], object], owner: str = "") -> object:
        try:
            return read()
        except ParameterError as error:
            faults.append(Fault(key, f"{owner}{error}", line))
            return None

    clock = "frame" if "frame" in row else "time_s"
    frame = take(clock, lambda: _read_frame(clock, row[clock], rate_hz))
    take("filter", lambda: _check_filter(name, filters))
    kind = filters[name].kind if name in filters else None
    known = MOVABLE[kind] if kind else _ANY_FIELD
    value = None
    if take("field", lambda: _check_field(field, known, f"a {kind or 'filter'}")):
        value = take(field, lambda: FILTER_CHECKS[field](field, _read_value(field, row["value"])), f"filter {name!r}: ")
    ramp = row.get("ramp_s", "").strip()
    ramp_s = take("ramp_s", lambda: limits.RAMP_S.check("ramp_s", _read_number("ramp_s", ramp)) if ramp else None)
    return Move(frame, name, field, value, ramp_s) if len(faults) == before else None


def _check_filter(name: str, filters: dict[str, Filter]) -> None:
    if name not in filters:
        remedy = nearest(name, filters) if len(filters) <= _NAMES_TO_LIST else "look its name up in the preset"
        raise ParameterError(f"filter must be one of the preset's, got {name!r}: {remedy}")


def _read_value(field: str, cell: str) -> float | bool | str:
    if field == "enabled":
        word = cell.strip().lower()  # spreadsheets write TRUE
        return word == "true" if word in ("true", "false") else cell.strip()
    return _read_number(field, cell)


def _read_number(name: str, cell: str) -> float:
    text = cell.strip()
    if not _NUMBER.fullmatch(text):
        raise ParameterError(f"{name} must be a number, got {text!r}: write it like 0.5, -3 or 1e-3")
    return float(text)


def _read_frame(name: str, cell: str, rate_hz: float) -> int:
    """The nearest frame to a time, or the frame itself, from the decimal digits as written."""
    number = _read_number(name, cell)
    if name == "frame":
        return limits.check_whole(name, number, limits.MOVE_FRAME)
    top_s = limits.MOVE_FRAME.high / rate_hz
    if not 0 <= number <= top_s:
        rule = f"at most {top_s:.0f} s (2^53 frames)" if number > top_s else "0 s or more"
        raise ParameterError(f"{name} must be {rule}, got {number:.12g}: choose a time in the sound, counted from its start")
    return round(Fraction(cell.strip()) * Fraction(rate_hz)) if number else 0


def _state_faults(found: list[tuple[int, Move]], preset: Preset, rate_hz: float) -> Iterator[Fault]:
    """A fault for every move that makes its filter illegal at the rate; later ones start from the last legal state."""
    filters = {one.name: one for one in preset.filters}
    lines = iter([line for line, _ in found])

    def carry_out(together: tuple[Move, ...]) -> None:
        changed = filters[together[0].filter].changed(**{move.field: move.value for move in together})
        changed.section(rate_hz)
        filters[changed.name] = changed

    for together in retunes(move for _, move in found):
        its_lines = list(itertools.islice(lines, len(together)))
        try:
            carry_out(together)
        except ParameterError:
            # taken one by one at least one of them fails, and that is the one to mend
            for line, move in zip(its_lines, together, strict=True):
                try:
                    carry_out((move,))
                except ParameterError as error:
                    yield Fault(move.field, f"filter {move.filter!r}: {error}", line)


# --- writing ----------------------------------------------------------------------------------


def save_moves(moves: Iterable[Move], path: str | os.PathLike[str]) -> None:
    """Write moves by frame, in order of their frames, so that loading the file gives equal ones.

    Raises : WriteError - the folder is missing or refuses, the target is a folder or protected, the disk is full
        ParameterError - a filter's name holds half a character (a lone surrogate), which no file can
    """
    lines = ["frame,filter,field,value,ramp_s\n"]
    for move in sorted(moves, key=lambda move: move.frame):
        value = str(move.value).lower() if isinstance(move.value, bool) else number_text(move.value)
        lines.append(f"{move.frame},{_cell(move.filter)},{move.field},{value},{number_text(move.ramp_s)}\n")
    try:
        data = "".join(lines).encode()
    except UnicodeEncodeError as error:
        wrong = error.object[error.start]
        raise ParameterError(f"filter must be whole characters, got {wrong!r}: rename the filter") from None
    with atomic_target(path) as temporary:
        temporary.write_bytes(data)


def _cell(text: str) -> str:
    """Text as one cell: in quotes where a comma, a quote, a line end or space at the ends needs them."""
    plain = text == text.strip() and not re.search(r'[,"\r\n]', text)
    return text if plain else '"' + text.replace('"', '""') + '"'
