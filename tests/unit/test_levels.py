"""Gains, meters, ceiling, trim, the resonators' permitted level, look-ahead and events of the engine."""

import math

import numpy as np
import pytest

from liveres.engine.processor import Processor
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.errors import ParameterError
from liveres.kernels import state as s
from liveres.theory import response

RATE_HZ = 48_000
SILENT = -math.inf


def sine(frequency_hz, frames, level=1.0, channels=1):
    """A cosine, so that frame 0 is its peak."""
    wave = level * np.cos(2 * np.pi * frequency_hz / RATE_HZ * np.arange(frames))
    return np.repeat(wave[:, None], channels, axis=1)


def noise(frames, channels=2, level=0.1, seed=0):
    """Even noise, (frames, channels) float64."""
    return np.random.default_rng(seed).uniform(-level, level, (frames, channels))


# --- gains ------------------------------------------------------------------------------------


@pytest.mark.parametrize("input_db, dry_db", [(-20.0, 0.0), (0.0, -20.0), (-6.0, -14.0), (20.0, -40.0), (0.0, SILENT)])
def test_input_and_dry_gain_are_what_the_sound_is_multiplied_by(input_db, dry_db):
    """In decibels, one after the other; -inf is exact silence."""
    x = noise(1000)
    y = Processor(Preset(input_db=input_db, dry_db=dry_db)).process(x)
    assert np.max(np.abs(y - x * 10 ** ((input_db + dry_db) / 20))) < 1e-16
    if dry_db == SILENT:
        assert not np.any(y)


def test_the_dry_gain_leaves_the_resonators_alone_and_the_input_gain_does_not():
    """Resonators are fed by the notched input, whatever of it is heard beside them."""
    filters = [Notch("n", 1000.0, -12.0, q=5.0), Resonator("r", 440.0, -6.0, decay_s=0.1)]
    x = noise(4000)
    both, dry, wet, quiet = (
        Processor(Preset(kept, **fields)).process(x)
        for kept, fields in [
            (filters, {"dry_db": -6.0}),
            (filters[:1], {"dry_db": -6.0}),
            (filters, {"dry_db": SILENT}),
            (filters, {"dry_db": SILENT, "input_db": -20.0}),
        ]
    )
    assert np.max(np.abs(both - (dry + wet))) < 1e-15
    assert np.max(np.abs(quiet - 0.1 * wet)) < 1e-15
    assert np.max(np.abs(wet)) > 1e-3


# --- meters -----------------------------------------------------------------------------------


def test_a_fresh_engine_meters_silence_and_gains_of_one():
    """-inf and 0 dB: nothing has been heard and nothing held down."""
    meters = Processor(Preset(), channels=1).meters()
    levels = {name: SILENT for name in meters["channels"][0]}
    gains = dict.fromkeys(
        ["limiter_db", "bus_limiter_db", "guard_db", "limiter_most_db", "bus_limiter_most_db", "guard_most_db"], 0.0
    )
    assert meters == {
        "frames": 0, **levels, **gains, "limited_frames": 0, "traps": {"input": 0, "state": 0}, "bus_limit_db": -1.0,
        "channels": [levels],
    }  # fmt: skip
    assert sorted(levels) == sorted(
        f"{span}{kind}_{way}_db" for span in ("", "recent_") for kind in ("peak", "rms") for way in ("in", "out")
    )


@pytest.mark.parametrize("dtype, close", [(np.float64, 1e-9), (np.float32, 1e-6)])
def test_meters_read_a_sine_exactly(dtype, close):
    """Peak of a sine of 0.5 is -6.0206 dBFS and its rms 3.0103 dB lower; out is in less the gains between."""
    p = Processor(Preset(input_db=-20.0), channels=1)
    p.process(sine(1000.0, 144_000, 0.5).astype(dtype))
    meters = p.meters()
    for span in ("", "recent_"):
        assert meters[f"{span}peak_in_db"] == pytest.approx(-6.020599913, abs=close if not span else 0.02)
        assert meters[f"{span}rms_in_db"] == pytest.approx(-9.030899870, abs=close if not span else 0.02)
        assert meters[f"{span}peak_out_db"] == pytest.approx(-26.020599913, abs=close if not span else 0.02)
        assert meters[f"{span}rms_out_db"] == pytest.approx(-29.030899870, abs=close if not span else 0.02)
    assert meters["frames"] == 144_000


