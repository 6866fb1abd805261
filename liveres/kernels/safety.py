"""The safety stage: whatever comes in, no sample goes out that is not finite or is beyond the ceiling.

Order, per channel: trap over non-finite sums, limiter, sustained-tone guard, mute gate, hard bound. Channels are
judged each for itself, so a howl in one monitor does not duck the others.

Limiter, zero latency: gain falls at once to ceiling/|v| and recovers by a constant number of dB a second; with no
more to do it is exactly 1 and samples pass untouched.

Guard: a loudspeaker heats with the mean square, and a tone's peak is only 3 dB above it where speech and music keep
10 dB and more. So the guard measures crest (peak over rms) in windows of 40 ms: eight in a row near the ceiling with
the crest of a tone, or of one that clips, and the output steps down 12 dB, holds, and returns slowly.
Source: crest of a sine sqrt(2), exact; thermal limits of drivers, common practice.
"""

from __future__ import annotations

import math

from numba import int64

from liveres.kernels import lookahead
from liveres.kernels import state as s
from liveres.kernels._jit import inner
from liveres.limits import GUARD_CREST_DB, GUARD_DROP_DB, GUARD_NEAR_DB, GUARD_WINDOWS, INPUT_MAX, STATE_MAX

_GUARD_LEAST = 10.0 ** (-GUARD_DROP_DB / 20.0)
_GUARD_NEAR = 10.0 ** (-GUARD_NEAR_DB / 20.0)
_GUARD_CREST_SQUARE = 10.0 ** (GUARD_CREST_DB / 10.0)


@inner
def take_in(state, channels, c, x, position, signal, count, fall):
    """Copy one channel's input into signal[c], trapping what is no sound, and meter it before the input gain."""
    gain = state[0].input_gain
    peak, energy = 0.0, channels[c].energy_in
    for n in range(count):
        v = x[position + n, c]
        if not abs(v) <= INPUT_MAX:
            channels[c].input_traps += 1
            # NaN and infinity are no sound; a finite number beyond full scale by so much is held
            v = 0.0 if not abs(v) < math.inf else math.copysign(INPUT_MAX, v)
        a = abs(v)
        peak = a if a > peak else peak
        energy += v * v
        signal[c, n] = v * gain
    power = (energy - channels[c].energy_in) / count
    channels[c].energy_in = energy
    channels[c].peak_in = max(channels[c].peak_in, peak)
    channels[c].recent_peak_in = max(peak, channels[c].recent_peak_in * fall)
    channels[c].recent_power_in = power + (channels[c].recent_power_in - power) * fall


@inner
def glide(glides, which):
    """Move a slow gain on by one frame and return it; it lands on its target exactly."""
    left = glides[which, s.LEFT]
    if left > 0.0:
        glides[which, s.LEFT] = left - 1.0
        glides[which, s.NOW] = glides[which, s.END] if left == 1.0 else glides[which, s.NOW] + glides[which, s.STEP]
    return glides[which, s.NOW]


@inner
def limited_gain(gain, level, ceiling, release):
    """The limiter's next gain: back up by ``release``, at once down to what ``level`` needs, never above 1."""
    gain *= release
    if gain > 1.0:
        gain = 1.0
    if level * gain > ceiling:
        gain = ceiling / level
    return gain


@inner
def mix_bus(state, channels, c, bus, signal, slow, count):
    """signal = dry gain * signal + the resonator bus, which is held under its own permitted level."""
    gain, least = channels[c].bus_gain, channels[c].bus_gain_least
    dry, release = state[0].dry_gain, state[0].release
    for n in range(count):
        v = bus[c, n] * slow[s.BUS, n]
        gain = limited_gain(gain, abs(v), slow[s.BUS_LIMIT, n], release)
        least = min(least, gain)
        signal[c, n] = dry * signal[c, n] + v * gain
    channels[c].bus_gain, channels[c].bus_gain_least = gain, least


@inner
def make_safe(state, channels, c, signal, slow, look, marks, y, position, count, events, fall):
    """Bring one channel's signal under the ceiling and write it out."""
    _trap(state, channels, c, signal, count, events)
    _limit(state, channels, c, signal, look, marks, count)
    if state[0].guard_on:
        _guard(state, channels, c, signal, count, events)
    ceiling = state[0].ceiling
    peak, energy = 0.0, channels[c].energy_out
    for n in range(count):
        v = signal[c, n] * slow[s.GATE, n]
        v = v if v < ceiling else ceiling
        v = v if v > -ceiling else -ceiling
        y[position + n, c] = v
        a = abs(v)
        peak = a if a > peak else peak
        energy += v * v
    power = (energy - channels[c].energy_out) / count
    channels[c].energy_out = energy
    channels[c].peak_out = max(channels[c].peak_out, peak)
    channels[c].recent_peak_out = max(peak, channels[c].recent_peak_out * fall)
    channels[c].recent_power_out = power + (channels[c].recent_power_out - power) * fall


