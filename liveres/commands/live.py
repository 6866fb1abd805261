"""``liveres live``: a preset on a sound device, with one line of meters."""

from __future__ import annotations

import argparse
import json
import re
import shutil
import sys
import time

from liveres.commands.compiling import announce_compiling
from liveres.engine.settings import Preset
from liveres.errors import DeviceError, ParameterError
from liveres.hosts.portaudio import check_device
from liveres.json_values import for_json
from liveres.presets import load_preset

LINE_S = 0.1
# ten readings a second; a log that is no terminal gets one
LOG_S = 1.0
CAUTION = """\
Mind your ears and your loudspeakers: begin with the amplifier low and raise it
by hand. The program knows full scale, not how loud the room is; local rules on
sound levels and the licensed person in charge have the last word."""


def run(args: argparse.Namespace) -> int:
    """Run until --seconds are over, Ctrl-C, or the device goes.

    Returns : 0 done; 1 the device went away, which has been said
    Raises : ParameterError, FileError - the preset is wrong; DeviceError - no device, or one that will not close
    """
    preset = load_preset(args.preset) if args.preset else Preset()
    device = _device(args.device)
    check_device(device, args.channels)
    announce_compiling(live=True)
    from liveres.hosts.live import Live

    live = Live(preset, device, args.block, args.rate, args.channels)
    try:
        live.start()
        _say(args, _opening(live))
        live.unmute()
        _meter(args, live)
    except KeyboardInterrupt:
        # the ordinary way to end it
        pass
    finally:
        if live.lost is not None:
            # before closing, which a dead sound system can hold up
            print(f"liveres: {live.lost}", file=sys.stderr, flush=True)
        let_go = live.close()
    if live.lost is not None:
        return 1
    if not let_go:
        raise DeviceError("the sound system must let go of the device, it did not within 2 s: restart the sound system")
    _close(args, live)
    return 0


def _device(text: str | None) -> object:
    if text is not None and re.fullmatch(r"-?\d+", text):
        return int(text)
    if text is not None and not text.strip():
        raise ParameterError("--device must be a name or a number, got nothing: see liveres devices")
    return text


def _opening(live: object) -> list[str]:
    counters = live.counters()
    delay_ms = 1000 * (sum(live.latency_s) + live.latency_frames / live.rate_hz)
    state = "real-time" if counters["realtime"] else "NOT real-time"
    return [
        CAUTION,
        f"{live.channels} channel{'s' if live.channels > 1 else ''} at {live.rate_hz:g} Hz, "
        f"blocks of {live.block_frames} frames, latency at least {delay_ms:.1f} ms",
        f"audio thread: {state}, {counters['realtime_why']}",
        "fading in over 1 s; Ctrl-C fades out and ends",
    ]


def _meter(args: argparse.Namespace, live: object) -> None:
    on_terminal = sys.stdout.isatty() and not args.json
    try:
        _read_out(args, live, on_terminal)
    finally:
        if on_terminal:
            print()


def _read_out(args: argparse.Namespace, live: object, on_terminal: bool) -> None:
    began, spoken = time.monotonic(), 0.0
    while live.lost is None:
        ran_s = time.monotonic() - began
        if args.seconds is not None and ran_s >= args.seconds:
            break
        if on_terminal:
            # one column less than there are, or some terminals begin a new line
            line = _line(live)[: shutil.get_terminal_size().columns - 1]
            print(f"\r{line}\x1b[K", end="", flush=True)
        elif ran_s - spoken >= LOG_S:
            spoken = ran_s
            _say(args, [_line(live)])
        time.sleep(LINE_S if args.seconds is None else min(LINE_S, max(args.seconds - ran_s, 0.0)))


def _line(live: object) -> str:
    meters, counters = live.meters(), live.counters()
    load = 100 * counters["mean_callback_s"] / counters["period_s"]
    hitches = counters["output_underflows"] + counters["input_overflows"]
    return (
        f"in {meters['recent_peak_in_db']:6.1f}  out {meters['recent_peak_out_db']:6.1f} dBFS  "
        f"limiter {meters['limiter_db']:5.1f}  guard {meters['guard_db']:5.1f}  "
        f"load {load:.0f} %  hitches {hitches}"
    )


def _say(args: argparse.Namespace, lines: list[str]) -> None:
    if not args.json:
        for line in lines:
            print(line, flush=True)


def _close(args: argparse.Namespace, live: object) -> None:
    meters, counters = live.meters(), live.counters()
    if args.json:
        print(json.dumps(for_json({"meters": meters, "counters": counters, "events": live.events()})))
        return
    print(
        f"played {meters['frames'] / live.rate_hz:.1f} s in {counters['callbacks']} callbacks, slowest "
        f"{1e6 * counters['worst_callback_s']:.0f} of {1e6 * counters['period_s']:.0f} us; highest output "
        f"{meters['peak_out_db']:.1f} dBFS, limiter at most {meters['limiter_most_db']:.1f} dB"
    )
