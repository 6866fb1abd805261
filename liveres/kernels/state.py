"""The legend of the engine's memory: what every array that a kernel touches holds, by name.

Arrays, C order, made and owned by ``engine.memory`` (G groups, L = LANES, C channels, F = CHUNK frames):

    state     (1,)  STATE            one record: position, settings, counters
    channels  (C,)  CHANNEL          one record a channel: safety stage and meters
    groups    (G,)  GROUP            one record a group of lanes
    lanes     (G, FIELDS, L) float64 filters: a lane is one filter, a column of named rows (below)
    masks     (G, L) int64           channels a lane works on, bit by bit
    ringing   (G, C, 2 L) float64     per channel w[n-1], then w[n-2] while still or q[n-1] while moving
    history   (NOTCH_GROUPS, C, 2 L) float64   per notch and channel x[n-1], then x[n-2]
    glides    (GLIDES, 4) float64    slow gains: NOW, STEP, END, LEFT
    signal, feed, bus  (C, F) float64   scratch: the sound, its two-frame difference, the resonators' sum
    slow      (GLIDES, F) float64    scratch: the slow gains
    sums      (C, F L) float64        resonators' lane sums
    look      (C, 2, S) float64      look-ahead limiter of latency S - 1 frames, rows in lookahead.py
    marks     (C, 3, S) int64        the same
    events    (EVENTS, EVENT_FIELDS) float64    ring of what happened

Notch groups come first, in series order; resonator groups follow. Every lane of a resonator group works on the
same channels.
"""

from __future__ import annotations

import numpy as np

from liveres.limits import NOTCHES_MAX, RESONATORS_MAX

LANES = 32
# four 512-bit or eight 256-bit vectors: enough independent work to hide the latency of the recursion
CHUNK = 64
# frames worked at a time; a chunk's scratch for two channels stays in the first-level cache
SEGMENT, SHORT_SEGMENT = 16, 4
# frames between exact values of a moving filter; see motion.py for what the chord between them costs

NOTCH_GROUPS = NOTCHES_MAX // LANES + 1
# one to spare, so that a full chain can take a new notch while a removed one fades out
SPARE_GROUPS = 64
# resonators on different channel sets cannot share a group
GROUPS = NOTCH_GROUPS + RESONATORS_MAX // LANES + SPARE_GROUPS

# --- rows of ``lanes``: where each begins in a group's block --------------------------------------
_ROWS = iter(range(0, 64 * LANES, LANES))
# centre w0 [rad/frame] and decay rate -ln R [neper/frame]: now, factor a frame, factor a SEGMENT, target
OMEGA, OMEGA_STEP, OMEGA_STRIDE, OMEGA_END = (next(_ROWS) for _ in range(4))
DECAY, DECAY_STEP, DECAY_STRIDE, DECAY_END = (next(_ROWS) for _ in range(4))
# from where a ramp stands to its factors and its target
TO_STEP, TO_STRIDE, TO_END = LANES, 2 * LANES, 3 * LANES
# the frame from which each ramp stands on its target; passed for one at rest
CENTRE_LANDS, WIDTH_LANDS, LEVEL_LANDS = next(_ROWS), next(_ROWS), next(_ROWS)
# the level ramp: 1 / length [1/frame], start and target (d of a notch, g of a resonator)
LEVEL_PACE, LEVEL_FROM, LEVEL_END = next(_ROWS), next(_ROWS), next(_ROWS)
# the exact coefficients at rest: Re p, Im p, (1 - R^2)/2
REAL_END, IMAG_END, PEAK_END = next(_ROWS), next(_ROWS), next(_ROWS)
# direct form at rest: w[n] = PEAK (x[n] - x[n-2]) + C1 w[n-1] - C2 w[n-2]
C1, C2 = next(_ROWS), next(_ROWS)
# coefficients at the segment's end: Re p, Im p, peak, turn = peak Re p / Im p, level
REAL, IMAG, PEAK, TURN, LEVEL = (next(_ROWS) for _ in range(5))
# from a coefficient's row to that of its growth a frame
GROWTH = 5 * LANES
FIELDS = 29

# --- slow gains -------------------------------------------------------------------------------
BUS, BUS_LIMIT, GATE = 0, 1, 2
GLIDES = 3
NOW, STEP, END, LEFT = 0, 1, 2, 3

