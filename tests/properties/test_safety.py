"""No input and no sequence of moves makes any output sample pass the ceiling, or be NaN or infinite."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings, target
from hypothesis import strategies as st
from tools import meters

from liveres import Notch, Preset, Processor, Resonator

RATE_HZ = 48_000
CEILING = 10 ** (-1 / 20)


def assert_safe(y: np.ndarray, ceiling: float = CEILING) -> None:
    assert np.isfinite(y).all()
    assert np.abs(y).max(initial=0.0) <= ceiling


def square(frames: int, frequency_hz: float = 1000.0) -> np.ndarray:
    return np.sign(np.sin(2 * np.pi * frequency_hz * np.arange(frames) / RATE_HZ + 0.1))[:, None]


_samples = st.one_of(
    st.floats(-1, 1, width=32),
    st.sampled_from([np.nan, np.inf, -np.inf, 1e30, -1e30, 16.0, 17.0, 1e-310, -0.0]),
    st.floats(allow_nan=True, allow_infinity=True, width=32),
)


@settings(max_examples=150)
@given(
    samples=st.lists(_samples, min_size=1, max_size=24),
    steps=st.lists(
        st.tuples(
            st.sampled_from(["a", "b"]),
            st.floats(10, 23_520),
            st.floats(0.001, 60),
            st.floats(-120, 24),
            st.sampled_from([0.0, 0.0001, 0.003, 0.05]),
        ),
        max_size=25,
    ),
    input_db=st.floats(-20, 24),
    lookahead_s=st.sampled_from([0.0, 0.002]),
    normalise=st.sampled_from(["peak", "strike"]),
)
def test_a_search_for_a_sample_past_the_ceiling_finds_none(samples, steps, input_db, lookahead_s, normalise):
    """Steered towards the largest ringing it can find, with illegal wishes refused on the way."""
    filters = [
        Resonator("a", 1000, 24, decay_s=60.0, normalise=normalise),
        Resonator("b", 50, 24, decay_s=1.0, normalise=normalise),
        Notch("n", 1000, float("-inf"), decay_s=5.0),
    ]
    p = Processor(Preset(filters, input_db=input_db, lookahead_s=lookahead_s), channels=1)
    x = np.resize(np.array(samples), 400)[:, None]
    for name, centre_hz, decay_s, gain_db, ramp_s in steps or [("a", 1000.0, 1.0, 0.0, 0.0)]:
        try:
            p.retune(name, centre_hz=centre_hz, decay_s=decay_s, gain_db=gain_db, ramp_s=ramp_s)
            p.retune("n", centre_hz=centre_hz, ramp_s=ramp_s)
        except ValueError as refusal:
            assert "must" in str(refusal)
        assert_safe(p.process(x))
    ringing = np.abs(p.memory.ringing).max()
    assert np.isfinite(ringing)
    target(float(np.log10(ringing + 1e-12)))


def test_a_centre_thrown_about_at_kilohertz_rates_stays_bounded():
    """Design figures: plain direct form runs to infinity here; carried, a full-scale square stays below 0.3."""
    p = Processor(Preset([Resonator("r", 1000, 0, decay_s=20.0)], dry_db=float("-inf")), channels=1)
    x, largest = square(RATE_HZ // 2), 0.0
    for n in range(len(x)):
        p.retune("r", centre_hz=1000 + 900 * np.sin(2 * np.pi * 2000 * n / RATE_HZ), ramp_s=0)
        largest = max(largest, abs(p.process(x[n : n + 1])[0, 0]))
    assert 0.01 < largest < 0.3


def test_a_random_centre_at_every_frame_stays_bounded():
    """Design figure: below 0.14."""
    rng = np.random.default_rng(1)
    p = Processor(Preset([Resonator("r", 1000, 0, decay_s=20.0)], dry_db=float("-inf")), channels=1)
    x, largest = square(RATE_HZ // 2), 0.0
    for n in range(len(x)):
        p.retune("r", centre_hz=float(rng.uniform(20, 20_000)), ramp_s=0)
        largest = max(largest, abs(p.process(x[n : n + 1])[0, 0]))
    assert 0.0 < largest < 0.14


@pytest.mark.parametrize("poison", [np.nan, np.inf, -np.inf, 1e30, -1e30])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_poisoned_input_is_counted_and_leaves_nothing_behind(poison, dtype):
    """One bad sample from a driver must not end a show."""
    p = Processor(Preset([Resonator("r", 440, 0, decay_s=0.05), Notch("n", 1000, -20, q=10)]), channels=2)
    x = np.zeros((4800, 2), dtype)
    x[100, 0] = poison
    y = p.process(x)
    assert_safe(y)
    assert p.meters()["traps"] == {"input": 1, "state": 0}
    assert not y[:, 1].any()
    assert np.abs(p.process(np.zeros((RATE_HZ, 2), dtype))[-100:]).max() < 1e-9


def test_a_poisoned_state_is_muted_cleared_counted_and_reported():
    """Layer six: whatever corrupted it, the channel is back within 20 ms, and the others never noticed."""
    x = 0.1 * np.random.default_rng(0).standard_normal((9600, 2))
    filters = [Notch("n", 1000, -20, q=10), Resonator("r", 440, -10, decay_s=1.0)]
    p, untouched = Processor(Preset(filters)), Processor(Preset(filters))
    p.process(x[:4800])
    untouched.process(x[:4800])
    p.memory.ringing[:, 0] = np.nan
    y, reference = p.process(x[4800:]), untouched.process(x[4800:])
    assert_safe(y)
    assert not y[:480, 0].any()
    assert np.abs(y[1000:, 0]).max() > 0.1
    assert y[:, 1].tobytes() == reference[:, 1].tobytes()
    assert p.meters()["traps"]["state"] == 1
    assert [(event["kind"], event["frame"], event["channel"]) for event in p.events()] == [("trap", 4800, 0)]


@pytest.mark.parametrize("lookahead_s", [0.0, 0.0005, 0.002, 0.02])
@pytest.mark.parametrize("signal", ["noise", "step", "impulses", "square", "sine"])
def test_the_limiter_never_lets_a_sample_pass(signal, lookahead_s):
    """A zero-latency limiter by instant attack, a look-ahead one by its minimum: neither may overshoot."""
    n = np.arange(RATE_HZ)
    x = {
        "noise": np.random.default_rng(0).standard_normal(RATE_HZ),
        "step": np.where(n > 1000, 8.0, 0.0),
        "impulses": np.where(n % 997 == 0, 12.0, 0.0),
        "square": 4 * square(RATE_HZ)[:, 0],
        "sine": 8 * np.sin(2 * np.pi * 997 * n / RATE_HZ),
    }[signal][:, None]
    for dtype in (np.float32, np.float64):
        p = Processor(Preset(lookahead_s=lookahead_s, guard=False), channels=1)
        assert_safe(p.process(x.astype(dtype)))
        assert p.meters()["limiter_most_db"] < -6


@pytest.mark.parametrize("frequency_hz", [997.0, 6000.0, 11_000.0, 12_000.0, 17_777.0])
def test_look_ahead_holds_the_true_peak_within_a_tenth_of_a_decibel(frequency_hz):
    """ITU-R BS.1770-5 annex 2, measured by the meter's own interpolator."""
    t = np.arange(RATE_HZ) / RATE_HZ
    swell = np.minimum(t * 8, 1.0) * (1 + 0.9 * np.sin(2 * np.pi * 3 * t))
    x = 4 * swell * np.sin(2 * np.pi * frequency_hz * t + np.pi / 4)
    y = Processor(Preset(lookahead_s=0.004, guard=False), channels=1).process(x[:, None])
    assert meters.true_peak_db(y) <= -1.0 + 0.1


