"""Moving filters: ramps of centre, width and level that land on their targets at the exact frame.

A ramp multiplies the centre, and the decay rate -ln R, by a constant each frame, so both move evenly in their
logarithms. Between two legal settings that path is legal but for one thing: from wide at a low centre to very wide at a
high one it passes pairs too wide for the centres between, whose poles would turn real. There the width is held at the
widest a setting may have.

The exact pole is worked out once a SEGMENT; inside it the pole walks the straight chord between the two ends.
A chord lies inside the circle through its ends, so no pole radius between is larger than the larger end: motion
can lose energy and never make any. Over an angle a the radius sags by a^2/12 on average; sweeping 200 to 4000 Hz
in 10 ms that costs the ringing under 0.2 dB.

Segments end on multiples of their length counted from frame 0, and where a ramp lands. Block boundaries do not
matter.

The level follows 3 t^2 - 2 t^3, which starts and ends without a corner: a gain's corner is heard as a click. Chords of
a curve have corners too, at 16 frames some 82 dB under the sound they act on, so notches and moving levels, which act
on the whole sound, go by segments of 4.
"""

from __future__ import annotations

import math

from liveres.kernels import state as s
from liveres.kernels._jit import fma, inner, square_root
from liveres.theory.poles import PAIR_MARGIN

LANES, SEGMENT = s.LANES, s.SEGMENT
_DOUBLINGS = SEGMENT.bit_length() - 1
_FAR = 1 << 60
# frames; no ramp is as long
_NOTHING = 1e-300
# keeps an empty lane's 0/0 away; too small to change any other number
_WIDEST = math.sqrt(1.0 - PAIR_MARGIN)
# tanh(decay) of the widest permitted pair, as a share of sin(w0)


@inner
def pole_at(omega, decay):
    """Re p, Im p, (1 - R^2)/2 of the pair that peaks at omega; polynomials, so that lanes go abreast.

    Taylor series on a quarter of the angle and a sixteenth of the decay, doubled back. Good to 1e-10, and
    to 3e-9 where the poles are about to turn real, which is enough on the way: at both ends the exact pole stands.
    """
    q = 0.25 * omega
    z = q * q
    sin_q = fma(z, fma(z, -1.0 / 39916800, 1.0 / 362880), -1.0 / 5040)
    sin_q = q * fma(z, fma(z, fma(z, sin_q, 1.0 / 120), -1.0 / 6), 1.0)
    cos_q = fma(z, fma(z, fma(z, 1.0 / 479001600, -1.0 / 3628800), 1.0 / 40320), -1.0 / 720)
    cos_q = fma(z, fma(z, fma(z, cos_q, 1.0 / 24), -0.5), 1.0)
    sin_h = 2.0 * sin_q * cos_q
    cos_h = fma(-2.0 * sin_q, sin_q, 1.0)
    sine = 2.0 * sin_h * cos_h
    cosine = fma(-2.0 * sin_h, sin_h, 1.0)
    # e = expm1(-2 decay), by expm1(2 v) = expm1(v) (expm1(v) + 2): relative accuracy is kept for decays near none
    v = decay * (-1.0 / 16.0)
    e = fma(v, fma(v, fma(v, 1.0 / 40320, 1.0 / 5040), 1.0 / 720), 1.0 / 120)
    e = v * fma(v, fma(v, fma(v, fma(v, e, 1.0 / 24), 1.0 / 6), 0.5), 1.0)
    for _ in range(5):
        e = fma(e, e, 2.0 * e)
    widest = _WIDEST * sine
    bound = -2.0 * widest / (1.0 + widest)
    e = e if e > bound else bound
    one_plus = 2.0 + e
    square = fma(one_plus * sine, one_plus * sine, -e * e)
    return 0.5 * one_plus * cosine, 0.5 * square_root(square + _NOTHING), -0.5 * e


@inner
def begin_motion(groups, lanes, ringing, g):
    """Turn a group's ringing from w[n-1], w[n-2] into w[n-1] and its quadrature q[n-1]."""
    for c in range(ringing.shape[1]):
        for k in range(LANES):
            real, imag = lanes[g, s.REAL_END + k], lanes[g, s.IMAG_END + k]
            if imag > 0.0:
                ringing[g, c, LANES + k] = (ringing[g, c, k] * real - ringing[g, c, LANES + k] * lanes[g, s.C2 + k]) / imag
    groups[g].moving = 1
    groups[g].length = groups[g].done = 0
    groups[g].landing = 0


@inner
def end_motion(groups, lanes, ringing, g):
    """Put a group to rest on its targets: quadratures become w[n-2] again, and the direct form takes over."""
    awake = 0
    for k in range(LANES):
        real, imag = lanes[g, s.REAL_END + k], lanes[g, s.IMAG_END + k]
        lanes[g, s.REAL + k], lanes[g, s.IMAG + k], lanes[g, s.PEAK + k] = real, imag, lanes[g, s.PEAK_END + k]
        lanes[g, s.LEVEL + k] = lanes[g, s.LEVEL_END + k]
        lanes[g, s.C1 + k], lanes[g, s.C2 + k] = 2.0 * real, real * real + imag * imag
        if imag > 0.0:
            lanes[g, s.TURN + k] = lanes[g, s.PEAK_END + k] * real / imag
            for c in range(ringing.shape[1]):
                ringing[g, c, LANES + k] = (ringing[g, c, k] * real - ringing[g, c, LANES + k] * imag) / lanes[g, s.C2 + k]
        if lanes[g, s.LEVEL_END + k] != 0.0:
            awake = 1
    groups[g].moving = 0
    groups[g].awake = awake
    groups[g].length = groups[g].done = 0


