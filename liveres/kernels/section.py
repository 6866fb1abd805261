"""The section: one conjugate pole pair in direct form, with its ringing carried across every change.

    w[n] = peak (x[n] - x[n-2]) + 2 R cos(t) w[n-1] - R^2 w[n-2]        R e^(j t) the pole
    resonator  y[n] = g w[n]            notch  y[n] = x[n] - d w[n]

Carrying. With q = (w[n-1] cos t - w[n-2] R) / sin t, the ringing's quadrature, a new pole (R', t') keeps w[n-1] and
takes w[n-2] = (cos t' w[n-1] - sin t' q) / R'. Neither the ringing's amplitude nor its phase jumps, whatever the
change. When the pole changes at every frame it is shorter to remember (w, q) than (w[n-1], w[n-2]): putting the one
into the other, with re = R cos t, im = R sin t and u = x[n] - x[n-2],

    w[n] = peak u + re w[n-1] + im q[n-1]
    q[n] = turn u + re q[n-1] - im w[n-1]            turn = peak re / im

which is the direct form carried at each frame, to the last digits, and plainly a rotation by a factor R below one:
no motion can make it grow. A group of lanes is in the first form at rest and in the second while any of them moves.

Lanes lie side by side, so the loops over them vectorise without changing any sum's order. Frames go in fours to
save memory traffic; each frame's arithmetic is the same in fours and alone, so block boundaries do not show.

Source: carried state after Zetterberg & Zhang 1988 and Valimaki & Laakso 1998 (elimination of transients);
the rotation is Gold & Rader's coupled form; boundedness by Laroche 2007 (a norm under one for every matrix).
"""

from __future__ import annotations

from liveres.kernels import state as s
from liveres.kernels._jit import fma, inner

LANES, CHUNK = s.LANES, s.CHUNK


@inner
def advance_notch(groups, lanes, ringing, history, g, k, c, signal, start, stop):
    """Run one notch over signal[c, start:stop] in place."""
    w1, v1 = ringing[g, c, k], ringing[g, c, LANES + k]
    x1, x2 = history[g, c, k], history[g, c, LANES + k]
    if groups[g].moving == 0:
        peak, level = lanes[g, s.PEAK + k], lanes[g, s.LEVEL + k]
        c1, c2 = lanes[g, s.C1 + k], lanes[g, s.C2 + k]
        for n in range(start, stop):
            x = signal[c, n]
            w = fma(c1, w1, fma(peak, x - x2, -c2 * v1))
            x2, x1, v1, w1 = x1, x, w1, w
            signal[c, n] = fma(-level, w, x)
    else:
        rest = groups[g].length - groups[g].done - 1 + start
        for n in range(start, stop):
            t = float(rest - n)
            real = fma(-t, lanes[g, s.REAL + s.GROWTH + k], lanes[g, s.REAL + k])
            imag = fma(-t, lanes[g, s.IMAG + s.GROWTH + k], lanes[g, s.IMAG + k])
            peak = fma(-t, lanes[g, s.PEAK + s.GROWTH + k], lanes[g, s.PEAK + k])
            turn = fma(-t, lanes[g, s.TURN + s.GROWTH + k], lanes[g, s.TURN + k])
            level = fma(-t, lanes[g, s.LEVEL + s.GROWTH + k], lanes[g, s.LEVEL + k])
            x = signal[c, n]
            u = x - x2
            w = fma(real, w1, fma(imag, v1, peak * u))
            v1 = fma(real, v1, fma(-imag, w1, turn * u))
            x2, x1, w1 = x1, x, w
            signal[c, n] = fma(-level, w, x)
    ringing[g, c, k], ringing[g, c, LANES + k] = w1, v1
    history[g, c, k], history[g, c, LANES + k] = x1, x2


@inner
def advance_two_still(lanes, ringing, history, g, k, m, c, signal, start, stop):
    """Run resting notches k and then m over signal[c, start:stop]: as advance_notch twice, abreast for the processor."""
    peak_k, level_k, c1_k, c2_k = lanes[g, s.PEAK + k], lanes[g, s.LEVEL + k], lanes[g, s.C1 + k], lanes[g, s.C2 + k]
    peak_m, level_m, c1_m, c2_m = lanes[g, s.PEAK + m], lanes[g, s.LEVEL + m], lanes[g, s.C1 + m], lanes[g, s.C2 + m]
    wk1, wk2 = ringing[g, c, k], ringing[g, c, LANES + k]
    wm1, wm2 = ringing[g, c, m], ringing[g, c, LANES + m]
    xk1, xk2 = history[g, c, k], history[g, c, LANES + k]
    xm1, xm2 = history[g, c, m], history[g, c, LANES + m]
    for n in range(start, stop):
        x = signal[c, n]
        w = fma(c1_k, wk1, fma(peak_k, x - xk2, -c2_k * wk2))
        xk2, xk1, wk2, wk1 = xk1, x, wk1, w
        x = fma(-level_k, w, x)
        w = fma(c1_m, wm1, fma(peak_m, x - xm2, -c2_m * wm2))
        xm2, xm1, wm2, wm1 = xm1, x, wm1, w
        signal[c, n] = fma(-level_m, w, x)
    ringing[g, c, k], ringing[g, c, LANES + k] = wk1, wk2
    ringing[g, c, m], ringing[g, c, LANES + m] = wm1, wm2
    history[g, c, k], history[g, c, LANES + k] = xk1, xk2
    history[g, c, m], history[g, c, LANES + m] = xm1, xm2