def test_each_channel_is_metered_for_itself_and_the_loudest_stands_for_all():
    """One dead channel among many must show, and one loud one must not hide."""
    x = np.zeros((4800, 3))
    x[:, 0], x[:, 2] = 0.25, -0.5
    p = Processor(Preset(guard=False), channels=3)
    p.process(x)
    meters = p.meters()
    expected = [pytest.approx(-12.0412, abs=1e-4), SILENT, pytest.approx(-6.0206, abs=1e-4)]
    assert [one["peak_in_db"] for one in meters["channels"]] == expected
    assert [one["rms_out_db"] for one in meters["channels"]] == expected
    assert meters["peak_in_db"] == meters["channels"][2]["peak_in_db"]


def test_recent_levels_fall_when_the_sound_stops_and_those_since_the_start_do_not():
    """8.686 dB of peak in each 0.3 s, and half of that of the rms, whose power falls so."""
    p = Processor(Preset(), channels=1)
    p.process(sine(1000.0, 96_000, 0.5))
    before = p.meters()
    p.process(np.zeros((14_400, 1)))
    after = p.meters()
    assert before["recent_peak_in_db"] - after["recent_peak_in_db"] == pytest.approx(8.686, abs=0.02)
    assert before["recent_rms_out_db"] - after["recent_rms_out_db"] == pytest.approx(4.343, abs=0.02)
    assert after["peak_in_db"] == before["peak_in_db"]
    assert after["rms_in_db"] == pytest.approx(before["rms_in_db"] - 10 * math.log10(1.15), abs=1e-9)


def test_input_that_is_no_sound_is_counted_and_made_harmless():
    """NaN and infinity become silence, what is beyond +24 dBFS is held there; 16.0 itself is still sound."""
    x = np.zeros((8, 2))
    x[0], x[1], x[2, 1], x[3, 0] = math.nan, [math.inf, -math.inf], 16.5, -1e300
    x[4] = 16.0, -16.0
    p = Processor(Preset(input_db=-60.0))
    y = p.process(x)
    assert p.meters()["traps"] == {"input": 6, "state": 0}
    assert np.max(np.abs(y[:5] - np.array([[0, 0], [0, 0], [0, 0.016], [-0.016, 0], [0.016, -0.016]]))) < 1e-15
    assert p.meters()["peak_in_db"] == pytest.approx(24.0824, abs=1e-4)


def test_a_state_that_is_no_number_is_counted_reported_and_cleared():
    """A fault planted in one channel mutes that channel for a moment and no other."""
    p = Processor(Preset([Notch("n", 1000.0, -6.0, q=2.0)]))
    x = noise(4800)
    p.process(x)
    p.memory.ringing[0, 1, 0] = math.nan
    y = p.process(x)
    assert np.all(np.isfinite(y))
    assert not np.any(y[:480, 1])
    assert np.max(np.abs(y[1000:, 1])) > 0.05
    assert np.max(np.abs(y[:480, 0])) > 0.05
    assert p.meters()["traps"] == {"input": 0, "state": 1}
    assert p.events() == [
        {
            "frame": 4800, "kind": "trap", "channel": 1, "centre_hz": None, "depth_db": None,
            "why": "a sum that is not finite: the channel's filters cleared under a short mute",
        }
    ]  # fmt: skip


def test_events_are_kept_in_order_and_asking_twice_does_not_lose_them():
    """A tone held near the ceiling, twice: the guard says when."""
    p = Processor(Preset(), channels=1)
    assert p.events() == []
    for _ in range(2):
        p.process(sine(1000.0, 28_800))
        p.process(np.zeros((288_000, 1)))
    events = p.events()
    assert [event["kind"] for event in events] == ["guard", "guard"]
    assert 0 < events[0]["frame"] < 24_000 < 316_800 < events[1]["frame"] < 340_800
    assert events[0]["why"] == "a steady tone near the ceiling: output stepped down 12 dB until it ends"
    assert p.events() == events


# --- ceiling ----------------------------------------------------------------------------------


