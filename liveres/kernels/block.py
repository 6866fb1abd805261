"""The block kernel: everything between a block of input and a block of output, for every host.

    input gain -> notches in series -> (dry gain * that) + resonators fed by it -> safety stage

Work goes in chunks of at most CHUNK frames, groups of lanes inside them, frames inside those. A chunk's size changes
no sum's order, so results do not depend on how a signal is cut into blocks.

Thread: audio. No allocation, lock, Python or exception.
"""

from __future__ import annotations

from numba import float64, from_dtype, int64, void

from liveres.kernels import commands, motion, safety, section
from liveres.kernels import state as s
from liveres.kernels._jit import entry, flush_denormals, inner, restore_float_mode

LANES, CHUNK = s.LANES, s.CHUNK


@inner
def _advance_group(groups, g, done):
    if groups[g].moving:
        groups[g].done += done


@inner
def _stretch(groups, lanes, ringing, g, frame, position, count):
    # frames from here on that group g can go without a new segment
    if groups[g].moving and groups[g].done == groups[g].length:
        motion.begin_segment(groups, lanes, ringing, g, frame + position)
    if groups[g].moving:
        return min(groups[g].length - groups[g].done, count - position)
    return count - position


@inner
def _run_chain(groups, lanes, masks, ringing, history, g, c, signal, start, stop):
    # one group's notches on one channel, in order; at rest two at a time
    waiting = int64(-1)
    for k in range(LANES):
        at_work = lanes[g, s.LEVEL + k] != 0.0 or lanes[g, s.LEVEL + s.GROWTH + k] != 0.0
        if not (at_work and masks[g, k] >> c & 1):
            continue
        if groups[g].moving:
            section.advance_notch(groups, lanes, ringing, history, g, k, c, signal, start, stop)
        elif waiting < 0:
            waiting = k
        else:
            section.advance_two_still(lanes, ringing, history, g, waiting, k, c, signal, start, stop)
            waiting = int64(-1)
    if waiting >= 0:
        section.advance_notch(groups, lanes, ringing, history, g, waiting, c, signal, start, stop)


@inner
def _run_notches(state, groups, lanes, masks, ringing, history, signal, count):
    for g in range(min(s.NOTCH_GROUPS, state[0].groups_used)):
        position = int64(0)
        while position < count and (groups[g].moving or groups[g].awake):
            frames = _stretch(groups, lanes, ringing, g, state[0].frame, position, count)
            for c in range(ringing.shape[1]):
                if groups[g].channels >> c & 1:
                    _run_chain(groups, lanes, masks, ringing, history, g, c, signal, position, position + frames)
            _advance_group(groups, g, frames)
            position += frames


@inner
def _run_bank(state, groups, lanes, ringing, feed, sums, count):
    for g in range(s.NOTCH_GROUPS, state[0].groups_used):
        position = int64(0)
        while position < count and (groups[g].moving or groups[g].awake):
            frames = _stretch(groups, lanes, ringing, g, state[0].frame, position, count)
            stop = position + frames
            for c in range(ringing.shape[1]):
                if groups[g].channels >> c & 1:
                    if groups[g].moving:
                        section.advance_bank_moving(groups, lanes, ringing, g, c, feed, sums, position, stop)
                    else:
                        section.advance_bank_still(lanes, ringing, g, c, feed, sums, position, stop)
            _advance_group(groups, g, frames)
            position = stop


@inner
def _make_feed(channels, c, signal, feed, count):
    # every section wants x[n] - x[n-2]; resonators of a channel share it
    x1, x2 = channels[c].x1, channels[c].x2
    for n in range(count):
        x = signal[c, n]
        feed[c, n] = x - x2
        x2, x1 = x1, x
    channels[c].x1, channels[c].x2 = x1, x2


@inner
def _gather(c, sums, bus, count):
    for n in range(count):
        total = 0.0
        for k in range(LANES):
            total += sums[c, n * LANES + k]
        bus[c, n] = total


