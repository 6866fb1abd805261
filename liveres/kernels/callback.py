"""The function the sound system calls: native code from the first instruction to the last.

Order of work: silence in the output, count, take commands, run the block kernel chunk by chunk, note how long it took.
Whatever goes wrong, the output has been filled.

Reached through one pointer, to a PORTS record of addresses. The record and every array it names belong to the host
that opened the stream, which keeps them until after it is closed. Who writes what:

    MAIL     the callback, but for ``shared``, which both exchange atomically (acquire and release)
    STATS    the callback only; the control side reads single 8-byte words
    the rest as in state.py

Thread: audio. No allocation, lock, Python, print or exception.
"""

from __future__ import annotations

import ctypes

import numpy as np
from numba import carray, int64, types

from liveres.kernels import block, commands
from liveres.kernels import state as s
from liveres.kernels._jit import (
    clock_ns,
    entry,
    exchange,
    inner,
    is_null,
    load_acquire,
    native_callback,
    pointer,
    store_release,
    thread_id,
)

FRESH = 4
# bit of the shared word that says its slot has not been taken yet; the two bits below it are the slot
MAIL_ROWS = 40_000
# commands a slot holds: every filter placed, tuned and levelled at once, with room
LOG_ROWS = 4096

MAIL = np.dtype(
    [
        ("shared", "i8"),
        ("slot", "i8"),  # the reader's own
        ("taken", "i8"),  # sequence number of the last command carried out
        ("log_count", "i8"),
    ],
    align=True,
)
_TAKEN_AT = MAIL.fields["taken"][1]
LOG_SEQUENCE, LOG_FRAME = 0, 1

STATS = np.dtype(
    [
        ("callbacks", "i8"),
        ("input_underflows", "i8"),
        ("input_overflows", "i8"),
        ("output_underflows", "i8"),
        ("output_overflows", "i8"),
        ("worst_ns", "i8"),
        ("total_ns", "i8"),
        ("frames_most", "i8"),
        ("thread", "i8"),
    ],
    align=True,
)

PORT_NAMES = (
    "state", "channels", "groups", "lanes", "masks", "ringing", "history", "glides",
    "signal", "feed", "bus", "slow", "sums", "look", "marks", "events",
    "mail", "mail_counts", "mail_rows", "mail_log", "stats", "x", "y",
)  # fmt: skip
PORTS = np.dtype([(name, "i8") for name in PORT_NAMES] + [("channel_count", "i8"), ("look_size", "i8")], align=True)

UNSIGNED_LONG = types.uint32 if ctypes.sizeof(ctypes.c_ulong) == 4 else types.uint64
# PortAudio counts frames and flags in unsigned long, which is 32 bits on Windows
_SIGNATURE = types.int32(types.voidptr, types.voidptr, UNSIGNED_LONG, types.voidptr, UNSIGNED_LONG, types.voidptr)
_CONTINUE = 0


@entry(int64(int64, int64))
def publish(address, slot):
    """Offer a filled slot at the mailbox's shared word; returns the slot that is now the writer's. Thread: control."""
    return exchange(address, slot | FRESH) & 3


@entry(int64(int64))
def read_word(address):
    """A word the audio thread writes, with what it wrote before it. Thread: control."""
    return load_acquire(address)


@inner
def _count(stats, flags):
    stats[0].input_underflows += flags & 1
    stats[0].input_overflows += flags >> 1 & 1
    stats[0].output_underflows += flags >> 2 & 1
    stats[0].output_overflows += flags >> 3 & 1
    if stats[0].callbacks == 0:
        stats[0].thread = thread_id()


@inner
def take_mail(
    mail, shared_at, taken_at, counts, rows, log, state, channels, groups, lanes, masks, ringing, history, glides
):  # fmt: skip
    """Carry out what a fresh slot asks for, each command once; note at which frame."""
    if load_acquire(shared_at) & FRESH == 0:
        return
    slot = exchange(shared_at, mail[0].slot) & 3
    mail[0].slot = slot
    taken = mail[0].taken
    first = slot * MAIL_ROWS
    for i in range(first, first + counts[slot]):
        # a slot repeats what the writer did not yet know to be taken
        if rows[i, s.SEQUENCE] > taken:
            commands.carry_out(state, channels, groups, lanes, masks, ringing, history, glides, rows, i)
            taken = int(rows[i, s.SEQUENCE])
    place = mail[0].log_count % LOG_ROWS
    log[place, LOG_SEQUENCE] = taken
    log[place, LOG_FRAME] = state[0].frame
    mail[0].log_count += 1
    store_release(taken_at, taken)