@pytest.mark.parametrize("ceiling_db", [-60.0, -20.0, -1.0, -0.1, 0.0])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("lookahead_s", [0.0, 0.002])
def test_no_sample_passes_the_ceiling_in_either_precision(ceiling_db, dtype, lookahead_s):
    """Rounding to single precision included, for a converter clips at full scale and not a hair above."""
    p = Processor(Preset(input_db=24.0, ceiling_db=ceiling_db, lookahead_s=lookahead_s))
    y = p.process(noise(9600, level=1.0).astype(dtype))
    ceiling = 10.0 ** (ceiling_db / 20.0)
    assert 0.8 * ceiling < np.max(np.abs(y).astype(np.float64)) <= ceiling
    assert p.meters()["limiter_most_db"] < -20.0
    assert p.meters()["limited_frames"] > 1000


# --- trim -------------------------------------------------------------------------------------

CROWD = [
    Resonator("a", 300.0, 12.0, q=8.0),
    Resonator("b", 330.0, 6.0, q=12.0),
    Resonator("c", 1000.0, 20.0, decay_s=0.02),
    Resonator("d", 1003.0, 3.0, decay_s=0.05),
    Resonator("e", 5000.0, -3.0, bandwidth_oct=0.5),
    Notch("n", 320.0, -9.0, q=3.0),
]


@pytest.mark.parametrize("dry_db, input_db", [(SILENT, 0.0), (SILENT, 12.0), (-12.0, 0.0)])
def test_with_trim_no_full_scale_sine_reaches_the_limiter(dry_db, input_db):
    """Worst frequency, every centre, and between: 32 sines at once, one a channel, let in gently and then held."""
    p = Processor(Preset(CROWD, dry_db=dry_db, input_db=input_db, trim=True, guard=False), RATE_HZ, channels=32)
    worst = response.steady_peak(p.filters, RATE_HZ, part="bus").frequency_hz
    frequencies = np.array([worst, *[one.centre_hz for one in CROWD], *np.geomspace(200.0, 8000.0, 25)])
    t = np.arange(24_000) / RATE_HZ
    fade = np.sin(0.5 * np.pi * np.minimum(t / 0.25, 1.0)) ** 2
    y = p.process(fade[:, None] * np.cos(2 * np.pi * frequencies * t[:, None]))
    assert p.meters()["limiter_most_db"] > -1e-5
    assert p.meters()["bus_limiter_most_db"] > -1e-5
    loudest_db = 20 * np.log10(np.max(np.abs(y[12_000:]), axis=0))
    assert np.max(loudest_db) <= -1.0
    if dry_db == SILENT:
        assert loudest_db[0] == pytest.approx(-1.0, abs=0.01)


def test_without_trim_the_same_sine_is_left_to_the_limiter():
    """trim is a choice: it makes everything quieter for the sake of the loudest."""
    p = Processor(Preset(CROWD, dry_db=SILENT, guard=False), RATE_HZ, channels=1)
    y = p.process(sine(1000.0, 9600))
    assert np.max(np.abs(y)) <= 10 ** (-1 / 20)
    assert p.meters()["bus_limiter_most_db"] < -10.0


def test_trim_follows_filters_that_move_come_and_go():
    """A resonator turned up, added or taken away changes how much all of them must give."""
    p = Processor(Preset([Resonator("r", 1000.0, 0.0, decay_s=0.02)], dry_db=SILENT, trim=True, guard=False), channels=1)

    def level_db():
        p.process(sine(1000.0, 9600))
        return 20 * math.log10(np.max(np.abs(p.process(sine(1000.0, 4800)))))

    assert level_db() == pytest.approx(-1.0, abs=1e-3)
    p.retune("r", gain_db=18.0)
    assert level_db() == pytest.approx(-1.0, abs=1e-3)
    p.add(Resonator("s", 3000.0, 20.0, decay_s=0.02))
    assert level_db() == pytest.approx(-3.0, abs=0.2)
    p.remove("s")
    assert level_db() == pytest.approx(-1.0, abs=1e-3)
    p.retune("r", gain_db=-20.0)
    assert level_db() == pytest.approx(-20.0, abs=1e-3)


def test_trim_needs_room_that_the_dry_sound_leaves():
    """At 0 dB dry sound alone passes a ceiling of -1: no gain of the resonators can mend that."""
    with pytest.raises(ParameterError) as caught:
        Processor(Preset(CROWD, trim=True, input_db=3.0, dry_db=-2.0))
    assert str(caught.value) == (
        "trim must have room under the ceiling: input_db 3 plus dry_db -2 must be below ceiling_db -1, got 1: lower dry_db"
    )


