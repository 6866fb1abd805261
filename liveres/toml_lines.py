"""Where a value stands in a TOML text: tomllib tells what a text holds but not on which line.

A place is a tuple of keys and of list positions counted from 1: ("filters", 2, "centre_hz") is filters[2].centre_hz.
Thread: any.
"""

from __future__ import annotations

import json
import re
import tomllib

Place = tuple[str | int, ...]

_TOKEN = re.compile(
    r"""
    \"{3} (?: \\. | [^\\] )*? \"{3,5} | '{3} .*? '{3,5}    # strings of several lines, which may end in quotes of their own
    | \" (?: \\. | [^"\\] )* \" | ' [^']* '             # strings
    | \# [^\n]*                                         # comments
    | [\[\]{}=,.\n] | [^\[\]{}=,.\s\#"']+             # marks; words and parts of numbers
    """,
    re.DOTALL | re.VERBOSE,
)


def value_lines(text: str) -> dict[Place, int]:
    """The line, counted from 1, of every table, key and list element of a TOML text that tomllib accepts, by place.

    A second walk over the text, so that only files with faults pay for it.

    >>> value_lines("title = 'x'\\n[[filters]]\\nq = 3\\n")[("filters", 1, "q")]
    3
    """
    return _LineScanner(text).scan()


class _LineScanner:
    """Walks the tokens of a text that tomllib has accepted; ``scan`` is all of its use."""

    def __init__(self, text: str):
        self.tokens: list[tuple[str, int]] = []
        line, end = 1, 0
        for found in _TOKEN.finditer(text):
            line += text.count("\n", end, found.start())
            end = found.start()
            if not found[0].startswith("#"):
                self.tokens.append((found[0], line))
        self.at = 0
        self.lines: dict[Place, int] = {}
        self.counts: dict[Place, int] = {}

    def scan(self) -> dict[Place, int]:
        table: Place = ()
        while self.at < len(self.tokens):
            if self._skip("\n"):
                continue
            table = self._header() if self._peek() == "[" else self._pair(table)
        return self.lines

    def _peek(self) -> str:
        return self.tokens[self.at][0] if self.at < len(self.tokens) else "\n"

    def _skip(self, token: str) -> bool:
        skipped = self._peek() == token
        self.at += skipped
        return skipped

    def _key(self, end: str) -> list[str]:
        parts = []
        while not self._skip(end):
            token = self._peek()
            if token != ".":
                parts.append(tomllib.loads(f"key = {token}")["key"] if token[0] in "\"'" else token)
            self.at += 1
        return parts

    def _header(self) -> Place:
        line = self.tokens[self.at][1]
        self._skip("[")
        is_list = self._skip("[")
        *parents, last = self._key("]")
        if is_list:
            self._skip("]")
        place: Place = ()
        for part in parents:
            place = self._newest((*place, part))
        place = (*place, last)
        if is_list:
            self.counts[place] = self.counts.get(place, 0) + 1
        self.lines.setdefault(place, line)
        place = self._newest(place)
        self.lines.setdefault(place, line)
        return place

    def _newest(self, place: Place) -> Place:
        return (*place, self.counts[place]) if place in self.counts else place

    def _pair(self, table: Place) -> Place:
        line = self.tokens[self.at][1]
        place = table
        for part in self._key("="):
            place = (*place, part)
            self.lines.setdefault(place, line)
        self._value(place)
        return table

    def _value(self, place: Place) -> None:
        self.lines.setdefault(place, self.tokens[self.at][1])
        if self._skip("["):
            number = 0
            while not self._skip("]"):
                if not (self._skip(",") or self._skip("\n")):
                    number += 1
                    self._value((*place, number))
        elif self._skip("{"):
            while not self._skip("}"):
                if not (self._skip(",") or self._skip("\n")):
                    self._pair(place)
        else:
            while self._peek() not in ("\n", ",", "]", "}"):
                self.at += 1


def dotted(place: Place) -> str:
    """A place as people write it; keys that are no plain word stand in quotes.

    >>> dotted(("filters", 2, "q"))
    'filters[2].q'
    """
    text = ""
    for part in place:
        if isinstance(part, int):
            text += f"[{part}]"
        else:
            word = part if re.fullmatch(r"[A-Za-z0-9_-]+", part) else json.dumps(part, ensure_ascii=False)
            text += f".{word}" if text else word
    return text


def line_of(lines: dict[Place, int], place: Place) -> int | None:
    """Line of a place; what the file leaves out stands where its table begins."""
    while place and place not in lines:
        place = place[:-1]
    return lines.get(place)