def test_look_ahead_delays_by_what_it_reports_and_changes_nothing_under_the_ceiling():
    """Latency is stated so that it can be allowed for; a gain of one is exactly one, also after it has worked."""
    rng = np.random.default_rng(3)
    p = Processor(Preset(lookahead_s=0.003, guard=False), channels=1)
    assert p.latency_frames == 144
    loud = p.process(5 * rng.standard_normal((4800, 1)))
    assert_safe(loud)
    p.process(np.zeros((RATE_HZ, 1)))
    x = rng.uniform(-0.5, 0.5, (4800, 1))
    y = p.process(np.concatenate([x, np.zeros((144, 1))]))
    assert y[144:].tobytes() == x.tobytes()


def test_a_howl_near_the_ceiling_is_stepped_down_within_half_a_second_and_returns_slowly():
    """Layer five, for drivers and ears: 12 dB down in 0.5 s, and back by no more than 3 dB a second."""
    t = np.arange(4 * RATE_HZ) / RATE_HZ
    howl = np.sin(2 * np.pi * 1234 * t)[:, None]
    p = Processor(Preset(), channels=1)
    y = p.process(howl)
    down = y[RATE_HZ // 2 : RATE_HZ, 0]
    assert 20 * np.log10(np.abs(down).max() / CEILING) <= -11.99
    assert np.abs(y[-RATE_HZ // 2 :]).max() / CEILING == pytest.approx(10 ** (-12 / 20), rel=0.01)
    events = [event for event in p.events() if event["kind"] == "guard"]
    assert len(events) == 1 and events[0]["frame"] < 0.4 * RATE_HZ
    quiet = p.process(0.1 * howl)[:, 0]
    envelope = np.abs(quiet).reshape(-1, RATE_HZ // 4).max(axis=1)
    steps_db = np.diff(20 * np.log10(envelope))
    assert steps_db.max() <= 0.75 + 0.01
    assert envelope[-1] > 2 * envelope[0]


@pytest.mark.parametrize("frequency_hz", [45.0, 120.0, 900.0, 4000.0, 15_000.0])
@pytest.mark.parametrize("phase", [0.0, 0.7, 2.1])
def test_the_guard_acts_on_a_tone_at_any_frequency_and_phase(frequency_hz, phase):
    """A howl can be anywhere, and begins anywhere in a window."""
    begin = int(phase * 1000)
    x = np.zeros((RATE_HZ, 1))
    t = np.arange(RATE_HZ - begin) / RATE_HZ
    x[begin:, 0] = 3 * np.sin(2 * np.pi * frequency_hz * t + phase)
    y = Processor(Preset(), channels=1).process(x)
    assert np.abs(y[begin + RATE_HZ // 2 :]).max() <= CEILING * 10 ** (-11.9 / 20)


def test_the_guard_leaves_speech_noise_and_plucked_notes_alone():
    """Stepping a show down by mistake would be worse than the howl."""
    import soundfile

    speech, rate_hz = soundfile.read("liveres/data/speech.flac", always_2d=True)
    speech *= 0.99 / np.abs(speech).max()
    rng = np.random.default_rng(0)
    t = np.arange(3 * RATE_HZ) / RATE_HZ
    plucks = sum(np.exp(-3 * (t % 0.5)) * np.sin(2 * np.pi * 220 * k * t) / k for k in range(1, 12))
    for sound in (4 * speech, 2 * rng.standard_normal((RATE_HZ * 2, 1)), 3 * plucks[:, None]):
        p = Processor(Preset(), rate_hz=rate_hz, channels=1)
        p.process(sound)
        assert p.meters()["guard_most_db"] == 0.0


def test_the_bus_limit_falls_three_decibels_for_each_doubling_of_the_decay():
    """Layer three: a longer ring radiates more energy, so its permitted level is lower; a limit, never a gain."""
    for decay_s, limit_db in ((0.5, -1.0), (1.0, -1.0), (2.0, -4.0), (8.0, -10.0), (60.0, -1.0 - 3 * np.log2(60))):
        p = Processor(Preset([Resonator("r", 1000, 24, decay_s=decay_s)], dry_db=float("-inf"), guard=False), channels=1)
        assert p.bus_limit_db == pytest.approx(limit_db)
        t = np.arange(3 * RATE_HZ) / RATE_HZ
        y = p.process(np.sin(2 * np.pi * 1000 * t)[:, None])
        assert meters.level_db(y).peak_db == pytest.approx(limit_db, abs=0.001)
    p = Processor(Preset([Resonator("r", 1000, -40, decay_s=8.0)], dry_db=float("-inf")), channels=1)
    p.process(np.sin(2 * np.pi * 1000 * t)[:, None])
    assert p.meters()["bus_limiter_most_db"] == 0.0


def test_a_long_silent_tail_costs_no_more_than_sound():
    """Denormals are flushed: they would slow older processors a hundredfold and spoil the deadline."""
    p = Processor(Preset([Resonator(f"r{k}", 400 + 50 * k, 0, decay_s=0.01) for k in range(64)], dry_db=0.0), channels=1)
    p.process(np.ones((64, 1)))
    p.process(np.zeros((20 * RATE_HZ, 1)))
    ringing = np.abs(p.memory.ringing[p.memory.ringing != 0])
    assert ringing.max(initial=0.0) < 1e-300
    assert ringing.min(initial=1.0) >= np.finfo(float).tiny
    assert not p.process(np.zeros((64, 1), np.float32)).any()


def test_mute_is_silent_in_five_milliseconds_and_unmute_fades_in_over_a_second():
    """Layer seven: the mute key is at once, and sound comes back slowly enough to reach for it again."""
    x = np.full((RATE_HZ * 2, 1), 0.5)
    p = Processor(Preset(guard=False), channels=1)
    p.mute()
    y = p.process(x)[:, 0]
    assert y[0] > 0.49 and not y[240:].any() and (np.diff(y[:240]) < 0).all()
    p.unmute()
    y = p.process(x)[:, 0]
    assert (np.diff(y[:RATE_HZ]) > 0).all()
    assert y[RATE_HZ - 1] == 0.5 and (y[RATE_HZ:] == 0.5).all()


def test_the_look_aheads_queue_never_outgrows_its_ring():
    """A slowly falling signal needs a rising gain at every frame: the longest queue there can be."""
    p = Processor(Preset(ceiling_db=-20, lookahead_s=0.005, guard=False), channels=1)
    y = p.process(8 * np.exp(-np.arange(4 * RATE_HZ) / (1.7 * RATE_HZ))[:, None])
    assert_safe(y, 0.1)
    queued = p.memory.channels["look_tail"] - p.memory.channels["look_head"]
    assert queued.max() <= p.latency_frames + 1