@inner
def _chunk_frames(state, channels, left):
    # a chunk ends where a channel's mute over a fault does, so that its filters restart at that very frame
    count = min(left, CHUNK)
    for c in range(channels.shape[0]):
        mute = channels[c].trap_left - state[0].trap_frames
        if mute > 0:
            count = min(count, mute)
    return count


@inner
def advance_block(
    state, channels, groups, lanes, masks, ringing, history, glides,
    signal, feed, bus, slow, sums, look, marks, events, x, y,
):  # fmt: skip
    """Process x (frames, channels) float64 into y of the same shape."""
    position = int64(0)
    while position < x.shape[0]:
        count = _chunk_frames(state, channels, x.shape[0] - position)
        fall = state[0].meter_fall ** count
        for n in range(count):
            slow[s.BUS, n] = safety.glide(glides, s.BUS)
            slow[s.BUS_LIMIT, n] = safety.glide(glides, s.BUS_LIMIT)
            slow[s.GATE, n] = safety.glide(glides, s.GATE)
        for c in range(channels.shape[0]):
            safety.take_in(state, channels, c, x, position, signal, count, fall)
        _run_notches(state, groups, lanes, masks, ringing, history, signal, count)
        for c in range(channels.shape[0]):
            _make_feed(channels, c, signal, feed, count)
            for i in range(count * LANES):
                sums[c, i] = 0.0
        _run_bank(state, groups, lanes, ringing, feed, sums, count)
        # once there has been a resonator the bus is mixed in also while all sleep: its limiter goes on recovering
        has_bus = state[0].groups_used > s.NOTCH_GROUPS
        for c in range(channels.shape[0]):
            if has_bus:
                _gather(c, sums, bus, count)
                safety.mix_bus(state, channels, c, bus, signal, slow, count)
            elif state[0].dry_gain != 1.0:
                for n in range(count):
                    signal[c, n] *= state[0].dry_gain
            safety.make_safe(state, channels, c, signal, slow, look, marks, y, position, count, events, fall)
            if channels[c].trap_left >= state[0].trap_frames and channels[c].trap_left > 0:
                commands.clear_channel(state, channels, ringing, history, c)
        state[0].frame += count
        position += count


_ARRAYS = (
    from_dtype(s.STATE)[::1],
    from_dtype(s.CHANNEL)[::1],
    from_dtype(s.GROUP)[::1],
    float64[:, ::1],  # lanes
    int64[:, ::1],  # masks
    float64[:, :, ::1],  # ringing
    float64[:, :, ::1],  # history
    float64[:, ::1],  # glides
    float64[:, ::1],  # signal
    float64[:, ::1],  # feed
    float64[:, ::1],  # bus
    float64[:, ::1],  # slow
    float64[:, ::1],  # sums
    float64[:, :, ::1],  # look
    int64[:, :, ::1],  # marks
    float64[:, ::1],  # events
)


@entry(void(*_ARRAYS, float64[:, ::1], float64[:, ::1]))
def advance(
    state, channels, groups, lanes, masks, ringing, history, glides,
    signal, feed, bus, slow, sums, look, marks, events, x, y,
):  # fmt: skip
    """advance_block with denormals flushed, and the float mode put back after."""
    mode = flush_denormals()
    advance_block(
        state, channels, groups, lanes, masks, ringing, history, glides,
        signal, feed, bus, slow, sums, look, marks, events, x, y,
    )  # fmt: skip
    restore_float_mode(mode)


@entry(void(*_ARRAYS, float64[:, ::1], int64))
def carry_out(
    state, channels, groups, lanes, masks, ringing, history, glides,
    signal, feed, bus, slow, sums, look, marks, events, rows, count,
):  # fmt: skip
    """Carry out the first ``count`` commands of ``rows``, before the next frame."""
    for i in range(count):
        commands.carry_out(state, channels, groups, lanes, masks, ringing, history, glides, rows, i)
