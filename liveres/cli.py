"""The liveres command: its options, and what its exit codes mean.

    0  done            1  the work failed            2  the command line or a file is wrong
    130, 143           stopped: by Ctrl-C, by the system

Loads nothing heavy: each command's body lives in ``liveres.commands`` and is imported when it runs.
"""

from __future__ import annotations

import argparse
import contextlib
import importlib
import os
import re
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from typing import NoReturn

from liveres import __version__, limits
from liveres.errors import AudioFileError, FileError, LiveresError, ParameterError, nearest
from liveres.rooms.bounds import DELAY_FRAMES, ROOMS, SEED, SOURCES, SYSTEM_GAIN_DB


def _list(table: dict[str, str]) -> str:
    return "\n".join(f"  {name:<9} {line}" for name, line in table.items())


_ABOUT = """\
A real-time resonator and notch host: find and cut feedback, tune and play banks of resonators,
and repeat any of it on sound files, to the bit.

Mind your ears. Start with the volume low, keep a hand on the mute, and never wear headphones while
looking for feedback. The program knows full scale, not how loud the room is.
"""

_COMMANDS = "liveres COMMAND --help tells more, with examples."

_RENDER = """\
Run sound files through a preset: the engine of a live session, without the session.

OUT keeps the rate, the channels and the sample type of IN; its ending chooses the container
(.wav .rf64 .w64 .caf .flac .aif .aiff). With -o DIR any number of files and folders are rendered into
DIR, on all processor cores; one that fails does not stop the others. OUT is complete or not there.
"""
_RENDER_EXAMPLES = """\
examples:
  liveres render take.wav clean.wav --preset hall.toml
  liveres render take.wav rung.flac --preset bells.toml --moves bells.csv --tail 10
  liveres render takes/ -o clean/ --preset hall.toml --report clean/report.json
"""
_RESPONSE = """\
Say what a preset does: the poles, zeros and widths of every filter, the largest steady gain a sine can
meet and where, and the longest decay.
"""
_RESPONSE_EXAMPLES = """\
examples:
  liveres response --preset hall.toml
  liveres response --preset hall.toml --plot hall.svg
  liveres response --preset bells.toml --rate 44100 --sos sections.csv
"""
_CHECK = """\
Say whether files can be used, and everything that is wrong with them: presets (.toml), moves (.csv, read
against --preset) and sound files, which are read to their end.
"""
_CHECK_EXAMPLES = """\
examples:
  liveres check hall.toml
  liveres check --preset bells.toml bells.csv take.wav
"""
_DEVICES = """\
List the sound devices: their host system, channels and usual rates. Arrows mark the default ones.
"""
_DEVICES_EXAMPLES = """\
examples:
  liveres devices
  liveres devices --json
"""
_LIVE = """\
Run a preset on a sound device, in real time. It starts muted and fades in over a second.

Mind your ears: begin with the amplifier low.
"""
_LIVE_EXAMPLES = """\
examples:
  liveres live --preset hall.toml
  liveres live --preset hall.toml --device "USB" --block 64 --rate 48000 --channels 2
"""
_REHEARSE = """\
Run a preset in a simulated room: a loudspeaker, a microphone and the way between them, with no sound card. The room
says how much system gain it bears before it howls; past that it howls, and a notch in the right place stops it.

A room is one of those below, or an impulse response measured in yours. It is scaled to howl at a system gain of +6 dB
when nothing is done to the sound. On a terminal it runs in real time, elsewhere and with --no-screen as fast as it goes.
"""
_REHEARSE_EXAMPLES = f"""\
rooms:
{_list(ROOMS)}
sources:
{_list(SOURCES)}
examples:
  liveres rehearse
  liveres rehearse --room church --source noise --gain 8 --seconds 20
  liveres rehearse --room my-hall.wav --preset hall.toml --gain 3 --no-screen
"""


class UsageError(LiveresError):
    """The command line cannot be followed."""


class Terminated(BaseException):
    """The system asked the program to end (SIGTERM or SIGHUP)."""


class _Parser(argparse.ArgumentParser):
    """Argument parser whose faults are errors in the house's words, and whose help says first what it is about."""

    def __init__(self, about: str = "", **keywords: object):
        self.options: list[str] = []
        self.about = about
        super().__init__(formatter_class=argparse.RawDescriptionHelpFormatter, allow_abbrev=False, **keywords)

    def format_help(self) -> str:
        return f"{self.about}\n{super().format_help()}"

    def add_argument(self, *names: str, **keywords: object) -> argparse.Action:
        self.options += [name for name in names if name.startswith("-")]
        return super().add_argument(*names, **keywords)

    def check_options(self, words: list[str]) -> None:
        """UsageError at the first word that looks like an option and is none."""
        for word in words:
            if word == "--":
                return
            option = word.split("=", 1)[0]
            long = [name for name in self.options if name.startswith("--")]
            if option.startswith("--") and option not in long:
                raise UsageError(f"{self.prog} has no option {option}: {nearest(option, long)}")
            # one letter, whose value may follow at once: -oDIR; -3 is a number
            if re.match(r"-[^-\d.]", word) and word[:2] not in self.options:
                raise UsageError(f"{self.prog} has no option {word[:2]}: see {self.prog} --help")

    def error(self, message: str) -> NoReturn:
        message = message.removeprefix("argument ").replace("the following arguments are required:", f"{self.prog} needs")
        message = message.replace("unrecognized arguments:", f"{self.prog} has no use for")
        raise UsageError(f"{message}: see {self.prog} --help")


