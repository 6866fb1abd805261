"""Where a value stands in a TOML text, and what is wrong with one that is none, in the house's words.

tomllib tells what a text holds but not on which line, and its faults without a remedy.
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


_PLAIN = "text goes in quotes, numbers stand without units and with a decimal point"
_QUOTES = "text must end with the quotes it began with, got none of them"
_SYNTAX = [
    # how the parser's message begins; the rule and what was got; the remedy
    (r"Expected '='", "a key must be followed by = and its value, got no =", "write it like guard = true"),
    (r"Invalid value", "a value must be text, a number, true, false or a list, got none of them", _PLAIN),
    (r"Expected newline", "a line must end after its value, got more", _PLAIN),
    (r"Cannot overwrite|Duplicate", "a key must be given once, got it a second time", "keep one"),
    (r"Cannot declare", "a table must be begun once, got it a second time", "keep one; each filter begins with [[filters]]"),
    (r"Expected '\]", "a table must begin with a line like [watch] or [[filters]], got other brackets", "close them"),
    (r"Illegal character '\\n'|Unterminated|Expected \"'", _QUOTES, "close it"),
    (r"Unescaped", "a backslash in double quotes must be written twice, got one", "write two, or use single quotes"),
    (r"Unclosed array", "a list must end with ], got none", "close it"),
    (r"Invalid statement", "a line must be key = value, a table in brackets or a # comment, got none of them", "mend it"),
]


def syntax_fault(text: str, error: ValueError) -> tuple[str, int | None]:
    """What makes a text no TOML, and its line, from the error with which tomllib refused it."""
    said = re.sub(r" \(at [^()]*\)$", "", str(error))
    place = re.search(r"\(at line (\d+), column \d+\)$", str(error))
    unknown = f"file must be TOML, got a fault in its syntax ({said})", "write each line as key = value"
    rule, remedy = next(((rule, remedy) for begin, rule, remedy in _SYNTAX if re.match(begin, said)), unknown)
    if place is not None:
        return f"{rule}: {remedy}", int(place[1])
    # at the very end: its last line, unless something left open far above runs up to there
    return f"{rule}: {remedy}", None if rule.startswith(_QUOTES) else len(text.splitlines())


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
