"""The engine without a device: what it takes, what it gives back, and filters that come, move and go."""

import math

import numpy as np
import pytest
from scipy.signal import sosfilt

from liveres import limits
from liveres.engine.processor import Processor
from liveres.engine.settings import WIDTHS, Notch, Preset, Resonator
from liveres.errors import ParameterError

RATES = [8_000, 11_025, 16_000, 22_050, 32_000, 44_100, 48_000, 88_200, 96_000, 176_400, 192_000]


def refusal(call, *arguments, **fields):
    """The message with which a call is refused."""
    with pytest.raises(ParameterError) as caught:
        call(*arguments, **fields)
    return str(caught.value)


def noise(frames, channels=2, level=0.1, seed=0):
    """Even noise, (frames, channels) float64."""
    return np.random.default_rng(seed).uniform(-level, level, (frames, channels))


def bits(y):
    """The samples as the bits they are made of, so that -0.0 is not 0.0."""
    return np.ascontiguousarray(y).view(np.int32 if y.dtype == np.float32 else np.int64)


def hum(name="hum", **fields):
    """A notch to play with."""
    return Notch(**{"name": name, "centre_hz": 50.0, "depth_db": -20.0, "q": 10.0, **fields})


def bell(name="bell", **fields):
    """A resonator to play with."""
    return Resonator(**{"name": name, "centre_hz": 440.0, "gain_db": -6.0, "decay_s": 0.3, **fields})


# --- making one -------------------------------------------------------------------------------

HIGH = "filter 'high': centre_hz must be from 10 to 7840 Hz (0.49 of rate_hz 16000), got 10000: lower it or raise the sample rate"


@pytest.mark.parametrize(
    "arguments, message",
    [
        (("hall.toml",), "preset must be a Preset, got 'hall.toml': load one with load_preset"),
        ((Preset(), 7_000), "rate_hz must be from 8000 to 192000 Hz, got 7000: use a sample rate sound devices and files have"),
        ((Preset(), "48000"), "rate_hz must be a number, got '48000': write it without quotes"),
        ((Preset(), 48_000, 0), "channels must be from 1 to 32, got 0: use fewer channels, or several runs"),
        ((Preset(), 48_000, 33), "channels must be from 1 to 32, got 33: use fewer channels, or several runs"),
        ((Preset(), 48_000, 1.5), "channels must be a whole number, got 1.5: round it"),
        ((Preset([hum("high", centre_hz=10_000)]), 16_000), HIGH),
        (
            (Preset([hum("side", channels=[0, 2])]), 48_000, 2),
            "filter 'side': channels must be below 2 (the engine has 2, counted from 0), got 2: leave channels out or run more",
        ),
    ],
)
def test_an_engine_that_could_not_run_is_refused(arguments, message):
    """Before any sound, and in words that lead to the remedy."""
    assert refusal(Processor, *arguments) == message


@pytest.mark.parametrize("rate_hz", RATES)
@pytest.mark.parametrize("channels", [1, 2, 32])
def test_any_usual_rate_and_number_of_channels_runs(rate_hz, channels):
    """The notch chain is SciPy's sosfilt of the sections the engine reports, at every rate and on every channel."""
    filters = [hum(), hum("low", centre_hz=10.0, q=2.0), hum("null", centre_hz=0.4 * rate_hz, depth_db=-math.inf)]
    one = Processor(Preset(filters, rate_hz=rate_hz), rate_hz, channels)
    x = noise(700, channels)
    y = one.process(x)
    assert y.shape == x.shape
    for channel in range(channels):
        assert np.max(np.abs(y[:, channel] - sosfilt(one.sos(channel), x[:, channel]))) < 1e-12


# --- what goes in and comes out ---------------------------------------------------------------


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("frames", [0, 1, 63, 64, 65, 1000])
def test_the_output_is_a_new_array_of_the_inputs_shape_and_type(dtype, frames):
    """The caller's array stays as it was, whatever is done with the answer."""
    one = Processor(Preset([hum(), bell()]))
    x = noise(frames).astype(dtype)
    kept = x.copy()
    y = one.process(x)
    assert (y.shape, y.dtype) == (x.shape, x.dtype)
    assert y.flags.c_contiguous
    assert not np.shares_memory(x, y)
    y[:] = 7.0
    assert np.array_equal(x, kept)
    assert one.frame == frames