def _parsers() -> tuple[_Parser, dict[str, _Parser]]:
    top = _Parser(prog="liveres", about=_ABOUT, epilog=_COMMANDS)
    top.add_argument("--version", action="version", version=f"liveres {__version__}")
    commands = top.add_subparsers(dest="command", metavar="COMMAND", title="commands", parser_class=_Parser)
    made = {}
    for name, (fill, line, about, examples) in _TABLE.items():
        made[name] = commands.add_parser(name, help=line, about=about, epilog=examples)
        fill(made[name])
    return top, made


def _fill_render(parser: _Parser) -> None:
    parser.usage = "liveres render IN OUT --preset FILE [options]\n       liveres render IN ... -o DIR --preset FILE [options]"
    parser.add_argument("paths", nargs="+", metavar="IN", help="sound file and then OUT; with -o any files and folders")
    parser.add_argument("-o", dest="out_dir", metavar="DIR", help="render every IN into this folder")
    parser.add_argument("--preset", required=True, metavar="FILE", help="what to do to the sound")
    parser.add_argument("--moves", metavar="FILE", help="changes over time, applied on their exact frames")
    _add_number(parser, "--block", limits.BLOCK_FRAMES, 1024, "frames in one go; the result does not depend on it", whole=True)
    _add_number(parser, "--tail", limits.TAIL_S, 0.0, "seconds to go on after the end, for what still rings")
    parser.add_argument("--report", metavar="FILE", help="write what happened as JSON")
    _add_json(parser)
    parser.add_argument("--quiet", action="store_true", help="say nothing but what went wrong")


def _fill_response(parser: _Parser) -> None:
    parser.add_argument("--preset", required=True, metavar="FILE", help="the preset to look at")
    _add_number(parser, "--rate", limits.RATE_HZ, None, "sample rate to look at it at; its own when left out")
    _add_number(parser, "--channel", limits.CHANNEL_INDEX, None, "only the filters this channel passes, from 0", whole=True)
    parser.add_argument("--sos", metavar="FILE", help="write second-order sections as CSV")
    parser.add_argument("--plot", metavar="FILE", help="draw gain and z-plane into a .png or .svg file")
    _add_json(parser)


def _fill_check(parser: _Parser) -> None:
    parser.add_argument("paths", nargs="+", metavar="FILE", help="a preset, moves or a sound file")
    parser.add_argument("--preset", metavar="FILE", help="the preset that moves files are for")
    _add_json(parser)


def _fill_devices(parser: _Parser) -> None:
    _add_json(parser)


def _fill_live(parser: _Parser) -> None:
    parser.add_argument("--preset", metavar="FILE", help="what to do to the sound; straight through when left out")
    parser.add_argument("--device", metavar="NAME", help="name, part of a name, or number as liveres devices lists it")
    _add_number(parser, "--block", limits.BLOCK_FRAMES, 64, "frames in one go: fewer is less delay and more work", whole=True)
    _add_number(parser, "--rate", limits.RATE_HZ, 48_000, "sample rate of the device")
    _add_number(parser, "--channels", limits.CHANNELS, 2, "channels in and out", whole=True)
    _add_number(parser, "--seconds", limits.RUN_S, None, "stop by itself after so long")
    parser.add_argument("--no-screen", action="store_true", help="meters as lines of text, which is all there is so far")
    _add_json(parser)


def _fill_rehearse(parser: _Parser) -> None:
    parser.add_argument("--preset", metavar="FILE", help="what to do to the sound; straight through when left out")
    parser.add_argument("--room", default="hall", metavar="ROOM", help="a room below or a sound file; hall if left out")
    parser.add_argument("--source", default="speech", metavar="SOURCE", help="a source below or a sound file; speech if left out")
    _add_number(parser, "--gain", SYSTEM_GAIN_DB, 0.0, "system gain, from the program's output to the loudspeaker")
    _add_number(parser, "--delay-frames", DELAY_FRAMES, 0, "delay of converters on top of the 64 of one block", whole=True)
    _add_number(parser, "--block", limits.BLOCK_FRAMES, 64, "frames in one go; the result does not depend on it", whole=True)
    _add_number(parser, "--rate", limits.RATE_HZ, 48_000, "sample rate, that of every sound file used")
    _add_number(parser, "--seconds", limits.RUN_S, None, "stop by itself after so long; after 10 s where nobody can stop it")
    _add_number(parser, "--seed", SEED, 0, "what all noise follows from", whole=True)
    parser.add_argument("--no-screen", action="store_true", help="as fast as it goes, and only say how it went")
    _add_json(parser)


