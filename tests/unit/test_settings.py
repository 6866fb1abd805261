"""Notches, resonators and presets: what they accept, what they refuse, and in which words."""

import dataclasses
import math

import pytest

from liveres import limits
from liveres.engine.settings import ORIGINS, WIDTHS, Notch, Preset, Resonator
from liveres.errors import ParameterError


def refusal(make, *arguments, **fields):
    """The message with which something refuses to be made."""
    with pytest.raises(ParameterError) as caught:
        make(*arguments, **fields)
    return str(caught.value)


def notch(name="n", centre_hz=1000.0, depth_db=-6.0, **fields):
    """A legal notch but for the fields given."""
    return Notch(name, centre_hz, depth_db, **(fields if set(fields) & set(WIDTHS) else {"q": 10.0, **fields}))


def resonator(name="r", centre_hz=1000.0, gain_db=-6.0, **fields):
    """A legal resonator but for the fields given."""
    return Resonator(name, centre_hz, gain_db, **(fields if set(fields) & set(WIDTHS) else {"decay_s": 0.5, **fields}))


BOTH = pytest.mark.parametrize("make", [notch, resonator])

# --- what both kinds share --------------------------------------------------------------------


def test_a_filter_takes_name_centre_and_level_by_place_and_the_rest_by_name():
    """The order of design: name, centre, level, width."""
    one = Notch("hum", 50, -20, q=10, channels=[1, 0])
    assert (one.name, one.centre_hz, one.depth_db, one.q, one.channels, one.enabled, one.origin) == (
        "hum", 50.0, -20.0, 10.0, (0, 1), True, "preset",
    )  # fmt: skip
    other = Resonator("bell", 440, -3, decay_s=2)
    assert (other.gain_db, other.normalise, other.decay_s, other.channels) == (-3.0, "peak", 2.0, None)
    with pytest.raises(TypeError):
        Notch("hum", 50, -20, 10)


@BOTH
def test_whole_numbers_are_kept_as_floats(make):
    """50 and 50.0 must be the same setting, in memory and in files."""
    one = make(centre_hz=50, q=10)
    assert type(one.centre_hz) is float
    assert type(one.q) is float
    assert one == make(centre_hz=50.0, q=10.0)


@BOTH
def test_a_filter_does_not_change_once_made(make):
    """A legal filter must stay one: changes make a new one, which is checked again."""
    with pytest.raises(dataclasses.FrozenInstanceError):
        make().centre_hz = 2000.0


_RADIUS = "pole_radius must be 0.001 or more and below 1, where a pole rings for ever"
FAULTS = [
    ({"name": ""}, "name must be a word that is not empty, got '': give the filter a name"),
    ({"name": "  "}, "name must be a word that is not empty, got '  ': give the filter a name"),
    ({"name": 3}, "name must be a word that is not empty, got 3: give the filter a name"),
    ({"centre_hz": 9}, "centre_hz must be from 10 to 94080 Hz, got 9: move it into the range"),
    ({"centre_hz": math.nan}, "centre_hz must be from 10 to 94080 Hz, got nan: move it into the range"),
    ({"centre_hz": "440"}, "centre_hz must be a number, got '440': write it without quotes"),
    ({"q": 0.49}, "q must be from 0.5 to 1000000, got 0.49: below 0.5 the poles are not a pair and nothing rings"),
    ({"decay_s": 61}, "decay_s must be from 0.001 to 60 s, got 61: choose a shorter or longer decay"),
    ({"bandwidth_hz": 0}, "bandwidth_hz must be from 0.001 to 96000 Hz, got 0: choose a width in the range"),
    ({"bandwidth_oct": 3}, "bandwidth_oct must be from 0.0005 to 2.5 octaves, got 3: 0.1 is a usual notch"),
    ({"pole_radius": 1.5}, f"{_RADIUS}, got 1.5: lower it or give decay_s"),
    ({"pole_radius": 0}, f"{_RADIUS}, got 0: raise it"),
    ({"pole_radius": 1}, f"{_RADIUS}, got 1: lower it or give decay_s"),
    ({"pole_radius": math.nan}, f"{_RADIUS}, got nan: lower it or give decay_s"),
    ({"pole_radius": True}, "pole_radius must be a number, got true: write a number"),
    ({"enabled": 1}, "enabled must be true or false, got 1: write true or false"),
    ({"origin": "me"}, "origin must be one of preset, user, watch, got 'me': use one of preset, user, watch"),
    ({"origin": "users"}, "origin must be one of preset, user, watch, got 'users': did you mean user?"),
    ({"channels": 1}, "channels must be a list of channel numbers counted from 0, got 1: write it like [0, 1]"),
    ({"channels": "01"}, "channels must be a list of channel numbers counted from 0, got '01': write it like [0, 1]"),
    ({"channels": []}, "channels must name each channel once and at least one, got []: leave it out for all channels"),
    ({"channels": [1, 1]}, "channels must name each channel once and at least one, got [1, 1]: leave it out for all channels"),
    ({"channels": [32]}, "channels must be from 0 to 31, got 32: channels are counted from 0"),
    ({"channels": [-1]}, "channels must be from 0 to 31, got -1: channels are counted from 0"),
    ({"channels": [0.5]}, "channels must be a whole number, got 0.5: round it"),
    ({"channels": [True]}, "channels must be a number, got true: write a number"),
]