@pytest.mark.parametrize(
    "x, message",
    [
        (np.zeros(10), "x must be an array of shape (frames, 2), got (10,)"),
        (np.zeros((10, 1)), "x must be an array of shape (frames, 2), got (10, 1)"),
        (np.zeros((2, 10)), "x must be an array of shape (frames, 2), got (2, 10)"),
        (np.zeros((10, 2, 1)), "x must be an array of shape (frames, 2), got (10, 2, 1)"),
        ([[0.0, 0.0]], "x must be an array of shape (frames, 2), got list"),
        (None, "x must be an array of shape (frames, 2), got NoneType"),
    ],
    ids=str,
)
def test_an_array_of_the_wrong_shape_is_refused(x, message):
    """Frames down, channels across: anything else would be played as noise."""
    one = Processor(Preset())
    assert refusal(one.process, x) == f"{message}: reshape it or make a Processor with other channels"
    assert one.frame == 0


@pytest.mark.parametrize("dtype", [np.int16, np.int32, np.float16, np.longdouble, np.complex128, bool, object, ">f8"])
def test_an_array_of_another_type_is_refused(dtype):
    """Whole numbers have another full scale; to guess it would be 90 dB wrong."""
    x = np.zeros((4, 2), dtype)
    assert refusal(Processor(Preset()).process, x) == (
        f"x must be float32 or float64 with full scale 1.0, got {x.dtype}: convert it first"
    )


def test_the_arrays_layout_in_memory_does_not_matter():
    """Columns first, every other frame, backwards, read-only: the same samples give the same output."""
    x = noise(500)
    expected = Processor(Preset([bell()])).process(x)
    wide = np.zeros((1000, 4))
    wide[::2, 1:3] = x
    locked = x.copy()
    locked.flags.writeable = False
    for laid in (np.asfortranarray(x), wide[::2, 1:3], x[::-1].copy()[::-1], locked, locked.view(np.ndarray)[:]):
        assert np.array_equal(Processor(Preset([bell()])).process(laid), expected)


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_an_empty_preset_passes_every_sample_to_the_bit(dtype):
    """Minus zero, the smallest normal numbers and all: nothing is done that need not be."""
    tiny = np.finfo(dtype).tiny
    odd = np.array([[-0.0, 0.0], [tiny, -tiny], [0.89, -0.89], [1 / 3, np.nextafter(dtype(0.5), dtype(1))]], dtype)
    for x in (odd, noise(4000, level=0.89).astype(dtype)):
        assert np.array_equal(bits(Processor(Preset()).process(x)), bits(x))


def test_single_precision_denormals_pass_and_double_precision_ones_count_as_nothing():
    """The first are ordinary numbers in the double precision used inside; the second would cost time and mean nothing."""
    small = np.full((8, 2), np.finfo(np.float32).smallest_subnormal)
    assert np.array_equal(bits(Processor(Preset()).process(small)), bits(small))
    assert not np.any(Processor(Preset()).process(np.full((8, 2), 5e-324)))


# --- filters in force -------------------------------------------------------------------------


def test_filters_are_those_in_force_in_order_with_their_origin():
    """What is shown and saved is what sounds."""
    one = Processor(Preset([hum(), bell()]))
    assert one.filters == (hum(), bell())
    one.add(hum("mine"))
    one.add(hum("howl", origin="watch"))
    one.retune("bell", centre_hz=450.0)
    one.remove("hum")
    assert one.filters == (bell(centre_hz=450.0), hum("mine", origin="user"), hum("howl", origin="watch"))


def test_a_filter_works_on_its_channels_and_leaves_the_others_alone_to_the_bit():
    """A monitor's notch must not be heard in the hall."""
    chosen = [hum("a", channels=[1]), hum("b", centre_hz=900.0, channels=[1, 3]), bell("c", channels=[3])]
    one = Processor(Preset([*chosen, bell("off", enabled=False)]), channels=5)
    x = noise(3000, 5)
    y = one.process(x)
    for channel in (0, 2):
        assert np.array_equal(bits(y[:, channel]), bits(x[:, channel]))
    assert np.array_equal(y[:, 4], x[:, 4])
    for channel, own in ((1, chosen[:2]), (3, chosen[1:])):
        alone = Processor(Preset([one.changed(channels=None) for one in own]), channels=1)
        assert np.array_equal(y[:, channel], alone.process(x[:, [channel]])[:, 0])
        assert not np.array_equal(y[:, channel], x[:, channel])


def test_sections_are_those_of_the_enabled_notches_on_the_channel():
    """scipy.signal.sosfilt takes them as they are."""
    one = Processor(Preset([hum(channels=[0]), hum("off", enabled=False), hum("all"), bell()]))
    assert (one.sos(0).shape, one.sos(1).shape, Processor(Preset()).sos().shape) == ((2, 6), (1, 6), (0, 6))
    assert np.array_equal(one.sos(1), one.sos(0)[1:])
    assert refusal(one.sos, 2) == "channel must be from 0 to 1, got 2: channels are counted from 0"