@inner
def begin_segment(groups, lanes, ringing, g, frame):
    """Work out where every lane of a moving group is at the end of its next segment, or put the group to rest."""
    if frame >= groups[g].landing and not _find_landing(groups, lanes, g, frame):
        end_motion(groups, lanes, ringing, g)
        return
    longest = s.SHORT_SEGMENT if g < s.NOTCH_GROUPS or groups[g].levels_move else SEGMENT
    length = min(longest - frame % longest, groups[g].landing - frame)
    _walk(lanes, g, s.OMEGA, length)
    _walk(lanes, g, s.DECAY, length)
    share = 1.0 / length
    end_frame = float(frame + length)
    for k in range(LANES):
        real, imag, peak = pole_at(lanes[g, s.OMEGA + k], lanes[g, s.DECAY + k])
        real_end, imag_end, peak_end = lanes[g, s.REAL_END + k], lanes[g, s.IMAG_END + k], lanes[g, s.PEAK_END + k]
        landed = (lanes[g, s.CENTRE_LANDS + k] <= end_frame) & (lanes[g, s.WIDTH_LANDS + k] <= end_frame)
        real = real_end if landed else real
        imag = imag_end if landed else imag
        peak = peak_end if landed else peak
        turn = peak * real / (imag + _NOTHING)
        lanes[g, s.REAL + s.GROWTH + k] = (real - lanes[g, s.REAL + k]) * share
        lanes[g, s.IMAG + s.GROWTH + k] = (imag - lanes[g, s.IMAG + k]) * share
        lanes[g, s.PEAK + s.GROWTH + k] = (peak - lanes[g, s.PEAK + k]) * share
        lanes[g, s.TURN + s.GROWTH + k] = (turn - lanes[g, s.TURN + k]) * share
        lanes[g, s.REAL + k], lanes[g, s.IMAG + k] = real, imag
        lanes[g, s.PEAK + k], lanes[g, s.TURN + k] = peak, turn
    if groups[g].levels_move:
        for k in range(LANES):
            start, end = lanes[g, s.LEVEL_FROM + k], lanes[g, s.LEVEL_END + k]
            t = 1.0 - (lanes[g, s.LEVEL_LANDS + k] - end_frame) * lanes[g, s.LEVEL_PACE + k]
            level = start + (end - start) * (t * t * (3.0 - 2.0 * t))
            level = end if lanes[g, s.LEVEL_LANDS + k] <= end_frame else level
            lanes[g, s.LEVEL + s.GROWTH + k] = (level - lanes[g, s.LEVEL + k]) * share
            lanes[g, s.LEVEL + k] = level
    groups[g].length = length
    groups[g].done = 0


@inner
def _find_landing(groups, lanes, g, frame):
    # put what has landed to rest; note where the next ramp lands; False when none is under way
    landing = frame + _FAR
    levels_move = 0
    for k in range(LANES):
        for row, lands in ((s.OMEGA, s.CENTRE_LANDS), (s.DECAY, s.WIDTH_LANDS)):
            if lanes[g, lands + k] <= frame:
                lanes[g, row + k] = lanes[g, row + s.TO_END + k]
                set_pace(lanes, g, k, row, 1.0)
            else:
                landing = min(landing, int(lanes[g, lands + k]))
        if lanes[g, s.LEVEL_LANDS + k] <= frame:
            lanes[g, s.LEVEL + k] = lanes[g, s.LEVEL_END + k]
            lanes[g, s.LEVEL + s.GROWTH + k] = 0.0
        else:
            levels_move = 1
            landing = min(landing, int(lanes[g, s.LEVEL_LANDS + k]))
    groups[g].landing = landing
    groups[g].levels_move = levels_move
    return landing < frame + _FAR


@inner
def set_pace(lanes, g, k, row, step):
    """Set the factor a frame of a ramp, and with it the factor a SEGMENT."""
    stride = step
    for _ in range(_DOUBLINGS):
        stride *= stride
    lanes[g, row + s.TO_STEP + k], lanes[g, row + s.TO_STRIDE + k] = step, stride


@inner
def _walk(lanes, g, row, frames):
    # row *= step^frames
    if frames == SEGMENT:
        for k in range(LANES):
            lanes[g, row + k] *= lanes[g, row + s.TO_STRIDE + k]
    else:
        for _ in range(frames):
            for k in range(LANES):
                lanes[g, row + k] *= lanes[g, row + s.TO_STEP + k]


@inner
def break_segment(groups, lanes, g):
    """Put a moving group back to where it is at this frame, part of the way through a segment, for a command to act on."""
    rest = groups[g].length - groups[g].done
    if rest > 0:
        for k in range(LANES):
            for row in (s.OMEGA, s.DECAY):
                lanes[g, row + k] /= lanes[g, row + s.TO_STEP + k] ** rest
        for row in range(s.REAL, s.LEVEL + 1, LANES):
            for k in range(LANES):
                lanes[g, row + k] -= rest * lanes[g, row + s.GROWTH + k]
    groups[g].length = groups[g].done = 0
    groups[g].landing = 0
