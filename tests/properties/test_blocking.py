"""However a signal is cut into blocks, the output is the same to the bit."""

from __future__ import annotations

import itertools

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from liveres import Notch, Preset, Processor, Resonator

FRAMES = 6000
RAMPS_S = (0.0, 0.0003, 0.005, 0.02, 0.07)
PRESET = Preset(
    [
        Notch("n0", 500, -12, bandwidth_oct=0.1),
        Notch("n1", 2000, -40, q=20, channels=[1]),
        Resonator("r0", 440, 0, decay_s=2.0),
        Resonator("r1", 880, 6, q=80, channels=[0]),
        Resonator("r2", 90, 6, bandwidth_hz=3, normalise="strike"),
        Resonator("r3", 5000, 0, decay_s=0.2, enabled=False),
    ]
)


def _noise() -> np.ndarray:
    x = 0.7 * np.random.default_rng(2).standard_normal((FRAMES, 2))
    x[3000] = np.nan
    x[3500] = 1e30
    return x.astype(np.float32)


NOISE = _noise()

_moves = st.one_of(
    st.tuples(st.just("centre_hz"), st.sampled_from(["n0", "n1", "r0", "r1", "r3"]), st.floats(20, 20_000)),
    st.tuples(st.just("decay_s"), st.sampled_from(["r0", "r1", "r2"]), st.floats(0.05, 60)),
    st.tuples(st.just("depth_db"), st.sampled_from(["n0", "n1"]), st.floats(-60, 0)),
    st.tuples(st.just("gain_db"), st.sampled_from(["r0", "r2"]), st.floats(-60, 24)),
    st.tuples(st.just("enabled"), st.sampled_from(["n0", "r0", "r3"]), st.booleans()),
    st.tuples(st.just("add"), st.just("extra"), st.floats(50, 10_000)),
    st.tuples(st.just("remove"), st.just("extra"), st.none()),
)
_schedule = st.lists(st.tuples(st.integers(0, FRAMES), _moves, st.sampled_from(RAMPS_S)), max_size=12)


def run(schedule, cuts, lookahead_s=0.0) -> np.ndarray:
    """Play NOISE through PRESET with moves at exact frames, cut into blocks at ``cuts`` as well."""
    p = Processor(Preset(PRESET.filters, lookahead_s=lookahead_s))
    moves = sorted(schedule, key=lambda move: move[0])
    edges = sorted({0, FRAMES, *cuts, *(move[0] for move in moves)})
    out, waiting = [], list(moves)
    for start, stop in zip(edges, [*edges[1:], FRAMES], strict=True):
        while waiting and waiting[0][0] == start:
            _, (field, name, value), ramp_s = waiting.pop(0)
            _move(p, field, name, value, ramp_s)
        out.append(p.process(NOISE[start:stop]))
    return np.concatenate(out)


def _move(p: Processor, field: str, name: str, value: object, ramp_s: float) -> None:
    present = any(one.name == name for one in p.filters)
    if field == "add" and not present:
        p.add(Resonator(name, value, -6, decay_s=1.0), fade_s=ramp_s)
    elif field == "remove" and present:
        p.remove(name, fade_s=ramp_s)
    elif field not in ("add", "remove"):
        p.retune(name, ramp_s=ramp_s, **{field: value})


@settings(max_examples=60)
@given(_schedule, st.lists(st.integers(0, FRAMES), max_size=60))
def test_the_output_does_not_depend_on_the_blocks(schedule, cuts):
    """A show can only be replayed offline if block sizes leave no mark."""
    assert run(schedule, cuts).tobytes() == run(schedule, []).tobytes()


@settings(max_examples=20)
@given(_schedule, st.lists(st.integers(0, FRAMES), max_size=60))
def test_nor_does_it_with_look_ahead(schedule, cuts):
    """The look-ahead keeps queues and running sums, which must not notice blocks either."""
    assert run(schedule, cuts, lookahead_s=0.003).tobytes() == run(schedule, [], lookahead_s=0.003).tobytes()


def test_one_frame_at_a_time_is_the_same_as_all_at_once():
    """The extreme of small blocks, with every kind of ramp under way."""
    schedule = [
        (100, ("centre_hz", "n0", 900.0), 0.02),
        (333, ("decay_s", "r0", 30.0), 0.07),
        (334, ("centre_hz", "r0", 100.0), 0.005),
        (700, ("enabled", "n0", False), 0.02),
        (701, ("gain_db", "r2", 20.0), 0.0003),
        (2000, ("add", "extra", 777.0), 0.02),
        (2500, ("remove", "extra", None), 0.02),
    ]
    assert run(schedule, range(FRAMES)).tobytes() == run(schedule, []).tobytes()


@given(st.integers(0, 3))
def test_a_state_fault_is_cleared_at_the_same_frame_for_any_blocks(seed):
    """The trap's mute ends at an exact frame, though whole chunks are worked at a time."""
    cuts = np.random.default_rng(seed).integers(0, FRAMES, 40)
    results = []
    for blocks in ([], cuts):
        p = Processor(PRESET)
        out = [p.process(NOISE[:1000])]
        p.memory.ringing[...] = np.nan
        edges = sorted({1000, FRAMES, *(int(cut) for cut in blocks if cut > 1000)})
        out += [p.process(NOISE[a:b]) for a, b in itertools.pairwise(edges)]
        results.append(np.concatenate(out).tobytes())
        assert p.meters()["traps"]["state"] == 2
    assert results[0] == results[1]


def test_a_bank_that_falls_asleep_while_its_limiter_works_leaves_no_trace_of_the_blocks():
    """The bus limiter goes on recovering while nothing rings, wherever a block ends."""
    x = (0.9 * np.sin(2 * np.pi * 440 * np.arange(30_000) / 48_000))[:, None].astype(np.float32)
    moves = {9003: {"enabled": False, "ramp_s": 0.0205}, 9995: {"enabled": True, "ramp_s": 0.02}}
    results = set()
    for block_frames in (1, 64, 1000):
        p = Processor(Preset([Resonator("r", 440, 24, decay_s=0.05)], dry_db=-12, ceiling_db=-20), channels=1)
        out, position = [], 0
        while position < len(x):
            if position in moves:
                p.retune("r", **moves[position])
            stop = min([position + block_frames, len(x), *(frame for frame in moves if frame > position)])
            out.append(p.process(x[position:stop]))
            position = stop
        assert p.meters()["bus_limiter_most_db"] < -10
        results.add(np.concatenate(out).tobytes())
    assert len(results) == 1
