"""Kernels as plain Python beside their compiled selves: what the compiler made of them is what they say.

Only those whose own body needs no machine instruction that Python lacks (``fma`` and its like); what they call is
compiled in either case. Both run on copies of the same engine's memory, which must come out the same.
"""

import copy
import math

import numpy as np
import pytest

from liveres.engine.processor import Processor
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.kernels import block, commands, motion, safety
from liveres.kernels import state as s

BANK = s.NOTCH_GROUPS
# group of the first resonators


def memory():
    """The memory of an engine in the middle of several ramps, with sound in it, part of the way through a segment."""
    resonators = Resonator("r", 700.0, -3.0, decay_s=0.3), Resonator("s", 90.0, 0.0, q=2.0)
    one = Processor(Preset([Notch("n", 300.0, -6.0, q=5.0), *resonators]))
    one.process(np.random.default_rng(0).uniform(-0.5, 0.5, (777, 2)))
    one.retune("n", centre_hz=2000.0, depth_db=-30.0, ramp_s=0.01)
    one.retune("r", centre_hz=100.0, gain_db=-20.0, ramp_s=0.003)
    one.retune("s", q=20.0, ramp_s=0.02)
    one.process(np.random.default_rng(1).uniform(-0.5, 0.5, (53, 2)))
    return one.memory


def begin_segment(m, begin):
    for g in (0, BANK):
        motion.break_segment(m.groups, m.lanes, g)
        begin(m.groups, m.lanes, m.ringing, g, 830)


def find_landing(m, find):
    for frame in (830, 921, 3000):
        assert find(m.groups, m.lanes, BANK, frame) == (frame < 1737)


def tune(m, carry_out):
    """Every kind of command, one after the other, the ramps of a group under way and at rest."""
    rows = np.zeros((6, s.COMMAND_FIELDS))
    lane = BANK * s.LANES
    rows[0, :9] = 1, s.TUNE, lane, 0.2, 0.001, 0.97, 0.2, 0.001, 100.0
    rows[1, :9] = 2, s.TUNE, lane + 1, 0.02, 0.001, 0.99, 0.02, 0.001, -1.0
    rows[1, s.WIDTH_FRAMES] = 50.0
    rows[2] = 3, s.PLACE, lane + 2, 0.2, 0.001, 0.97, 0.2, 0.001, 0.0, 0.0, 3.0
    rows[3, :5] = 4, s.SET_LEVEL, lane, 0.25, 10.0
    rows[4, :5] = 5, s.GLIDE_TO, s.BUS_LIMIT, 0.25, 40.0
    rows[5, :2] = 6, s.RESET
    for i in range(len(rows)):
        carry_out(m.state, m.channels, m.groups, m.lanes, m.masks, m.ringing, m.history, m.glides, rows, i)


def glide(m, move):
    m.glides[s.BUS] = 1.0, -0.25, 0.25, 3.0
    assert [move(m.glides, s.BUS) for _ in range(5)] == [0.75, 0.5, 0.25, 0.25, 0.25]


def take_in(m, take):
    sound = np.array([[0.5, math.nan], [math.inf, -17.0], [-0.0, 16.0]])
    for c in (0, 1):
        take(m.state, m.channels, c, sound, 0, m.signal, 3, 0.999)


def gather(m, add_up):
    m.bus[:] = 0.0
    add_up(1, m.sums, m.bus, 37)


RUNS = [
    (motion.begin_motion, lambda m, begin: begin(m.groups, m.lanes, m.ringing, BANK)),
    (motion.end_motion, lambda m, end: end(m.groups, m.lanes, m.ringing, BANK)),
    (motion.begin_segment, begin_segment),
    (motion._find_landing, find_landing),
    (motion._walk, lambda m, walk: walk(m.lanes, BANK, s.OMEGA, 13)),
    (motion.break_segment, lambda m, broken: broken(m.groups, m.lanes, BANK)),
    (commands.carry_out, tune),
    (commands.clear_channel, lambda m, clear: clear(m.state, m.channels, m.ringing, m.history, 1)),
    (safety.glide, glide),
    (safety.take_in, take_in),
    (safety.mix_bus, lambda m, mix: mix(m.state, m.channels, 0, m.bus, m.signal, m.slow, 40)),
    (block._make_feed, lambda m, make: make(m.channels, 1, m.signal, m.feed, 37)),
    (block._gather, gather),
]


@pytest.mark.parametrize("kernel, run", RUNS, ids=[kernel.py_func.__name__ for kernel, _ in RUNS])
def test_a_kernel_does_compiled_what_its_text_says(kernel, run):
    """A compiler's mistake, or a type it guessed wrong, shows as a difference; powers may differ in their last digit."""
    compiled = memory()
    plain = copy.deepcopy(compiled)
    before = copy.deepcopy(compiled)
    for name in ("state", "channels", "groups"):
        # as records whose fields Python can name, like the compiled code does
        setattr(plain, name, getattr(plain, name).view(np.recarray))
    run(compiled, kernel)
    run(plain, kernel.py_func)
    changed = False
    for name, array in vars(compiled).items():
        fields = array.dtype.names or (...,)
        for field in fields:
            found, expected, old = (np.asarray(getattr(m, name)[field]) for m in (compiled, plain, before))
            np.testing.assert_allclose(found, expected, rtol=1e-14, atol=1e-300, err_msg=f"{name} {field}")
            changed |= not np.array_equal(found, old)
    assert changed