# --- events -----------------------------------------------------------------------------------
EVENTS = 1024
EVENT_FRAME, EVENT_KIND, EVENT_CHANNEL = 0, 1, 2
EVENT_FIELDS = 3
EVENT_KINDS = ("guard", "trap")
GUARD_EVENT, TRAP_EVENT = 0, 1

# --- commands: rows of a float64 array, what the control side asks for --------------------------
# every row: number in sequence, kind, then what the kind needs
SEQUENCE, KIND = 0, 1
# TUNE and PLACE: lane, w0, decay rate, Re p, Im p, peak, centre ramp [frames], width ramp [frames], channel mask
# a ramp of -1 leaves that ramp as it is; PLACE clears the lane first and takes no ramps
LANE, TO_OMEGA, TO_DECAY, TO_REAL, TO_IMAG, TO_PEAK, CENTRE_FRAMES, WIDTH_FRAMES, MASK = 2, 3, 4, 5, 6, 7, 8, 9, 10
# SET_LEVEL: lane, level, ramp [frames].  GLIDE_TO: which glide, value, ramp [frames].  RESET: nothing more
TO_LEVEL, LEVEL_FRAMES = 3, 4
COMMAND_FIELDS = 11
PLACE, TUNE, SET_LEVEL, GLIDE_TO, RESET = 0, 1, 2, 3, 4

STATE = np.dtype(
    [
        ("frame", "i8"),  # frames processed since the start
        ("groups_used", "i8"),  # groups from here on have never held a filter
        ("event_count", "i8"),  # events ever written to the ring
        ("input_gain", "f8"),
        ("dry_gain", "f8"),
        ("ceiling", "f8"),  # rounded down to float32, so that it holds in either format
        ("release", "f8"),  # limiter gain's growth factor a frame
        ("trap_frames", "i8"),  # length of the mute over a fault, and of the fade after it
        ("guard_on", "i8"),
        ("guard_window", "i8"),  # frames
        ("guard_hold", "i8"),  # frames
        ("guard_down", "f8"),  # factor a frame
        ("guard_up", "f8"),  # factor a frame
        ("meter_fall", "f8"),  # factor a frame of the short-term meters
        ("look_frames", "i8"),  # latency of the look-ahead limiter; 0 is zero latency
        ("look_first", "i8"),  # lengths of its two smoothers
        ("look_second", "i8"),
    ],
    align=True,
)

GROUP = np.dtype(
    [
        ("moving", "i8"),  # 1 while any lane's coefficients change; ringing then holds w and q
        ("awake", "i8"),  # 0 when every lane's level is 0 and at rest
        ("length", "i8"),  # frames in the current segment; 0 when the next one is to be begun
        ("done", "i8"),  # frames of it done
        ("landing", "i8"),  # frame at which the next of its ramps lands
        ("levels_move", "i8"),  # 1 while any level ramp is under way
        ("channels", "i8"),  # mask: channels any lane works on
    ],
    align=True,
)

CHANNEL = np.dtype(
    [
        ("x1", "f8"),  # resonators' feed x[n-1], x[n-2]
        ("x2", "f8"),
        ("input_traps", "i8"),  # input samples that were not finite or beyond INPUT_MAX
        ("state_traps", "i8"),  # times a filter's state was cleared
        ("trap_left", "i8"),  # frames left of the mute and fade over a fault
        ("bus_gain", "f8"),  # resonator bus limiter
        ("gain", "f8"),  # limiter
        ("guard_gain", "f8"),
        ("guard_peak", "f8"),  # of the window so far
        ("guard_energy", "f8"),
        ("guard_count", "i8"),  # tone windows in a row
        ("guard_left", "i8"),  # frames of the window to come
        ("guard_rest", "i8"),  # frames until the guard may return
        ("peak_in", "f8"),  # since the start
        ("peak_out", "f8"),
        ("energy_in", "f8"),
        ("energy_out", "f8"),
        ("gain_least", "f8"),
        ("bus_gain_least", "f8"),
        ("guard_gain_least", "f8"),
        ("limited", "i8"),  # frames during which the limiter held the level down
        ("recent_peak_in", "f8"),  # short-term, falling
        ("recent_peak_out", "f8"),
        ("recent_power_in", "f8"),
        ("recent_power_out", "f8"),
        ("look_head", "i8"),  # look-ahead: oldest and next place in the queue of minima
        ("look_tail", "i8"),
        ("look_held", "f8"),
        ("look_sum_first", "i8"),
        ("look_sum_second", "i8"),
    ],
    align=True,
)
