"""Every bound: at its ends, just inside, just outside, and what is no number at all."""

import math
from fractions import Fraction

import numpy as np
import pytest

from liveres import limits
from liveres.errors import ParameterError, told

BOUNDS = {name: bound for name, bound in vars(limits).items() if isinstance(bound, limits.Bound)}

TABLE = [
    # bound, low, high, a value outside, the whole message for it
    ("RATE_HZ", 8e3, 192e3, 7e3, "x must be from 8000 to 192000 Hz, got 7000: use a sample rate sound devices and files have"),
    ("CHANNELS", 1, 32, 33, "x must be from 1 to 32, got 33: use fewer channels, or several runs"),
    ("CHANNEL_INDEX", 0, 31, -1, "x must be from 0 to 31, got -1: channels are counted from 0"),
    ("BLOCK_FRAMES", 1, 65_536, 0, "x must be from 1 to 65536 frames, got 0: 64 to 1024 is usual"),
    ("CENTRE_HZ", 10, 94_080, 9.9, "x must be from 10 to 94080 Hz, got 9.9: move it into the range"),
    ("DECAY_S", 0.001, 60, 61, "x must be from 0.001 to 60 s, got 61: choose a shorter or longer decay"),
    ("BANDWIDTH_HZ", 0.001, 96_000, 0, "x must be from 0.001 to 96000 Hz, got 0: choose a width in the range"),
    ("BANDWIDTH_OCT", 0.0005, 2.5, 3, "x must be from 0.0005 to 2.5 octaves, got 3: 0.1 is a usual notch"),
    ("Q", 0.5, 1_000_000, 0.4, "x must be from 0.5 to 1000000, got 0.4: below 0.5 the poles are not a pair and nothing rings"),
    ("GAIN_DB", -120, 24, 24.5, "x must be from -120 to 24 dB, got 24.5: choose a gain in the range"),
    ("DRY_DB", -120, 24, -121, "x must be from -120 to 24 dB or -inf, got -121: use -inf to leave the dry sound out"),
    ("DEPTH_DB", -120, 0, 0.1, "x must be from -120 to 0 dB or -inf, got 0.1: a notch only cuts: use 0 or less, -inf for a null"),
    ("WATCH_NOTCHES", 1, 128, 0, "x must be from 1 to 128, got 0: 8 to 24 is usual"),
    ("WATCH_DEEPEST_DB", -60, -3, 0, "x must be from -60 to -3 dB, got 0: -12 to -24 is usual"),
    ("RAMP_S", 0, 600, -1, "x must be from 0 to 600 s, got -1: 0 jumps at once; use several moves for longer journeys"),
    ("MOVE_FRAME", 0, 2**53, -1, f"x must be from 0 to {2**53:.12g} frames, got -1: choose a frame of the sound, counted from 0"),
    ("TAIL_S", 0, 600, 601, "x must be from 0 to 600 s, got 601: 60 s outlasts everything a preset can ring"),
    ("RUN_S", 0.1, 604_800, 0, "x must be from 0.1 to 604800 s, got 0: leave it out to run until stopped"),
    ("CEILING_DB", -60, 0, 1, "x must be from -60 to 0 dBFS, got 1: 0 dBFS is full scale and nothing fits above it"),
    ("LOOKAHEAD_S", 0, 0.02, 0.03, "x must be from 0 to 0.02 s, got 0.03: 0 is zero latency; 0.002 to 0.005 is usual"),
]
MINUS_INFINITY_PERMITTED = {"DRY_DB", "DEPTH_DB"}


def refusal(check, *arguments):
    """The message with which a check refuses."""
    with pytest.raises(ParameterError) as caught:
        check(*arguments)
    return str(caught.value)


def test_the_table_holds_every_bound():
    """A bound nobody tests is a bound nobody knows."""
    assert {name for name, *_ in TABLE} == set(BOUNDS)


@pytest.mark.parametrize("name, low, high, outside, message", TABLE)
def test_a_bound_permits_its_ends_and_refuses_the_next_number_beyond(name, low, high, outside, message):
    """The range in the documentation is the range that is applied, to the last digit."""
    check = BOUNDS[name].check
    for value in (low, high, math.nextafter(low, math.inf), math.nextafter(high, -math.inf), (low + high) / 2):
        assert check("x", value) == value
        assert type(check("x", value)) is float
    for value in (math.nextafter(low, -math.inf), math.nextafter(high, math.inf)):
        refusal(check, "x", value)
    assert refusal(check, "x", outside) == message


@pytest.mark.parametrize("name", BOUNDS)
def test_no_bound_lets_nan_or_infinity_through(name):
    """NaN compares false with everything, so a check the wrong way round would pass it."""
    check = BOUNDS[name].check
    assert "got nan: " in refusal(check, "x", math.nan)
    assert "got inf: " in refusal(check, "x", math.inf)
    if name in MINUS_INFINITY_PERMITTED:
        assert check("x", -math.inf) == -math.inf
    else:
        assert "got -inf: " in refusal(check, "x", -math.inf)


