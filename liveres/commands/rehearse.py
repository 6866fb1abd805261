"""``liveres rehearse``: a preset in a simulated room, with no sound card."""

from __future__ import annotations

import argparse
import json
import math
import sys
import time

from liveres.commands.compiling import announce_compiling
from liveres.engine.settings import Preset
from liveres.json_values import for_json
from liveres.presets import load_preset
from liveres.rooms.bounds import ROOMS

_JUDGED = "no tone stayed for half a second at -40 dBFS or more without falling"
LINE_S = 0.1
# ten readings a second on a terminal
RUN_S = 10.0
# how long it goes on where nobody can stop it and --seconds does not say


def run(args: argparse.Namespace) -> int:
    """Rehearse: in real time on a terminal, else as fast as it goes; then say what the room bore.

    Returns : 0, howl or not
    Raises : ParameterError, FileError - the preset, a name or a value is wrong; AudioFileError - a sound file is
    """
    preset = load_preset(args.preset) if args.preset else Preset()
    announce_compiling()
    from liveres.hosts.rehearsal import Rehearsal
    from liveres.hosts.rehearsal_files import load_room, load_source

    room, notes = load_room(args.room, args.rate)
    source, more = load_source(args.source, args.rate, args.seed)
    for note in notes + more:
        print(f"liveres: {note}", file=sys.stderr)
    rehearsal = Rehearsal(preset, room, source, args.gain, args.delay_frames, args.rate, args.seed)
    rehearsal.unmute()
    began = time.perf_counter()
    in_time = sys.stdout.isatty() and not (args.no_screen or args.json)
    try:
        if in_time:
            print("in real time, fading in over 1 s; Ctrl-C ends it")
            _play_in_time(args, rehearsal)
        else:
            _play(args, rehearsal)
    except KeyboardInterrupt:
        # the ordinary way to end it; what was rehearsed so far is told
        pass
    result = _result(args, rehearsal, time.perf_counter() - began)
    print(json.dumps(for_json(result)) if args.json else "\n".join(_summary(result)))
    return 0


def _play(args: argparse.Namespace, rehearsal: object) -> None:
    left = round((args.seconds or RUN_S) * rehearsal.rate_hz)
    while left > 0:
        frames = min(args.block, left)
        rehearsal.advance(frames)
        left -= frames


def _play_in_time(args: argparse.Namespace, rehearsal: object) -> None:
    began, spoken = time.monotonic(), -LINE_S
    # worked out once: headless, nothing moves the filters
    limit_db = rehearsal.highest_stable_gain().gain_db
    try:
        while args.seconds is None or rehearsal.frame < args.seconds * rehearsal.rate_hz:
            rehearsal.advance(args.block)
            ahead_s = rehearsal.frame / rehearsal.rate_hz - (time.monotonic() - began)
            if ahead_s > 0.0:
                time.sleep(ahead_s)
            else:
                # late: it goes on from here and does not hurry after
                began -= ahead_s
            if rehearsal.frame / rehearsal.rate_hz - spoken >= LINE_S:
                spoken = rehearsal.frame / rehearsal.rate_hz
                print(f"\r{_line(rehearsal, limit_db)}\x1b[K", end="", flush=True)
    finally:
        print()


def _line(rehearsal: object, limit_db: float) -> str:
    meters = rehearsal.meters()
    return (
        f"in {meters['recent_peak_in_db']:6.1f}  out {meters['recent_peak_out_db']:6.1f} dBFS  "
        f"limiter {meters['limiter_db']:5.1f}  guard {meters['guard_db']:5.1f} dB  "
        f"gain {rehearsal.gain_db:+.1f} of {limit_db:+.1f} dB{'  HOWLED' if rehearsal.howl.howled else ''}"
    )


def _result(args: argparse.Namespace, rehearsal: object, took_s: float) -> dict:
    bears, bare, howl = rehearsal.highest_stable_gain(), rehearsal.highest_stable_gain(with_filters=False), rehearsal.howl
    room, rate_hz = rehearsal.room, rehearsal.rate_hz
    return {
        "room": {
            "name": room.name,
            "about": ROOMS.get(args.room, args.room),
            "decay_s": room.decay_s,
            "seconds": len(room.impulse) / rate_hz,
            "scaled_db": room.scaled_db,
        },
        "rate_hz": rate_hz,
        "source": args.source,
        "seed": args.seed,
        "delay_frames": rehearsal.delay_frames,
        "highest_stable_gain_db": bears.gain_db,
        "howls_at_hz": bears.frequency_hz,
        "without_filters": {"highest_stable_gain_db": bare.gain_db, "howls_at_hz": bare.frequency_hz},
        "gain_db": rehearsal.gain_db,
        "margin_db": bears.gain_db - rehearsal.gain_db,
        "howl": {
            "howled": howl.howled,
            "from_s": None if howl.began_frame is None else howl.began_frame / rate_hz,
            "frequency_hz": howl.frequency_hz,
        },
        "loudspeaker": rehearsal.loudspeaker(),
        "meters": rehearsal.meters(),
        "notches": [
            {"name": one.name, "centre_hz": one.centre_hz, "depth_db": one.depth_db, "enabled": one.enabled, "origin": one.origin}
            for one in rehearsal.filters
            if one.kind == "notch"
        ],
        "events": rehearsal.events(),
        "seconds": rehearsal.frame / rate_hz,
        "times_real_time": rehearsal.frame / rate_hz / took_s,
    }


def _summary(result: dict) -> list[str]:
    """What a person wants to know at the end."""
    room, meters, howl, bare = result["room"], result["meters"], result["howl"], result["without_filters"]
    margin_db = result["margin_db"]
    side = "below" if margin_db > 0.0 else "past"
    place = f"{abs(margin_db):.2f} dB {side} it" if math.isfinite(margin_db) else "far below it"
    lines = [
        f"room {room['name']} ({room['about']}), T60 {room['decay_s']:.2f} s; {result['source']} before the microphone",
        f"  highest stable gain  {_limit(result)}",
        f"  system gain          {result['gain_db']:+.2f} dB, {place}",
    ]
    if result["notches"]:
        lines.insert(2, f"  without the filters  {_limit(bare)}")
    if howl["howled"]:
        lines.append(f"  howled               at {howl['frequency_hz']:.0f} Hz, from {howl['from_s']:.1f} s on")
    else:
        lines.append(f"  howled               {'no' if margin_db > 0.0 else 'not yet'}: {_JUDGED}")
    lines += [
        f"  peaks                microphone {meters['peak_in_db']:.1f}, output {meters['peak_out_db']:.1f}, "
        f"loudspeaker {result['loudspeaker']['peak_db']:.1f} dBFS",
        f"  held down at most    limiter {meters['limiter_most_db']:.1f}, guard {meters['guard_most_db']:.1f} dB",
    ]
    for one in result["notches"]:
        state = "" if one["enabled"] else ", off"
        lines.append(f"  notch                {one['name']}: {one['centre_hz']:g} Hz, {one['depth_db']:g} dB{state}")
    return [*lines, f"  rehearsed            {result['seconds']:.1f} s, {result['times_real_time']:.0f} times real time"]


def _limit(result: dict) -> str:
    if result["howls_at_hz"] is None:
        return "any: nothing comes back to the microphone"
    return f"{result['highest_stable_gain_db']:+.2f} dB; beyond it, a howl at {result['howls_at_hz']:.1f} Hz"