def _add_number(
    parser: _Parser, option: str, bound: limits.Bound, default: float | None, line: str, whole: bool = False
) -> None:
    def read(text: str) -> float:
        try:
            value = float(text)
        except ValueError:
            raise UsageError(f"{option} must be a number, got {text!r}: write digits") from None
        try:
            return limits.check_whole(option, value, bound) if whole else bound.check(option, value)
        except ParameterError as error:
            raise UsageError(str(error)) from None

    unit = f" {bound.unit}" if bound.unit else ""
    usual = "" if default is None else f"; {default:g} when left out"
    parser.add_argument(
        option, type=read, default=default, metavar="N", help=f"{line} ({bound.low:g} to {bound.high:g}{unit}{usual})"
    )


def _add_json(parser: _Parser) -> None:
    parser.add_argument("--json", action="store_true", help="print one JSON object and nothing else")


_TABLE: dict[str, tuple[Callable[[_Parser], None], str, str, str]] = {
    "render": (_fill_render, "run sound files through a preset", _RENDER, _RENDER_EXAMPLES),
    "response": (_fill_response, "say what a preset does: poles, zeros, gains", _RESPONSE, _RESPONSE_EXAMPLES),
    "check": (_fill_check, "say what is wrong with files", _CHECK, _CHECK_EXAMPLES),
    "devices": (_fill_devices, "list the sound devices", _DEVICES, _DEVICES_EXAMPLES),
    "live": (_fill_live, "run a preset on a sound device", _LIVE, _LIVE_EXAMPLES),
    "rehearse": (_fill_rehearse, "run a preset in a simulated room", _REHEARSE, _REHEARSE_EXAMPLES),
}


def parse(words: list[str]) -> argparse.Namespace:
    """The command line as a namespace; UsageError when it cannot be followed."""
    top, commands = _parsers()
    if not words:
        words = ["--help"]
    name = words[0]
    if name in commands:
        commands[name].check_options(words[1:])
        # files may stand before, between and after the options; not even an option does after --
        read = commands[name].parse_args if "--" in words else commands[name].parse_intermixed_args
        return read(words[1:], argparse.Namespace(command=name))
    if name.startswith("-"):
        top.check_options(words)
        top.parse_args(words)
    elif name.strip():
        raise UsageError(f"there is no command {name}: {nearest(name, commands)}")
    raise UsageError(f"a command must be given, got none: {nearest('', commands)}")


def main(words: list[str] | None = None) -> int:
    """Run one command line; returns its exit code."""
    for stream in (sys.stdout, sys.stderr):
        # a filter may be called anything, and a terminal may not be able to write it
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    try:
        with _told_to_stop():
            return _run(sys.argv[1:] if words is None else words)
    except SystemExit as leaving:
        # argparse leaves so after --help and --version
        return leaving.code or 0
    except KeyboardInterrupt:
        return _fail("stopped by Ctrl-C; no file is left half written", 130)
    except Terminated:
        return _fail("told to end; no file is left half written", 143)


def _run(words: list[str]) -> int:
    try:
        args = parse(words)
        code = importlib.import_module(f"liveres.commands.{args.command}").run(args)
        sys.stdout.flush()
        return code
    except BrokenPipeError:
        # whoever read the output has left: nothing to say, and no one to say it to
        with contextlib.suppress(OSError, ValueError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 1
    except (UsageError, ParameterError, FileError, AudioFileError) as error:
        return _fail(error, 2)
    except LiveresError as error:
        return _fail(error, 1)
    except OSError as error:
        return _fail(f"{error.filename or 'the system refused'}: {error.strerror or error}", 1)
    except Exception as error:
        if sys.flags.dev_mode:
            raise
        return _fail(f"an error nobody foresaw, {type(error).__name__}: {error}; python -X dev -m liveres shows where", 1)


def _fail(message: object, code: int) -> int:
    for line in str(message).splitlines():
        print(f"liveres: {line}", file=sys.stderr)
    return code


@contextlib.contextmanager
def _told_to_stop() -> Iterator[None]:
    """SIGTERM and SIGHUP end the program the way Ctrl-C does: by an exception, so that files are cleaned up."""

    def stop(number: int, frame: object) -> NoReturn:
        raise Terminated

    signals = [getattr(signal, name) for name in ("SIGTERM", "SIGHUP") if hasattr(signal, name)]
    if threading.current_thread() is not threading.main_thread():
        signals = []
    before = {one: signal.getsignal(one) for one in signals}
    try:
        for one in signals:
            if before[one] is not signal.SIG_IGN:
                # nohup asks for SIGHUP to be ignored, and gets it
                signal.signal(one, stop)
        yield
    finally:
        for one in signals:
            signal.signal(one, before[one])