@inner
def _trap(state, channels, c, signal, count, events):
    # from a sum that is no sound on: silence for trap_frames, while the filters are cleared, then a fade of the same
    sound = channels[c].trap_left == 0
    for n in range(count):
        sound = sound and abs(signal[c, n]) <= STATE_MAX
    if sound:
        return
    for n in range(count):
        v = signal[c, n]
        if not abs(v) <= STATE_MAX:
            if channels[c].trap_left == 0:
                channels[c].state_traps += 1
                log(state, events, state[0].frame + n, s.TRAP_EVENT, c)
                channels[c].trap_left = 2 * state[0].trap_frames
            v = 0.0
        if channels[c].trap_left > 0:
            channels[c].trap_left -= 1
            fading = channels[c].trap_left / state[0].trap_frames
            v = 0.0 if fading >= 1.0 else v * (1.0 - fading)
        signal[c, n] = v


@inner
def _limit(state, channels, c, signal, look, marks, count):
    ceiling, release, gain = state[0].ceiling, state[0].release, channels[c].gain
    if state[0].look_frames == 0:
        peak = 0.0
        for n in range(count):
            a = abs(signal[c, n])
            peak = a if a > peak else peak
        if gain == 1.0 and peak <= ceiling:
            return
    least, limited = 1.0, 0
    for n in range(count):
        v = signal[c, n]
        if state[0].look_frames > 0:
            v, gain = lookahead.hold_under(state, channels, c, look, marks, v, state[0].frame + n)
        else:
            gain = limited_gain(gain, abs(v), ceiling, release)
        signal[c, n] = v * gain
        least = gain if gain < least else least
        limited += gain < 1.0
    channels[c].gain = gain
    channels[c].gain_least = min(channels[c].gain_least, least)
    channels[c].limited += limited


@inner
def _guard(state, channels, c, signal, count, events):
    position = int64(0)
    while position < count:
        stop = min(count, position + channels[c].guard_left)
        peak, energy = channels[c].guard_peak, channels[c].guard_energy
        for n in range(position, stop):
            v = signal[c, n]
            a = abs(v)
            peak = a if a > peak else peak
            energy += v * v
        channels[c].guard_peak, channels[c].guard_energy = peak, energy
        if channels[c].guard_rest > 0 or channels[c].guard_gain < 1.0:
            _step_down(state, channels, c, signal, position, stop)
        channels[c].guard_left -= stop - position
        position = stop
        if channels[c].guard_left == 0:
            _judge_window(state, channels, c, state[0].frame + position - 1, events)


@inner
def _step_down(state, channels, c, signal, start, stop):
    for n in range(start, stop):
        if channels[c].guard_rest > 0:
            channels[c].guard_rest -= 1
            channels[c].guard_gain = max(channels[c].guard_gain * state[0].guard_down, _GUARD_LEAST)
        else:
            channels[c].guard_gain = min(channels[c].guard_gain * state[0].guard_up, 1.0)
        channels[c].guard_gain_least = min(channels[c].guard_gain_least, channels[c].guard_gain)
        signal[c, n] *= channels[c].guard_gain


@inner
def _judge_window(state, channels, c, frame, events):
    peak, mean = channels[c].guard_peak, channels[c].guard_energy / state[0].guard_window
    tone = peak >= state[0].ceiling * _GUARD_NEAR and peak * peak <= mean * _GUARD_CREST_SQUARE
    channels[c].guard_count = channels[c].guard_count + 1 if tone else 0
    channels[c].guard_peak = channels[c].guard_energy = 0.0
    channels[c].guard_left = state[0].guard_window
    if channels[c].guard_count >= GUARD_WINDOWS:
        if channels[c].guard_rest == 0:
            log(state, events, frame, s.GUARD_EVENT, c)
        channels[c].guard_rest = state[0].guard_hold


@inner
def log(state, events, frame, kind, c):
    """Write an event into the ring; the newest EVENTS of them can be read."""
    place = state[0].event_count % s.EVENTS
    events[place, s.EVENT_FRAME] = frame
    events[place, s.EVENT_KIND] = kind
    events[place, s.EVENT_CHANNEL] = c
    state[0].event_count += 1