MOVES = [
    (hum(), {"centre_hz": 60.0}),
    (hum(), {"depth_db": -math.inf}),
    (hum(), {"enabled": False}),
    (hum(), {"centre_hz": 70.0, "depth_db": -3.0, "decay_s": 0.5}),
    (bell(), {"centre_hz": 330.0}),
    (bell(), {"gain_db": 12.0}),
    (bell(), {"enabled": False}),
    (bell(normalise="strike", gain_db=-60.0), {"decay_s": 0.05}),
    *[(make, {width: 0.999 if width == "pole_radius" else 2.0}) for make in (hum(), bell()) for width in WIDTHS],
]


@pytest.mark.parametrize("one, changes", MOVES, ids=[f"{one.kind}-{'-'.join(changes)}" for one, changes in MOVES])
@pytest.mark.parametrize("ramp_s", [0.0, 0.004])
def test_every_field_can_be_moved_and_the_engine_then_sounds_like_one_made_so(one, changes, ramp_s):
    """Retuning and starting anew must end in the same filter, whatever kind of width takes the other's place."""
    moved, made = Processor(Preset([one])), Processor(Preset([one.changed(**changes)]))
    moved.process(noise(2000))
    moved.retune(one.name, ramp_s=ramp_s, **changes)
    moved.process(np.zeros((round(ramp_s * 48_000) + 1, 2)))
    assert moved.filters == made.filters
    for engine in (moved, made):
        engine.reset()
    x = noise(2000, seed=1)
    assert np.max(np.abs(moved.process(x) - made.process(x))) < 1e-15


def test_a_retune_of_nothing_changes_nothing():
    """A knob that reports its place must not be heard."""
    still, turned = (Processor(Preset([hum(), bell()])) for _ in range(2))
    x = noise(1000)
    first = still.process(x), turned.process(x)
    turned.retune("hum")
    turned.retune("bell")
    assert np.array_equal(first[0], first[1])
    assert np.array_equal(still.process(x), turned.process(x))
    turned.retune("hum", centre_hz=50.0, depth_db=-20.0, q=10.0)
    turned.retune("bell", centre_hz=440.0, gain_db=-6.0, decay_s=0.3)
    assert np.max(np.abs(still.process(x) - turned.process(x))) < 1e-10


@pytest.mark.parametrize(
    "call, message",
    [
        (lambda p: p.retune("hun"), "name must be that of a filter in force, got 'hun': did you mean hum?"),
        (lambda p: p.remove("xyz"), "name must be that of a filter in force, got 'xyz': use one of hum, bell"),
        (lambda p: Processor(Preset()).remove("hum"), "name must be that of a filter in force, got 'hum': none is known here"),
        (
            lambda p: p.retune("hum", gain_db=3),
            "field must be one a notch can move, got 'gain_db': use one of centre_hz, depth_db, pole_radius, "
            "bandwidth_hz, bandwidth_oct, q, decay_s, enabled",
        ),
        (
            lambda p: p.retune("bell", center_hz=3),
            "field must be one a resonator can move, got 'center_hz': did you mean centre_hz?",
        ),
        (
            lambda p: p.retune("hum", depth_db=1),
            "depth_db must be from -120 to 0 dB or -inf, got 1: a notch only cuts: use 0 or less, -inf for a null",
        ),
        (
            lambda p: p.retune("hum", centre_hz=23_521),
            "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 23521: lower it or raise the sample rate",
        ),
        (
            lambda p: p.retune("hum", q=1, ramp_s=601),
            "ramp_s must be from 0 to 600 s, got 601: 0 jumps at once; use several moves for longer journeys",
        ),
        (
            lambda p: p.add(hum()),
            "name must be unique among filters, got 'hum', which is in use: choose another or remove it first",
        ),
        (lambda p: p.add("hum"), "filter must be a Notch or a Resonator, got 'hum': make one of them"),
        (
            lambda p: p.add(hum("x", channels=[9])),
            "filter 'x': channels must be below 2 (the engine has 2, counted from 0), got 9: leave channels out or run more",
        ),
        (
            lambda p: p.remove("hum", fade_s=math.nan),
            "fade_s must be from 0 to 600 s, got nan: 0 jumps at once; use several moves for longer journeys",
        ),
    ],
)
def test_a_refused_command_says_why_and_changes_nothing(call, message):
    """The show goes on as it was."""
    tried, left = (Processor(Preset([hum(), bell()])) for _ in range(2))
    assert refusal(call, tried) == message
    assert tried.filters == left.filters
    x = noise(1000)
    assert np.array_equal(tried.process(x), left.process(x))


# --- coming and going -------------------------------------------------------------------------


@pytest.mark.parametrize("one", [hum(centre_hz=300.0), bell(centre_hz=300.0)], ids=["notch", "resonator"])
def test_a_filter_added_and_removed_leaves_sound_as_it_was(one):
    """Faded in over 10 ms, out over 10 ms, and then as if it had never been."""
    p = Processor(Preset(), channels=1)
    x = noise(4000, 1)
    p.process(x)
    p.add(one)
    assert np.max(np.abs(p.process(x) - x)) > 0.001
    p.remove(one.name)
    assert np.max(np.abs(p.process(x[:480]) - x[:480])) > 0.0001
    assert np.array_equal(p.process(x), x)


