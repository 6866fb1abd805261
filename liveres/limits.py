"""Every bound in liveres, with its unit and its reason, and the checks that apply them.

The one home of limits: messages, documentation and tests read them from here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from numbers import Real

from liveres.errors import ParameterError, told


@dataclass(frozen=True)
class Bound:
    """A closed range [low, high] of one quantity.

    low, high : ends, both permitted
    unit : as written in messages; empty for a plain number
    remedy : what to do about a value outside
    also : values outside the range that are permitted all the same
    """

    low: float
    high: float
    unit: str
    remedy: str
    also: tuple[float, ...] = ()

    def check(self, name: str, value: object) -> float:
        """The value as a float; ParameterError unless it is a number inside the bound.

        Written as "not inside", so that NaN and infinity fail. Booleans are not numbers.
        """
        number = check_number(name, value)
        if number in self.also or self.low <= number <= self.high:
            return number
        extra = "".join(f" or {one:g}" for one in self.also)
        unit = f" {self.unit}" if self.unit else ""
        raise ParameterError(
            f"{name} must be from {self.low:.12g} to {self.high:.12g}{unit}{extra}, "
            f"got {number:.12g}: {self.remedy}"
        )


def check_number(name: str, value: object) -> float:
    """The value as a float; ParameterError for a boolean, a string or any other that is no real number."""
    if isinstance(value, bool) or not isinstance(value, Real):
        remedy = "write it without quotes" if isinstance(value, str) else "write a number"
        raise ParameterError(f"{name} must be a number, got {told(value)}: {remedy}")
    try:
        return float(value)
    except OverflowError:
        raise ParameterError(f"{name} must be a number that a double can hold, got one of over 308 digits: write fewer") from None


def check_whole(name: str, value: object, bound: Bound) -> int:
    """The value as an int inside ``bound``; ParameterError for a fraction or a non-number."""
    number = bound.check(name, value)
    if number != int(number):
        raise ParameterError(f"{name} must be a whole number, got {number:.12g}: round it")
    return int(number)


def check_flag(name: str, value: object) -> bool:
    """The value if it is true or false; ParameterError otherwise."""
    if not isinstance(value, bool):
        raise ParameterError(f"{name} must be true or false, got {told(value)}: write true or false")
    return value


# --- sound ------------------------------------------------------------------------------------

RATE_HZ = Bound(8_000, 192_000, "Hz", "use a sample rate sound devices and files have")
# telephone band to the fastest converters in use

CHANNELS = Bound(1, 32, "", "use fewer channels, or several runs")
# one large stage box; the state block grows with it

CHANNEL_INDEX = Bound(0, CHANNELS.high - 1, "", "channels are counted from 0")

BLOCK_FRAMES = Bound(1, 65_536, "frames", "64 to 1024 is usual")
# above this one block is longer than a second at 48 kHz

CENTRE_HZ = Bound(10, 94_080, "Hz", "move it into the range")
# below 10 Hz is movement, not sound; the top is CENTRE_RATE_PART of the highest rate

CENTRE_RATE_PART = 0.49
# of the sample rate: above it a section of any use would be squeezed against half the rate

# --- sections ---------------------------------------------------------------------------------

DECAY_S = Bound(0.001, 60, "s", "choose a shorter or longer decay")
# 60 s outlasts the longest bells; 1 ms is already shorter than most ears' resolution of pitch

RADIUS_MIN = 0.001
# a pole this close to 0 has forgotten everything after two frames

BANDWIDTH_HZ = Bound(0.001, 96_000, "Hz", "choose a width in the range")
BANDWIDTH_OCT = Bound(0.0005, 2.5, "octaves", "0.1 is a usual notch")
# 2.5 octaves is just under Q 0.5, where the poles stop being a pair

Q = Bound(0.5, 1_000_000, "", "below 0.5 the poles are not a pair and nothing rings")

GAIN_DB = Bound(-120, 24, "dB", "choose a gain in the range")
# -120 dB is below 20-bit noise; +24 dB is a loud mistake already

DRY_DB = Bound(-120, 24, "dB", "use -inf to leave the dry sound out", also=(-math.inf,))
DEPTH_DB = Bound(-120, 0, "dB", "a notch only cuts: use 0 or less, -inf for a null", also=(-math.inf,))

NOTCHES_MAX = 128
RESONATORS_MAX = 16_384
# what one engine holds; more than either has never been wanted in one place

WATCH_NOTCHES = Bound(1, NOTCHES_MAX, "", "8 to 24 is usual")
WATCH_DEEPEST_DB = Bound(-60, -3, "dB", "-12 to -24 is usual")
# less than 3 dB would not hold a loop, more than 60 no microphone is quiet enough to need

# --- files ------------------------------------------------------------------------------------

PRESET_BYTES = 16 * 2**20
# RESONATORS_MAX filters with every key and names of a line each take 6 MB; what is larger is no preset

MOVES_BYTES = 64 * 2**20
# two million moves: three hours of a fader that sends two hundred a second

# --- motion -----------------------------------------------------------------------------------

RAMP_S = Bound(0, 600, "s", "0 jumps at once; use several moves for longer journeys")
FADE_S = 0.01
# adding, removing, switching: 10 ms hides the edge, and is shorter than a syllable
RETUNE_S = 0.02
# default ramp of a retune: fast under a finger, smooth to an ear

MOVE_FRAME = Bound(0, 2**53, "frames", "choose a frame of the sound, counted from 0")
# whole numbers are exact in float64 up to here; six thousand years at 48 kHz

TAIL_S = Bound(0, 600, "s", "60 s outlasts everything a preset can ring")
# ten of the longest permitted decays

RUN_S = Bound(0.1, 604_800, "s", "leave it out to run until stopped")
# a week

# --- safety -----------------------------------------------------------------------------------

CEILING_DB = Bound(-60, 0, "dBFS", "0 dBFS is full scale and nothing fits above it")
LOOKAHEAD_S = Bound(0, 0.02, "s", "0 is zero latency; 0.002 to 0.005 is usual")
# above 20 ms a performer hears the delay as an echo

INPUT_MAX = 16.0
# +24 dBFS: a louder input sample is a fault, is held here and counted

STATE_MAX = 1e9
# a filter sum beyond this is a fault, not a sound: the trap clears it

TRAP_MUTE_S = 0.01
# short mute over a cleared fault

BUS_FREE_DECAY_S = 1.0
BUS_DB_PER_DOUBLING = 3.0
# a struck resonator radiates energy in proportion to its decay; 3 dB a doubling keeps it constant

LIMITER_RELEASE_DB_S = 40.0
# 6 dB back in 150 ms: fast enough not to hold speech down, slow enough not to buzz

GUARD_DROP_DB = 12.0
GUARD_WINDOW_S = 0.04
GUARD_WINDOWS = 8
GUARD_FADE_S = 0.08
# 8 windows of 40 ms to be sure, one more for the window it began in, 80 ms to step down: 0.44 s
GUARD_CREST_DB = 4.0
# a sine's crest is 3.01 dB, clipping only lowers it; speech and music stay above 6 dB
GUARD_NEAR_DB = 3.0
# how far under the ceiling a tone's peak may be and still count as near it
GUARD_HOLD_S = 1.0
GUARD_RETURN_DB_S = 3.0

MUTE_S = 0.005
UNMUTE_S = 1.0
# the mute key is at once but not a click; sound comes back slowly enough to reach for the key

DENORMALS = "flushed to zero inside the block kernel, on x86-64 and 64-bit ARM; flags restored on leaving"
# a float64 tail reaches them after some 700 decay constants, and they cost up to 100x on older chips


def check_centre(name: str, centre_hz: object, rate_hz: float) -> float:
    """The centre as a float; ParameterError unless 10 Hz <= centre <= 0.49 rate_hz."""
    number = check_number(name, centre_hz)
    top = CENTRE_RATE_PART * rate_hz
    if CENTRE_HZ.low <= number <= top:
        return number
    remedy = "raise it" if number < CENTRE_HZ.low else "lower it or raise the sample rate"
    raise ParameterError(
        f"{name} must be from {CENTRE_HZ.low:g} to {top:.12g} Hz ({CENTRE_RATE_PART:g} of rate_hz "
        f"{rate_hz:.12g}), got {number:.12g}: {'write a number' if math.isnan(number) else remedy}"
    )
