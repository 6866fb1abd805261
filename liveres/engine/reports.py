"""Reading an engine's meters and events out of its memory. Thread: control.

The audio thread writes, this side reads, each number a single 8-byte word: a reading may mix two neighbouring blocks
but never half a number. Events are read up to the counter taken first, which the kernel raises after writing them.
"""

from __future__ import annotations

import numpy as np

from liveres.engine.memory import Memory
from liveres.kernels import state as s
from liveres.units import db_from_gain

_WHY = {
    "guard": "a steady tone near the ceiling: output stepped down 12 dB until it ends",
    "trap": "a sum that is not finite: the channel's filters cleared under a short mute",
}


def read_meters(memory: Memory, bus_limit_db: float) -> dict:
    """Levels since the start and now, and what the safety stage did.

    Returns : dict
        frames : int
        peak_in_db, rms_in_db, peak_out_db, rms_out_db : float [dBFS], since the start, of the loudest channel
        limiter_db, bus_limiter_db, guard_db : float [dB], 0 or below: gain now, of the channel held down most
        limiter_most_db, bus_limiter_most_db, guard_most_db : float [dB], lowest those gains have been
        limited_frames : int, frames any channel's limiter worked, summed over channels
        traps : dict of int: input samples that were no sound, filter states cleared
        bus_limit_db : float [dBFS], permitted level of the resonator bus
        channels : list of dicts with the eight levels of each channel, ``recent_`` ones over the last 0.3 s
    """
    frames = int(memory.state["frame"][0])
    now = memory.channels.copy()
    rms = {way: np.sqrt(now[f"energy_{way}"] / max(frames, 1)) for way in ("in", "out")}
    levels = {
        "peak_in_db": now["peak_in"],
        "rms_in_db": rms["in"],
        "peak_out_db": now["peak_out"],
        "rms_out_db": rms["out"],
        "recent_peak_in_db": now["recent_peak_in"],
        "recent_rms_in_db": np.sqrt(now["recent_power_in"]),
        "recent_peak_out_db": now["recent_peak_out"],
        "recent_rms_out_db": np.sqrt(now["recent_power_out"]),
    }
    gains = {
        "limiter_db": now["look_held"] if memory.state["look_frames"][0] else now["gain"],
        "bus_limiter_db": now["bus_gain"],
        "guard_db": now["guard_gain"],
        "limiter_most_db": now["gain_least"],
        "bus_limiter_most_db": now["bus_gain_least"],
        "guard_most_db": now["guard_gain_least"],
    }
    return {
        "frames": frames,
        **{name: db_from_gain(float(values.max())) for name, values in levels.items()},
        **{name: db_from_gain(float(values.min())) for name, values in gains.items()},
        "limited_frames": int(now["limited"].sum()),
        "traps": {"input": int(now["input_traps"].sum()), "state": int(now["state_traps"].sum())},
        "bus_limit_db": bus_limit_db,
        "channels": [
            {name: db_from_gain(float(values[channel])) for name, values in levels.items()} for channel in range(len(now))
        ],
    }


def read_events(memory: Memory, already: int) -> tuple[list[dict], int]:
    """Events after the first ``already``, oldest first, and how many there have been.

    The ring keeps the newest ``EVENTS``; older ones not yet read are lost.
    """
    count = int(memory.state["event_count"][0])
    fresh = []
    for number in range(max(already, count - s.EVENTS), count):
        row = memory.events[number % s.EVENTS]
        kind = s.EVENT_KINDS[int(row[s.EVENT_KIND])]
        fresh.append(
            {
                "frame": int(row[s.EVENT_FRAME]),
                "kind": kind,
                "channel": int(row[s.EVENT_CHANNEL]),
                "centre_hz": None,
                "depth_db": None,
                "why": _WHY[kind],
            }
        )
    return fresh, count