@BOTH
@pytest.mark.parametrize("fields, message", FAULTS)
def test_a_filter_with_a_wrong_field_cannot_be_made(make, fields, message):
    """A filter that exists is a legal one: nothing downstream need check it again."""
    assert refusal(make, **fields) == message


_CUTS = "a notch only cuts: use 0 or less, -inf for a null"
LEVEL_FAULTS = [
    (notch, {"depth_db": 0.5}, f"depth_db must be from -120 to 0 dB or -inf, got 0.5: {_CUTS}"),
    (notch, {"depth_db": -121}, f"depth_db must be from -120 to 0 dB or -inf, got -121: {_CUTS}"),
    (resonator, {"gain_db": 25}, "gain_db must be from -120 to 24 dB, got 25: choose a gain in the range"),
    (resonator, {"gain_db": -math.inf}, "gain_db must be from -120 to 24 dB, got -inf: choose a gain in the range"),
    (resonator, {"normalise": "rms"}, "normalise must be one of peak, strike, got 'rms': use one of peak, strike"),
    (resonator, {"normalise": "peaks"}, "normalise must be one of peak, strike, got 'peaks': did you mean peak?"),
]


@pytest.mark.parametrize("make, fields, message", LEVEL_FAULTS)
def test_a_level_outside_its_range_is_refused(make, fields, message):
    """A notch never raises the level, and no resonator by more than 24 dB."""
    assert refusal(make, **fields) == message


@pytest.mark.parametrize("channels, kept", [(None, None), ([3], (3,)), ((2, 0), (0, 2)), (range(3), (0, 1, 2)), ({1.0}, (1,))])
def test_channels_are_kept_in_order_as_whole_numbers(channels, kept):
    """[1, 0] and [0, 1] are the same choice."""
    assert notch(channels=channels).channels == kept


@pytest.mark.parametrize("origin", ORIGINS)
def test_a_filter_remembers_who_put_it_there(origin):
    """The howl watch may let go of its own notches only."""
    assert notch(origin=origin).origin == origin


# --- exactly one width ------------------------------------------------------------------------

VALUES = {"pole_radius": 0.999, "bandwidth_hz": 20.0, "bandwidth_oct": 0.1, "q": 30.0, "decay_s": 0.2}


@BOTH
@pytest.mark.parametrize("width", WIDTHS)
def test_each_width_alone_is_enough(make, width):
    """Users think in Q, in hertz, in octaves, in seconds or in poles."""
    one = make(**{width: VALUES[width]})
    assert one.width == (width, VALUES[width])
    assert [getattr(one, other) for other in WIDTHS if other != width] == [None] * 4


@BOTH
@pytest.mark.parametrize("first, second", [(a, b) for i, a in enumerate(WIDTHS) for b in WIDTHS[i + 1 :]])
def test_two_widths_contradict_each_other(make, first, second):
    """There is no saying which of two is meant."""
    assert refusal(make, **{first: VALUES[first], second: VALUES[second]}) == (
        "width must be given exactly once, as one of pole_radius, bandwidth_hz, bandwidth_oct, q, decay_s, "
        f"got {first} and {second}: keep one"
    )


@pytest.mark.parametrize("kind", [Notch, Resonator])
def test_a_filter_without_width_is_refused(kind):
    """There is no width that suits everybody."""
    message = f"width must be given exactly once, as one of {', '.join(WIDTHS)}, got none: add one"
    assert refusal(kind, "n", 1000.0, -6.0) == message
    assert refusal(kind, "n", 1000.0, -6.0, q=None) == message


