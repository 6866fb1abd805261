"""Hypothesis strategies for legal filters and presets, over the whole of every range."""

import math

from hypothesis import strategies as st

from liveres import limits
from liveres.engine.settings import NORMALISATIONS, ORIGINS, Notch, Preset, Resonator
from liveres.errors import ParameterError

TEXT = st.text(max_size=20)
# any characters, control characters and line ends among them
NAMES = TEXT.filter(lambda name: name.strip())


def inside(bound):
    """Any value a bound permits, the ones outside its range among them."""
    numbers = st.floats(bound.low, bound.high)
    return st.one_of(numbers, st.integers(math.ceil(bound.low), int(bound.high)), *map(st.just, bound.also))


WIDTHS = st.one_of(
    st.tuples(st.just("pole_radius"), st.floats(0.5, 0.99998)),
    st.tuples(st.just("bandwidth_hz"), st.floats(0.04, 50.0)),
    st.tuples(st.just("bandwidth_oct"), inside(limits.BANDWIDTH_OCT)),
    st.tuples(st.just("q"), st.floats(0.51, 1000.0)),
    st.tuples(st.just("decay_s"), inside(limits.DECAY_S)),
)


def exists(kind, rate_hz, fields):
    """True when a filter of these fields is legal at the rate."""
    try:
        kind(**fields).section(rate_hz)
    except ParameterError:
        return False
    return True


@st.composite
def filters(draw, name, rate_hz):
    """One filter that is legal at the rate."""
    kind = draw(st.sampled_from([Notch, Resonator]))
    fields = {
        "name": name,
        "channels": draw(st.none() | st.lists(st.integers(0, 31), min_size=1, max_size=4, unique=True)),
        "enabled": draw(st.booleans()),
        "origin": draw(st.sampled_from(ORIGINS)),
    }
    if kind is Notch:
        fields["depth_db"] = draw(inside(limits.DEPTH_DB))
    else:
        fields["gain_db"] = draw(inside(limits.GAIN_DB))
        fields["normalise"] = draw(st.sampled_from(NORMALISATIONS))
    centres = st.floats(limits.CENTRE_HZ.low, limits.CENTRE_RATE_PART * rate_hz)
    place = st.tuples(centres, WIDTHS).map(lambda drawn: {"centre_hz": drawn[0], drawn[1][0]: drawn[1][1]})
    return kind(**fields, **draw(place.filter(lambda place: exists(kind, rate_hz, {**fields, **place}))))


@st.composite
def presets(draw, max_filters=6, names=NAMES):
    """One legal preset."""
    rate_hz = draw(inside(limits.RATE_HZ))
    named = draw(st.lists(names, max_size=max_filters, unique=True))
    return Preset(
        filters=[draw(filters(name, rate_hz)) for name in named],
        input_db=draw(inside(limits.GAIN_DB)),
        dry_db=draw(inside(limits.DRY_DB)),
        ceiling_db=draw(inside(limits.CEILING_DB)),
        lookahead_s=draw(inside(limits.LOOKAHEAD_S)),
        guard=draw(st.booleans()),
        trim=draw(st.booleans()),
        rate_hz=rate_hz,
        title=draw(TEXT),
        notes=draw(TEXT),
    )