@inner
def _row(n):
    # where frame n's lane sums begin; the mask tells the compiler that it is never negative, so it vectorises
    return (n & (CHUNK - 1)) * LANES


@inner
def advance_bank_still(lanes, ringing, g, c, feed, sums, start, stop):
    """Add a resting group's resonators, fed by feed[c, n] = x[n] - x[n-2], to sums[c, n, lane]."""
    n = start
    while n + 4 <= stop:
        row = _row(n)
        u0, u1, u2, u3 = feed[c, n], feed[c, n + 1], feed[c, n + 2], feed[c, n + 3]
        for k in range(LANES):
            peak, level = lanes[g, s.PEAK + k], lanes[g, s.LEVEL + k]
            c1, c2 = lanes[g, s.C1 + k], lanes[g, s.C2 + k]
            w1, w2 = ringing[g, c, k], ringing[g, c, LANES + k]
            w2 = fma(c1, w1, fma(peak, u0, -c2 * w2))
            w1 = fma(c1, w2, fma(peak, u1, -c2 * w1))
            sums[c, row + k] = fma(level, w2, sums[c, row + k])
            sums[c, row + 1 * LANES + k] = fma(level, w1, sums[c, row + 1 * LANES + k])
            w2 = fma(c1, w1, fma(peak, u2, -c2 * w2))
            w1 = fma(c1, w2, fma(peak, u3, -c2 * w1))
            sums[c, row + 2 * LANES + k] = fma(level, w2, sums[c, row + 2 * LANES + k])
            sums[c, row + 3 * LANES + k] = fma(level, w1, sums[c, row + 3 * LANES + k])
            ringing[g, c, k], ringing[g, c, LANES + k] = w1, w2
        n += 4
    while n < stop:
        row = _row(n)
        u0 = feed[c, n]
        for k in range(LANES):
            w1 = ringing[g, c, k]
            w = fma(lanes[g, s.C1 + k], w1, fma(lanes[g, s.PEAK + k], u0, -lanes[g, s.C2 + k] * ringing[g, c, LANES + k]))
            sums[c, row + k] = fma(lanes[g, s.LEVEL + k], w, sums[c, row + k])
            ringing[g, c, k], ringing[g, c, LANES + k] = w, w1
        n += 1


@inner
def _moving_frame(lanes, g, k, t, u, w1, q1):
    # one frame of one moving lane: (w, q, level) with t frames of its segment to come
    real = fma(-t, lanes[g, s.REAL + s.GROWTH + k], lanes[g, s.REAL + k])
    imag = fma(-t, lanes[g, s.IMAG + s.GROWTH + k], lanes[g, s.IMAG + k])
    peak = fma(-t, lanes[g, s.PEAK + s.GROWTH + k], lanes[g, s.PEAK + k])
    turn = fma(-t, lanes[g, s.TURN + s.GROWTH + k], lanes[g, s.TURN + k])
    level = fma(-t, lanes[g, s.LEVEL + s.GROWTH + k], lanes[g, s.LEVEL + k])
    return fma(real, w1, fma(imag, q1, peak * u)), fma(real, q1, fma(-imag, w1, turn * u)), level


@inner
def advance_bank_moving(groups, lanes, ringing, g, c, feed, sums, start, stop):
    """As advance_bank_still, for a group on its way."""
    t = float(groups[g].length - groups[g].done - 1)
    n = start
    while n + 4 <= stop:
        row = _row(n)
        u0, u1, u2, u3 = feed[c, n], feed[c, n + 1], feed[c, n + 2], feed[c, n + 3]
        for k in range(LANES):
            w, q = ringing[g, c, k], ringing[g, c, LANES + k]
            w, q, level = _moving_frame(lanes, g, k, t, u0, w, q)
            sums[c, row + k] = fma(level, w, sums[c, row + k])
            w, q, level = _moving_frame(lanes, g, k, t - 1.0, u1, w, q)
            sums[c, row + 1 * LANES + k] = fma(level, w, sums[c, row + 1 * LANES + k])
            w, q, level = _moving_frame(lanes, g, k, t - 2.0, u2, w, q)
            sums[c, row + 2 * LANES + k] = fma(level, w, sums[c, row + 2 * LANES + k])
            w, q, level = _moving_frame(lanes, g, k, t - 3.0, u3, w, q)
            sums[c, row + 3 * LANES + k] = fma(level, w, sums[c, row + 3 * LANES + k])
            ringing[g, c, k], ringing[g, c, LANES + k] = w, q
        n += 4
        t -= 4.0
    while n < stop:
        row = _row(n)
        u0 = feed[c, n]
        for k in range(LANES):
            w, q, level = _moving_frame(lanes, g, k, t, u0, ringing[g, c, k], ringing[g, c, LANES + k])
            sums[c, row + k] = fma(level, w, sums[c, row + k])
            ringing[g, c, k], ringing[g, c, LANES + k] = w, q
        n += 1
        t -= 1.0