# --- the resonators' permitted level ----------------------------------------------------------


@pytest.mark.parametrize(
    "decay_s, under_db", [(0.01, 0), (0.5, 0), (1, 0), (2, 3), (4, 6), (8, 9), (32, 15), (60, 3 * math.log2(60))]
)
def test_the_permitted_level_falls_three_decibels_with_each_doubling_of_the_longest_decay(decay_s, under_db):
    """What a struck resonator radiates grows with its decay; the limit keeps it constant beyond 1 s."""
    short = Resonator("short", 3000.0, 0.0, decay_s=0.001)
    p = Processor(Preset([short, Resonator("long", 440.0, 0.0, decay_s=decay_s)], ceiling_db=-6.0))
    assert p.bus_limit_db == pytest.approx(-6.0 - under_db, abs=1e-7)
    assert p.meters()["bus_limit_db"] == p.bus_limit_db
    p.retune("long", enabled=False)
    assert p.bus_limit_db == -6.0
    p.retune("long", enabled=True)
    p.remove("long")
    assert p.bus_limit_db == -6.0


def test_the_resonators_are_held_to_their_permitted_level_and_quiet_ones_untouched():
    """A limit and not a gain: 4 s of decay, so 6 dB under the ceiling, met by a loud tone and not by a soft one."""
    preset = Preset([Resonator("r", 1000.0, 24.0, decay_s=4.0)], dry_db=SILENT, guard=False)
    loud, soft = (Processor(preset, channels=1) for _ in range(2))
    y = loud.process(sine(1000.0, 96_000))
    assert 20 * math.log10(np.max(np.abs(y[48_000:]))) == pytest.approx(-7.0, abs=1e-3)
    assert loud.meters()["bus_limiter_most_db"] < -10.0
    assert loud.meters()["limiter_most_db"] == 0.0
    soft.process(sine(1000.0, 96_000, 0.01))
    assert soft.meters()["bus_limiter_most_db"] == 0.0


def test_the_permitted_level_glides_when_a_longer_resonator_comes():
    """Not a step: it is a gain on what is sounding."""
    p = Processor(Preset([Resonator("r", 1000.0, 24.0, decay_s=1.0)], dry_db=SILENT, guard=False), channels=1)
    p.process(sine(1000.0, 96_000))
    p.add(Resonator("long", 90.0, -120.0, decay_s=16.0), fade_s=0.1)
    p.process(sine(1000.0, 2400))
    limit = p.memory.glides[s.BUS_LIMIT]
    assert limit[s.NOW] == pytest.approx(0.5 * (10 ** (-1 / 20) + 10 ** (-13 / 20)), rel=1e-9)
    p.process(sine(1000.0, 2400))
    assert limit[s.NOW] == limit[s.END] == pytest.approx(10 ** (-13 / 20), rel=1e-9)


# --- look-ahead -------------------------------------------------------------------------------


@pytest.mark.parametrize("lookahead_s, frames", [(0.0, 0), (1e-6, 16), (0.0003, 16), (0.001, 48), (0.005, 240), (0.02, 960)])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_look_ahead_delays_by_the_frames_it_reports_and_touches_nothing_under_the_ceiling(lookahead_s, frames, dtype):
    """To the bit, -0.0 included, whatever the length; the shortest that works is 16 frames."""
    p = Processor(Preset(lookahead_s=lookahead_s))
    assert p.latency_frames == frames
    x = noise(3000, level=0.5).astype(dtype)
    x[::7] = -0.0
    y = p.process(x)
    kind = np.int32 if dtype == np.float32 else np.int64
    assert np.array_equal(y[frames:].view(kind), x[: 3000 - frames].view(kind))
    assert not np.any(y[:frames])
    assert p.meters()["limited_frames"] == 0


def test_reset_makes_no_hole_in_what_waits_in_the_look_ahead():
    """It stops what rings; sound on its way out is no ringing."""
    p = Processor(Preset([Resonator("r", 440.0, 0.0, decay_s=9.0, enabled=False)], lookahead_s=0.005))
    x = noise(2000)
    first = p.process(x[:1000])
    p.reset()
    assert np.array_equal(np.concatenate([first, p.process(x[1000:])])[240:], x[:1760])