def test_ten_thousand_filters_come_and_go_and_leave_all_the_room_there_was():
    """A long night of howls: no lane, group or event may leak."""
    p = Processor(Preset([hum()]), channels=2)
    x = np.zeros((1, 2))
    sets = [None, [0], [1]]
    for number in range(10_000):
        p.add((hum if number % 2 else bell)("guest", channels=sets[number % 3]), fade_s=0.0)
        p.process(x)
        p.remove("guest", fade_s=0.0)
    assert p.filters == (hum(),)
    assert p.memory.state["groups_used"][0] < 12
    for number in range(limits.NOTCHES_MAX - 1):
        p.add(hum(str(number)), fade_s=0.0)
    assert len(p.filters) == limits.NOTCHES_MAX


def test_resonators_on_ever_other_channels_leave_all_the_room_there_was():
    """A group of lanes serves one set of channels; once empty it must serve any other."""
    p = Processor(Preset(), channels=32)
    x = np.zeros((1, 32))
    for number in range(1, 1500):
        chosen = [channel for channel in range(11) if number >> channel & 1]
        p.add(bell(channels=chosen), fade_s=0.0)
        p.process(x)
        p.remove("bell", fade_s=0.0)
    assert p.filters == ()


def test_a_long_fade_does_not_hold_up_the_lanes_of_short_ones():
    """One filter that takes ten minutes to leave must not use up the room of a hundred others."""
    p = Processor(Preset([hum("slow")]), channels=1)
    p.remove("slow", fade_s=600.0)
    for _ in range(300):
        p.add(hum(), fade_s=0.0)
        p.process(np.zeros((1, 1)))
        p.remove("hum", fade_s=0.0)


@pytest.mark.parametrize("make, most, kind", [(hum, 128, "notch"), (bell, 16_384, "resonator")])
def test_a_full_engine_refuses_one_more_and_takes_it_in_place_of_another(make, most, kind):
    """128 notches and 16,384 resonators; a swap needs no pause, though the old one still fades."""
    p = Processor(Preset([make(str(number)) for number in range(most)]), channels=1)
    x = noise(256, 1)
    assert np.all(np.isfinite(p.process(x)))
    assert refusal(p.add, make("more")) == f"filters must hold at most {most} of kind {kind}, got one more: remove some first"
    assert len(p.filters) == most
    p.remove("7")
    p.add(make("more"))
    assert [one.name for one in p.filters[-2:]] == [str(most - 1), "more"]


def test_sixteen_thousand_resonators_sound_as_one_so_much_louder():
    """Every lane of every group is in the sum: 16,384 alike are 84.288 dB over one."""
    many = Processor(Preset([bell(str(number), gain_db=-100.0) for number in range(16_384)], dry_db=-math.inf), channels=1)
    one = Processor(Preset([bell(gain_db=-100.0 + 20 * math.log10(16_384))], dry_db=-math.inf), channels=1)
    x = noise(300, 1)
    y = one.process(x)
    assert np.max(np.abs(many.process(x) - y)) < 1e-12 * np.max(np.abs(y))


def test_a_crowd_that_still_fades_out_is_named_as_the_reason():
    """32 notches more than the most may be on their way out; then the next has to wait 10 ms."""
    p = Processor(Preset([hum(str(number)) for number in range(128)]), channels=1)
    for number in range(32):
        p.remove(str(number))
        p.add(hum(f"new{number}"))
    p.remove("40")
    assert refusal(p.add, hum("next")) == (
        "filters must fit beside those of kind notch that still fade out, got one more: "
        "remove some and wait until they have faded"
    )
    p.process(np.zeros((481, 1)))
    p.add(hum("next"))
    assert len(p.filters) == 128


# --- reset ------------------------------------------------------------------------------------


def test_reset_stops_what_rings_and_keeps_what_is_set():
    """The same settings on silence: as a fresh engine that was retuned the same way."""
    p = Processor(Preset([hum(), bell(decay_s=5.0)]))
    p.retune("bell", centre_hz=300.0, ramp_s=0.0)
    p.add(hum("late"), fade_s=0.0)
    before = p.filters
    p.process(noise(3000, level=0.5))
    assert np.max(np.abs(p.process(np.zeros((10, 2))))) > 1e-4
    p.reset()
    assert not np.any(p.process(np.zeros((100, 2))))
    assert p.filters == before
    assert p.frame == 3110
    x = noise(500, seed=2)
    assert np.max(np.abs(p.process(x) - Processor(Preset(before)).process(x))) < 1e-15