@BOTH
def test_changed_swaps_a_width_for_another_and_keeps_the_rest(make):
    """Retuning by decay what was made by Q must not end in two widths."""
    one = make(name="k", channels=[1], origin="user", q=5.0)
    other = one.changed(decay_s=0.1)
    assert other.width == ("decay_s", 0.1)
    assert dataclasses.replace(other, decay_s=None, q=5.0) == one
    assert one.width == ("q", 5.0)


@BOTH
def test_changed_without_a_width_keeps_it_and_checks_the_new_value(make):
    """A change is held to the same rules as the making."""
    one = make(q=5.0)
    assert one.changed(centre_hz=2000.0).width == ("q", 5.0)
    assert refusal(one.changed, centre_hz=5.0) == "centre_hz must be from 10 to 94080 Hz, got 5: move it into the range"
    assert "got q and decay_s: keep one" in refusal(one.changed, q=5.0, decay_s=1.0)
    assert "got none: add one" in refusal(one.changed, q=None)


# --- what depends on the rate -----------------------------------------------------------------


@BOTH
def test_a_section_needs_a_centre_below_its_share_of_the_rate(make):
    """30 kHz exists at 96 kHz and not at 48."""
    one = make(centre_hz=30_000.0)
    one.section(96_000)
    assert refusal(one.section, 48_000) == (
        "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 30000: lower it or raise the sample rate"
    )


@pytest.mark.parametrize(
    "kind, value, width_hz", [("bandwidth_hz", 12e3, "12000"), ("q", 0.75, "12000"), ("bandwidth_oct", 2, "13500")]
)
def test_a_width_of_a_quarter_of_the_rate_is_refused_in_the_users_own_terms(kind, value, width_hz):
    """There the pole radius is zero and nothing rings."""
    assert refusal(notch(centre_hz=9000.0, **{kind: value}).section, 48_000) == (
        f"{kind} must give a width below 12000 Hz (a quarter of rate_hz 48000), got {width_hz} Hz: narrow it"
    )


def test_a_disabled_filter_has_no_level_and_a_null_takes_all():
    """Switched off means not there; -inf means nothing left."""
    assert notch(depth_db=-math.inf).level(48_000) == 1.0
    assert notch(depth_db=0).level(48_000) == 0.0
    assert notch(depth_db=-6.020599913279624).level(48_000) == pytest.approx(0.5, rel=1e-15)
    assert notch(enabled=False).level(48_000) == resonator(enabled=False).level(48_000) == 0.0
    assert resonator(gain_db=-20).level(48_000) == 0.1


# --- presets ----------------------------------------------------------------------------------


def test_a_preset_of_nothing_passes_sound_as_it_is():
    """The defaults change nothing below -1 dBFS."""
    one = Preset()
    assert (one.filters, one.input_db, one.dry_db, one.ceiling_db, one.lookahead_s) == ((), 0.0, 0.0, -1.0, 0.0)
    assert (one.guard, one.trim, one.rate_hz, one.watch, one.title, one.notes) == (True, False, 48_000, None, "", "")


_LIST = f"filters must be a list of filters, got {notch()!r}: write it like [Notch(...)]"
PRESET_FAULTS = [
    ({"input_db": 25}, "input_db must be from -120 to 24 dB, got 25: choose a gain in the range"),
    ({"input_db": -math.inf}, "input_db must be from -120 to 24 dB, got -inf: choose a gain in the range"),
    ({"dry_db": 30}, "dry_db must be from -120 to 24 dB or -inf, got 30: use -inf to leave the dry sound out"),
    ({"ceiling_db": 0.1}, "ceiling_db must be from -60 to 0 dBFS, got 0.1: 0 dBFS is full scale and nothing fits above it"),
    ({"lookahead_s": 1}, "lookahead_s must be from 0 to 0.02 s, got 1: 0 is zero latency; 0.002 to 0.005 is usual"),
    ({"rate_hz": 7999}, "rate_hz must be from 8000 to 192000 Hz, got 7999: use a sample rate sound devices and files have"),
    ({"rate_hz": "48000"}, "rate_hz must be a number, got '48000': write it without quotes"),
    ({"guard": 0}, "guard must be true or false, got 0: write true or false"),
    ({"trim": None}, "trim must be true or false, got None: write true or false"),
    ({"title": 5}, "title must be text, got 5: put it in quotes"),
    ({"notes": None}, "notes must be text, got None: put it in quotes"),
    ({"filters": ["hum"]}, "filters must hold Notch and Resonator, got 'hum': wrap it in one of them"),
    ({"filters": notch()}, _LIST),
    ({"filters": None}, "filters must be a list of filters, got None: write it like [Notch(...)]"),
    ({"filters": [notch(), resonator(name="n")]}, "name must be unique among filters, got 'n' twice: rename one"),
]


