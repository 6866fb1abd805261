"""Every error liveres raises on purpose.

    LiveresError
    |-- ParameterError   (also ValueError)  a value breaks a rule
    |-- FileError        (also ValueError)  a preset or moves file is wrong: every fault at once
    |-- AudioFileError   (also OSError)     a sound file cannot be read or written
    |-- WriteError       (also OSError)     a file cannot be written where it was asked for
    `-- DeviceError      (also OSError)     the sound system or a device failed

A message reads: parameter, rule with the bound worked out, value received, remedy. Present tense,
no blame, no full stop.
"""

from __future__ import annotations

import datetime
import difflib
from collections.abc import Iterable
from dataclasses import dataclass


class LiveresError(Exception):
    """Root of every error liveres raises on purpose."""


class ParameterError(LiveresError, ValueError):
    """A value breaks a rule; the message names the parameter, the rule, the value and the remedy."""


class AudioFileError(LiveresError, OSError):
    """A sound file cannot be read or written as asked."""


class WriteError(LiveresError, OSError):
    """A file cannot be written where it was asked for; what stood there before is untouched."""


class DeviceError(LiveresError, OSError):
    """The sound system, or one of its devices, is missing, refused a setting or went away."""


@dataclass(frozen=True)
class Fault:
    """One thing wrong in a file.

    key : dotted place in the file, such as ``filters[2].centre_hz``; empty when the fault is the file's
    message : what is wrong, in the house's wording
    line : 1-based line, or None when the parser gave none
    """

    key: str
    message: str
    line: int | None = None

    def text(self, path: str) -> str:
        """``path:line: key: message`` with the parts that are known."""
        place = path if self.line is None else f"{path}:{self.line}"
        return f"{place}: {self.key}: {self.message}" if self.key else f"{place}: {self.message}"


class FileError(LiveresError, ValueError):
    """A preset or moves file is wrong; ``faults`` lists everything found, in file order."""

    def __init__(self, path: object, faults: Iterable[Fault]):
        self.path = str(path)
        self.faults = tuple(sorted(faults, key=lambda fault: fault.line or 0))
        super().__init__("\n".join(fault.text(self.path) for fault in self.faults))


_LIST_MOST = 32
# longer lists are not read
_TOLD_MOST = 60
# characters of a value: enough to know it again


def told(value: object) -> str:
    """A value as messages show it: in the words of a file where Python's would be strange there, cut when long.

    >>> told(True), told({"q": 3}), told("x")
    ('true', 'a table', "'x'")
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list) and any(isinstance(one, dict) for one in value):
        return "a list of tables"
    text = str(value) if isinstance(value, datetime.date | datetime.time) else repr(value)
    return text if len(text) <= _TOLD_MOST else f"{text[: _TOLD_MOST - 3]}..."


def nearest(word: str, known: Iterable[str]) -> str:
    """Remedy for an unknown name: the nearest known one, or the list of them all.

    >>> nearest("center_hz", ["centre_hz", "depth_db"])
    'did you mean centre_hz?'
    >>> nearest("xyz", ["centre_hz", "depth_db"])
    'use one of centre_hz, depth_db'
    """
    names = list(known)
    close = difflib.get_close_matches(word, names, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]}?"
    if len(names) > _LIST_MOST:
        return f"use one of the {len(names)} known, such as {', '.join(names[:3])}"
    return f"use one of {', '.join(names)}" if names else "none is known here"