NO_NUMBERS = [True, np.True_, np.False_, "1", b"1", np.str_("1"), None, [1], (1,), {}, 1j, np.complex128(1), np.array([1.0])]


@pytest.mark.parametrize("value", NO_NUMBERS, ids=repr)
@pytest.mark.parametrize("name", ["RATE_HZ", "DEPTH_DB", "LOOKAHEAD_S"])
def test_what_is_no_number_is_refused_with_the_number_rule(name, value):
    """true is not 1 and "1" is not 1: a preset that says so says something else than it means."""
    remedy = "write it without quotes" if isinstance(value, str) else "write a number"
    assert refusal(BOUNDS[name].check, "x", value) == f"x must be a number, got {told(value)}: {remedy}"


@pytest.mark.parametrize("value", [3, 3.0, np.float32(3), np.float64(3), np.int16(3), Fraction(3)], ids=repr)
def test_numbers_of_every_make_are_numbers(value):
    """Settings come from arithmetic, arrays and files."""
    assert limits.check_number("x", value) == 3.0
    assert type(limits.check_number("x", value)) is float


@pytest.mark.parametrize("value", [10**400, -(10**400)], ids=["above", "below"])
def test_a_whole_number_too_large_for_a_float_is_refused_and_no_crash(value):
    """Python and TOML have whole numbers without end."""
    assert refusal(limits.RATE_HZ.check, "x", value) == (
        "x must be a number that a double can hold, got one of over 308 digits: write fewer"
    )


# --- whole numbers and flags ------------------------------------------------------------------


@pytest.mark.parametrize("value", [1, 32, 2.0, np.int64(7), np.float32(3)])
def test_whole_numbers_come_back_as_int(value):
    """They count channels and size arrays."""
    found = limits.check_whole("channels", value, limits.CHANNELS)
    assert found == value
    assert type(found) is int


@pytest.mark.parametrize(
    "value, message",
    [
        (1.5, "channels must be a whole number, got 1.5: round it"),
        (0, "channels must be from 1 to 32, got 0: use fewer channels, or several runs"),
        (math.nan, "channels must be from 1 to 32, got nan: use fewer channels, or several runs"),
        (math.inf, "channels must be from 1 to 32, got inf: use fewer channels, or several runs"),
        (True, "channels must be a number, got true: write a number"),
        ("2", "channels must be a number, got '2': write it without quotes"),
    ],
)
def test_what_is_no_whole_number_of_channels_is_refused(value, message):
    """Half a channel is a slip, not a request."""
    assert refusal(limits.check_whole, "channels", value, limits.CHANNELS) == message


def test_a_flag_is_true_or_false_and_nothing_that_merely_counts_as_it():
    """guard = 0 or guard = "false" must not switch a safety device by accident."""
    assert limits.check_flag("guard", True) is True
    assert limits.check_flag("guard", False) is False
    for value in (0, 1, 0.0, "true", "", None, [], np.True_):
        message = f"guard must be true or false, got {told(value)}: write true or false"
        assert refusal(limits.check_flag, "guard", value) == message


# --- the centre -------------------------------------------------------------------------------


@pytest.mark.parametrize("rate_hz, top_hz", [(8_000, 3_920), (44_100, 21_609), (48_000, 23_520), (192_000, 94_080)])
def test_a_centre_reaches_from_ten_hertz_to_forty_nine_hundredths_of_the_rate(rate_hz, top_hz):
    """Both ends are permitted and nothing beyond them."""
    for value in (10, math.nextafter(10, math.inf), 1000.0, top_hz):
        assert limits.check_centre("centre_hz", value, rate_hz) == value
    refusal(limits.check_centre, "centre_hz", math.nextafter(10, 0), rate_hz)
    refusal(limits.check_centre, "centre_hz", top_hz * (1 + 1e-15), rate_hz)


@pytest.mark.parametrize(
    "value, message",
    [
        (5, "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 5: raise it"),
        (-440, "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got -440: raise it"),
        (24_000, "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 24000: lower it or raise the sample rate"),
        (math.nan, "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got nan: write a number"),
        (math.inf, "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got inf: lower it or raise the sample rate"),
        (True, "centre_hz must be a number, got true: write a number"),
        ("440", "centre_hz must be a number, got '440': write it without quotes"),
    ],
)
def test_a_centre_outside_is_refused_with_the_way_back(value, message):
    """The bound is worked out for the rate at hand and the remedy points the right way."""
    assert refusal(limits.check_centre, "centre_hz", value, 48_000) == message
