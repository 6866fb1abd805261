"""Moves files written without loss."""

import math
import tempfile
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from unit.legal import NAMES

from liveres.engine.moves import Move, load_moves, save_moves
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.errors import ParameterError


@pytest.fixture
def path(tmp_path):
    """Where this test's moves go."""
    return tmp_path / "m.csv"


VALUES = {
    "centre_hz": st.floats(40, 10_000),
    "depth_db": st.floats(-120, 0) | st.just(-math.inf),
    "gain_db": st.floats(-120, 24),
    "pole_radius": st.floats(0.9999, 0.999997),
    "bandwidth_hz": st.floats(0.04, 9.0),
    "bandwidth_oct": st.floats(0.01, 0.5),
    "q": st.floats(2, 400),
    "decay_s": st.floats(0.3, 60),
    "enabled": st.booleans(),
}
# each legal at 48 kHz whatever the others are


@st.composite
def shows(draw):
    """A preset and moves that are legal upon it."""
    names = draw(st.lists(NAMES, min_size=1, max_size=4, unique=True))
    filters = [draw(st.sampled_from([Notch, Resonator]))(name, 1000, -6, decay_s=1) for name in names]
    moves = []
    for one in draw(st.lists(st.sampled_from(filters), max_size=10)):
        field = draw(st.sampled_from([field for field in VALUES if field not in {"depth_db", "gain_db"} - {one.level_field}]))
        ramp_s = draw(st.none() | st.floats(0, 600))
        moves.append(Move(draw(st.integers(0, 2**53)), one.name, field, draw(VALUES[field]), ramp_s))
    return Preset(filters), moves


@given(show=shows())
def test_any_moves_come_back_equal_in_order_of_frames(show):
    """A live session is replayed from its file to the bit."""
    preset, moves = show
    with tempfile.TemporaryDirectory() as folder:
        save_moves(moves, Path(folder) / "m.csv")
        loaded = load_moves(Path(folder) / "m.csv", preset, 48_000)
    assert loaded == tuple(sorted(moves, key=lambda move: move.frame))


def test_a_written_file_is_plain_to_read(path):
    """By frame, whole numbers without a point, quotes only where they are needed."""
    save_moves([Move(9, "a, b", "q", 5.5), Move(0, "hum", "enabled", False, 0), Move(9, "hum", "depth_db", -math.inf, 2)], path)
    assert path.read_text() == (
        'frame,filter,field,value,ramp_s\n0,hum,enabled,false,0\n9,"a, b",q,5.5,0.02\n9,hum,depth_db,-inf,2\n'
    )


def test_a_name_that_no_file_can_hold_is_refused_and_the_old_file_stays(path):
    """A lone surrogate has no place in UTF-8."""
    path.write_text("old")
    with pytest.raises(ParameterError) as caught:
        save_moves([Move(0, "a\ud800", "q", 5)], path)
    assert str(caught.value) == "filter must be whole characters, got '\\ud800': rename the filter"
    assert path.read_text() == "old"
    assert list(path.parent.iterdir()) == [path]