@pytest.mark.parametrize("fields, message", PRESET_FAULTS, ids=[next(iter(fields)) for fields, _ in PRESET_FAULTS])
def test_a_preset_with_a_wrong_field_cannot_be_made(fields, message):
    """What a session starts from is legal, or there is no session."""
    assert refusal(Preset, **fields) == message


def test_a_preset_names_the_filter_that_its_rate_does_not_permit():
    """Among a hundred filters the user must find the one."""
    assert refusal(Preset, [notch(), resonator(name="high", centre_hz=30_000)]) == (
        "filter 'high': centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 30000: "
        "lower it or raise the sample rate"
    )


@pytest.mark.parametrize(
    "make, most, kind", [(notch, limits.NOTCHES_MAX, "notch"), (resonator, limits.RESONATORS_MAX, "resonator")]
)
def test_a_preset_holds_as_many_filters_as_an_engine_and_not_one_more(make, most, kind):
    """128 notches and 16,384 resonators."""
    filters = [make(name=str(number)) for number in range(most + 1)]
    assert len(Preset(filters[:-1]).filters) == most
    assert refusal(Preset, filters) == f"filters must hold at most {most} of kind {kind}, got {most + 1}: remove some"


# --- presets at another rate ------------------------------------------------------------------


def test_another_rate_keeps_centres_and_decays():
    """A raw pole radius means nothing without its rate: 0.9995 at 48 kHz rings 0.2878 s, and must go on doing so."""
    radius = math.exp(-math.log(1000.0) / (48_000 * 0.25))
    one = Preset([notch(pole_radius=radius, depth_db=-12), resonator(q=20.0), resonator(name="d", decay_s=3.0)], title="t")
    moved = one.at_rate(96_000)
    assert moved.rate_hz == 96_000
    assert moved.filters[0].width == ("pole_radius", pytest.approx(math.exp(-math.log(1000.0) / (96_000 * 0.25)), rel=1e-12))
    assert (moved.filters[0].centre_hz, moved.filters[0].depth_db) == (1000.0, -12.0)
    assert moved.filters[1:] == one.filters[1:]
    assert moved.title == "t"
    assert one.at_rate(48_000) is one


@pytest.mark.parametrize("rate_hz", [8_000, 16_000, 22_050, 32_000, 44_100, 48_000, 96_000, 176_400, 192_000])
def test_the_longest_legal_radius_survives_a_change_of_rate(rate_hz):
    """It rings 60 s, give or take a rounding, and 60 s is legal everywhere."""
    radius = math.exp(-math.log(1000.0) / (rate_hz * 60.0))
    moved = Preset([notch(pole_radius=radius)], rate_hz=rate_hz).at_rate(44_101)
    assert moved.filters[0].pole_radius == pytest.approx(math.exp(-math.log(1000.0) / (44_101 * 60.0)), rel=1e-12)


def test_another_rate_says_which_filter_it_cannot_hold():
    """A top-octave notch made at 96 kHz does not fit into 48."""
    one = Preset([notch(name="top", centre_hz=30_000)], rate_hz=96_000)
    assert refusal(one.at_rate, 48_000) == (
        "filter 'top': centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 30000: "
        "lower it or raise the sample rate"
    )
    assert refusal(one.at_rate, 1) == (
        "rate_hz must be from 8000 to 192000 Hz, got 1: use a sample rate sound devices and files have"
    )


@pytest.mark.parametrize("radius", [0.8, 0.5])
def test_a_radius_shorter_than_any_decay_that_can_be_written_moves_all_the_same(radius):
    """0.8 at 48 kHz rings 0.64 ms, which is under the shortest decay; a file at 44.1 kHz must still play."""
    moved = Preset([notch(name="wide", centre_hz=5000, pole_radius=radius)]).at_rate(44_100)
    (one,) = moved.filters
    assert one.width[0] == "pole_radius"
    assert math.log(one.pole_radius) * 44_100 == pytest.approx(math.log(radius) * 48_000, rel=1e-12)


def test_a_radius_that_another_rate_would_make_too_small_is_refused_with_its_filters_name():
    """0.006 at 48 kHz rings for one frame; at a third of that rate not even for one."""
    message = refusal(Preset([notch(name="wide", centre_hz=12_000, pole_radius=0.006)]).at_rate, 16_000)
    assert message.startswith("filter 'wide': pole_radius must be ") and "got 2.16e-07" in message
