"""What the control side asks for, carried out between two frames: place, tune, set a level, glide, reset."""

from __future__ import annotations

from liveres.kernels import motion
from liveres.kernels import state as s
from liveres.kernels._jit import inner

LANES = s.LANES


@inner
def carry_out(state, channels, groups, lanes, masks, ringing, history, glides, rows, i):
    """Carry out command ``i`` of ``rows``, now: the next frame to be processed is the first it acts on."""
    kind = int(rows[i, s.KIND])
    if kind == s.GLIDE_TO:
        _glide_to(glides, int(rows[i, s.LANE]), rows[i, s.TO_LEVEL], rows[i, s.LEVEL_FRAMES])
        return
    if kind == s.RESET:
        reset(state, channels, ringing, history)
        return
    g, k = int(rows[i, s.LANE]) // LANES, int(rows[i, s.LANE]) % LANES
    if kind == s.PLACE:
        _place(state, groups, lanes, masks, ringing, history, g, k, int(rows[i, s.MASK]))
    if groups[g].moving == 0:
        motion.begin_motion(groups, lanes, ringing, g)
    else:
        motion.break_segment(groups, lanes, g)
    if kind == s.SET_LEVEL:
        _set_level(lanes, ringing, history, g, k, rows[i, s.TO_LEVEL], rows[i, s.LEVEL_FRAMES], state[0].frame)
        groups[g].awake = 1
    else:
        _tune(lanes, g, k, rows, i, state[0].frame)


@inner
def _place(state, groups, lanes, masks, ringing, history, g, k, mask):
    state[0].groups_used = max(state[0].groups_used, g + 1)
    for field in range(s.FIELDS):
        lanes[g, field * LANES + k] = 0.0
    motion.set_pace(lanes, g, k, s.OMEGA, 1.0)
    motion.set_pace(lanes, g, k, s.DECAY, 1.0)
    clear_lane(ringing, history, g, k)
    masks[g, k] = mask
    groups[g].channels |= mask
    if g >= s.NOTCH_GROUPS:
        groups[g].channels = mask


@inner
def clear_lane(ringing, history, g, k):
    """Forget what a lane has heard."""
    for c in range(ringing.shape[1]):
        _clear_one(ringing, history, g, k, c)


@inner
def _clear_one(ringing, history, g, k, c):
    ringing[g, c, k] = ringing[g, c, LANES + k] = 0.0
    if g < s.NOTCH_GROUPS:
        history[g, c, k] = history[g, c, LANES + k] = 0.0


@inner
def _tune(lanes, g, k, rows, i, frame):
    real, imag, peak = rows[i, s.TO_REAL], rows[i, s.TO_IMAG], rows[i, s.TO_PEAK]
    lanes[g, s.REAL_END + k], lanes[g, s.IMAG_END + k], lanes[g, s.PEAK_END + k] = real, imag, peak
    _aim(lanes, g, k, s.OMEGA, s.CENTRE_LANDS, rows[i, s.TO_OMEGA], rows[i, s.CENTRE_FRAMES], frame)
    _aim(lanes, g, k, s.DECAY, s.WIDTH_LANDS, rows[i, s.TO_DECAY], rows[i, s.WIDTH_FRAMES], frame)
    if lanes[g, s.CENTRE_LANDS + k] > frame or lanes[g, s.WIDTH_LANDS + k] > frame:
        real, imag, peak = motion.pole_at(lanes[g, s.OMEGA + k], lanes[g, s.DECAY + k])
    lanes[g, s.REAL + k], lanes[g, s.IMAG + k], lanes[g, s.PEAK + k] = real, imag, peak
    lanes[g, s.TURN + k] = peak * real / imag


@inner
def _aim(lanes, g, k, row, lands, target, frames, frame):
    # frames: length of the ramp; 0 jumps, and a negative number leaves the ramp that is under way
    lanes[g, row + s.TO_END + k] = target
    if frames < 0.0:
        return
    lanes[g, lands + k] = frame + frames
    if frames == 0.0:
        lanes[g, row + k] = target
        motion.set_pace(lanes, g, k, row, 1.0)
    else:
        motion.set_pace(lanes, g, k, row, (target / lanes[g, row + k]) ** (1.0 / frames))


@inner
def _set_level(lanes, ringing, history, g, k, target, frames, frame):
    if lanes[g, s.LEVEL + k] == 0.0 and lanes[g, s.LEVEL_END + k] == 0.0:
        # it may have slept: begin from silence, as if just placed
        clear_lane(ringing, history, g, k)
    lanes[g, s.LEVEL_FROM + k] = lanes[g, s.LEVEL + k]
    lanes[g, s.LEVEL_END + k] = target
    lanes[g, s.LEVEL_LANDS + k] = frame + frames
    lanes[g, s.LEVEL_PACE + k] = 1.0 / max(frames, 1.0)
    if frames == 0.0:
        lanes[g, s.LEVEL + k] = target


@inner
def _glide_to(glides, which, target, frames):
    glides[which, s.END] = target
    glides[which, s.LEFT] = frames
    if frames == 0.0:
        glides[which, s.NOW], glides[which, s.STEP] = target, 0.0
    else:
        glides[which, s.STEP] = (target - glides[which, s.NOW]) / frames


@inner
def reset(state, channels, ringing, history):
    """Clear every delay register; settings, ramps and counters stay."""
    used = state[0].groups_used
    for g in range(used):
        for k in range(LANES):
            clear_lane(ringing, history, g, k)
    for c in range(channels.shape[0]):
        channels[c].x1 = channels[c].x2 = 0.0


@inner
def clear_channel(state, channels, ringing, history, c):
    """Clear one channel's delay registers, after a fault in it."""
    for g in range(state[0].groups_used):
        for k in range(LANES):
            _clear_one(ringing, history, g, k, c)
    channels[c].x1 = channels[c].x2 = 0.0
