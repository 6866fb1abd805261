"""The look-ahead limiter: the gain is already down when the peak comes out, and smooth all the way.

    P[n]  true peak near frame n: the largest of the samples and their four-fold interpolation
    T[n] = min(1, c / P[n])                                  the gain this place needs
    M[n] = the least T of the last ``look_frames`` + 1       held until every sample near it has gone out
    H[n] = min(M[n], H[n-1] release)                         comes back gently
    G[n] = H smoothed by two running means, in all no longer than the latency less the interpolator's twelve taps

Means of numbers none above T stay at or under T, so no peak passes. Gains are whole multiples of 2^-30, so running
sums never drift and a gain of one is exactly one.

Source: interpolator ITU-R BS.1770-5 annex 2; the scheme is the sliding minimum with a non-negative FIR smoother of
unit gain. Thread: audio.
"""

from __future__ import annotations

from liveres.kernels._jit import inner
from liveres.theory.true_peak import PHASES

ONE = 1 << 30
TAPS = 12
# of each phase of the interpolator
LEAST_FRAMES = TAPS + 4
# shorter leaves the smoothers no room

_PEAK_MARGIN = 10.0 ** (-0.05 / 20.0)
# half of the 0.1 dB allowed, for a gain that moves within the interpolator's reach

DELAYED, NEEDED = 0, 1
# rows of ``look``: ring of samples on their way out; queue of minima
SINCE, HELD, MEAN = 0, 1, 2
# rows of ``marks``: frames of the queue's entries; ring of H for the first mean; ring of its sums for the second


@inner
def hold_under(state, channels, c, look, marks, v, frame):
    """Take one sample in; return the one that comes out now and its gain."""
    size = state[0].look_frames + 1
    here = frame % size
    look[c, DELAYED, here] = v
    need = 1.0
    peak = _true_peak(look, c, here, size)
    if peak > state[0].ceiling:
        need = state[0].ceiling * _PEAK_MARGIN / peak
    least = _sliding_least(channels, c, look, marks, need, frame, size)
    held = min(least, channels[c].look_held * state[0].release)
    channels[c].look_held = held
    return look[c, DELAYED, (frame + 1) % size], _smooth(state, channels, c, marks, int(held * ONE), frame)


@inner
def _true_peak(look, c, here, size):
    sums = (0.0, 0.0, 0.0, 0.0)
    peak = 0.0
    place = here
    for tap in range(TAPS):
        v = look[c, DELAYED, place]
        if 4 <= tap <= 7:
            peak = max(peak, abs(v))
        sums = (
            sums[0] + PHASES[0, tap] * v,
            sums[1] + PHASES[1, tap] * v,
            sums[2] + PHASES[2, tap] * v,
            sums[3] + PHASES[3, tap] * v,
        )
        place = place - 1 if place > 0 else size - 1
    return max(peak, abs(sums[0]), abs(sums[1]), abs(sums[2]), abs(sums[3]))


@inner
def _sliding_least(channels, c, look, marks, need, frame, size):
    # queue of rising gains, oldest first; the outdated go first, so that there is always room for one more, then
    # whatever a newer, smaller one makes pointless
    head, tail = channels[c].look_head, channels[c].look_tail
    while head < tail and marks[c, SINCE, head % size] <= frame - size:
        head += 1
    while tail > head and look[c, NEEDED, (tail - 1) % size] >= need:
        tail -= 1
    look[c, NEEDED, tail % size] = need
    marks[c, SINCE, tail % size] = frame
    tail += 1
    channels[c].look_head, channels[c].look_tail = head, tail
    return look[c, NEEDED, head % size]


@inner
def _smooth(state, channels, c, marks, held, frame):
    first, second = state[0].look_first, state[0].look_second
    place = frame % first
    channels[c].look_sum_first += held - marks[c, HELD, place]
    marks[c, HELD, place] = held
    place = frame % second
    channels[c].look_sum_second += channels[c].look_sum_first - marks[c, MEAN, place]
    marks[c, MEAN, place] = channels[c].look_sum_first
    return channels[c].look_sum_second / (float(ONE) * first * second)