@inner
def _read(input_at, position, size, channel_count, count, x):
    # a stream without an input, or a driver that had none to give, passes a null pointer: silence
    if is_null(input_at):
        for n in range(size):
            for c in range(channel_count):
                x[n, c] = 0.0
        return
    source = carray(input_at, (count, channel_count), np.float32)
    for n in range(size):
        for c in range(channel_count):
            x[n, c] = source[position + n, c]


@native_callback(_SIGNATURE)
def audio_callback(input_at, output_at, frames, time_info, flags, user):
    """PaStreamCallback. Returns paContinue, always: a stream ends when its owner ends it."""
    began = clock_ns()
    ports = carray(user, 1, PORTS)[0]
    channel_count = ports.channel_count
    count = int64(frames)
    output = carray(output_at, (count, channel_count), np.float32)
    for n in range(count):
        for c in range(channel_count):
            output[n, c] = 0.0
    stats = carray(pointer(ports.stats), (1,), STATS)
    _count(stats, int64(flags))
    state = carray(pointer(ports.state), (1,), s.STATE)
    channels = carray(pointer(ports.channels), (channel_count,), s.CHANNEL)
    groups = carray(pointer(ports.groups), (s.GROUPS,), s.GROUP)
    lanes = carray(pointer(ports.lanes), (s.GROUPS, s.FIELDS * s.LANES), np.float64)
    masks = carray(pointer(ports.masks), (s.GROUPS, s.LANES), np.int64)
    ringing = carray(pointer(ports.ringing), (s.GROUPS, channel_count, 2 * s.LANES), np.float64)
    history = carray(pointer(ports.history), (s.NOTCH_GROUPS, channel_count, 2 * s.LANES), np.float64)
    glides = carray(pointer(ports.glides), (s.GLIDES, 4), np.float64)
    signal = carray(pointer(ports.signal), (channel_count, s.CHUNK), np.float64)
    feed = carray(pointer(ports.feed), (channel_count, s.CHUNK), np.float64)
    bus = carray(pointer(ports.bus), (channel_count, s.CHUNK), np.float64)
    slow = carray(pointer(ports.slow), (s.GLIDES, s.CHUNK), np.float64)
    sums = carray(pointer(ports.sums), (channel_count, s.CHUNK * s.LANES), np.float64)
    look = carray(pointer(ports.look), (channel_count, 2, ports.look_size), np.float64)
    marks = carray(pointer(ports.marks), (channel_count, 3, ports.look_size), np.int64)
    events = carray(pointer(ports.events), (s.EVENTS, s.EVENT_FIELDS), np.float64)
    mail = carray(pointer(ports.mail), (1,), MAIL)
    counts = carray(pointer(ports.mail_counts), (3,), np.int64)
    rows = carray(pointer(ports.mail_rows), (3 * MAIL_ROWS, s.COMMAND_FIELDS), np.float64)
    log = carray(pointer(ports.mail_log), (LOG_ROWS, 2), np.float64)
    take_mail(
        mail, ports.mail, ports.mail + _TAKEN_AT, counts, rows, log,
        state, channels, groups, lanes, masks, ringing, history, glides,
    )  # fmt: skip
    position = int64(0)
    while position < count:
        size = min(count - position, s.CHUNK)
        x = carray(pointer(ports.x), (size, channel_count), np.float64)
        y = carray(pointer(ports.y), (size, channel_count), np.float64)
        _read(input_at, position, size, channel_count, count, x)
        block.advance(
            state, channels, groups, lanes, masks, ringing, history, glides,
            signal, feed, bus, slow, sums, look, marks, events, x, y,
        )  # fmt: skip
        for n in range(size):
            for c in range(channel_count):
                output[position + n, c] = y[n, c]
        position += size
    stats[0].frames_most = max(stats[0].frames_most, count)
    took = clock_ns() - began
    stats[0].total_ns += took
    stats[0].worst_ns = max(stats[0].worst_ns, took)
    stats[0].callbacks += 1
    return _CONTINUE
