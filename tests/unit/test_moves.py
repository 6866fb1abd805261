"""Moves files read strictly: every fault at once, exact frames, and which moves act together."""

import math
import subprocess
import sys
import tempfile
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from liveres import limits
from liveres.engine.moves import Move, check_moves, load_moves, retunes, save_moves
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.errors import FileError, ParameterError

PRESET = Preset([Notch("hum", 100, -20, q=10), Resonator("bell", 440, -3, decay_s=2)])


@pytest.fixture
def path(tmp_path):
    """Where this test's moves go."""
    return tmp_path / "m.csv"


def moves_of(path, content, rate_hz=48_000, preset=PRESET):
    """What a file of this content loads as."""
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return load_moves(path, preset, rate_hz)


def faults_of(path, content, rate_hz=48_000, preset=PRESET):
    """(line, key, message) of every fault a file of this content is refused for."""
    with pytest.raises(FileError) as caught:
        moves_of(path, content, rate_hz, preset)
    return [(fault.line, fault.key, fault.message) for fault in caught.value.faults]


# --- a move -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("fields", "message"),
    [
        ((-1, "a", "q", 3),
         "frame must be from 0 to 9.00719925474e+15 frames, got -1: choose a frame of the sound, counted from 0"),
        ((0.5, "a", "q", 3), "frame must be a whole number, got 0.5: round it"),
        ((0, " ", "q", 3), "filter must be a word that is not empty, got ' ': give the filter a name"),
        ((0, "a", "gain", 3), "field must be one that moves can change in a filter, got 'gain': did you mean gain_db?"),
        ((0, "a", "name", "b"),
         "field must be one that moves can change in a filter, got 'name': use one of centre_hz, depth_db, pole_radius, "
         "bandwidth_hz, bandwidth_oct, q, decay_s, enabled, gain_db"),
        ((0, "a", "q", 0.1), "q must be from 0.5 to 1000000, got 0.1: below 0.5 the poles are not a pair and nothing rings"),
        ((0, "a", "q", True), "q must be a number, got true: write a number"),
        ((0, "a", "enabled", 1), "enabled must be true or false, got 1: write true or false"),
        ((0, "a", "q", 3, -1), "ramp_s must be from 0 to 600 s, got -1: 0 jumps at once; use several moves for longer journeys"),
        ((0, "a", "q", 3, math.nan),
         "ramp_s must be from 0 to 600 s, got nan: 0 jumps at once; use several moves for longer journeys"),
    ],
)  # fmt: skip
def test_a_move_that_exists_is_a_legal_one(fields, message):
    """The live host makes moves from a controller: a bad one stops where it is made."""
    with pytest.raises(ParameterError) as caught:
        Move(*fields)
    assert str(caught.value) == message


def test_a_move_without_a_ramp_has_the_usual_one():
    """One default, however the move came about."""
    assert Move(0, "a", "q", 3).ramp_s == Move(0, "a", "q", 3, None).ramp_s == limits.RETUNE_S == 0.02
    assert Move(0, "a", "q", 3, 0).ramp_s == 0.0


# --- reading ----------------------------------------------------------------------------------


def test_a_file_gives_its_moves_in_order_of_frames(path):
    """Rows may be grouped by filter; those of one frame act in file order."""
    assert moves_of(path, """\
# a comment, before the header too

time_s,filter,field,value,ramp_s
1.5,bell,gain_db,-6,0.5
  # another
0.5, bell, centre_hz, 450,
0.5,hum,enabled,false,0
,,,,
0.5,bell,decay_s,3,
1e-3,hum,depth_db,-inf,600
""") == (
        Move(48, "hum", "depth_db", -math.inf, 600.0),
        Move(24_000, "bell", "centre_hz", 450.0, 0.02),
        Move(24_000, "hum", "enabled", False, 0.0),
        Move(24_000, "bell", "decay_s", 3.0, 0.02),
        Move(72_000, "bell", "gain_db", -6.0, 0.5),
    )


def test_columns_stand_in_any_order_and_the_ramp_may_be_left_out(path):
    """As a spreadsheet leaves them: with a mark in front, its own line ends and its own TRUE."""
    content = "\ufefffield,value,frame,filter\r\nenabled,TRUE,7,hum\r\nq,3,7.0,bell\r\n"
    assert moves_of(path, content) == (Move(7, "hum", "enabled", True), Move(7, "bell", "q", 3.0))


@pytest.mark.parametrize("name", ["a, b", 'the "low"', " edge ", "two\nlines", "two\n# lines", "é 鐘", "a\r\nb", "a\x00b", "#1"])
def test_any_name_can_stand_in_quotes(path, name):
    """Names are the user's own; only quotes can hold commas, line ends and space at the ends."""
    preset = Preset([Notch(name, 100, -20, q=10)])
    quoted = '"' + name.replace('"', '""') + '"'
    assert moves_of(path, f"filter,frame,field,value\n{quoted},0,q,5\n", preset=preset) == (Move(0, name, "q", 5.0),)


@pytest.mark.parametrize(
    ("time", "rate_hz", "frame"),
    [
        ("0", 48_000, 0),
        ("-0.0", 48_000, 0),
        ("1e-320", 48_000, 0),
        ("0e999999999", 48_000, 0),
        ("1e-999999999", 48_000, 0),
        ("0.5000104166", 48_000, 24_000),  # 24000.4999968
        ("0.5000104167", 48_000, 24_001),  # 24000.5000016
        ("0.00003125", 48_000, 2),  # 1.5 frames: to the even one
        ("0.00005208333333333333333", 48_000, 2),  # a hair under 2.5
        ("0.00005208333333333333334", 48_000, 3),  # a hair over 2.5, beyond what a double can tell
        ("8640000.00001041667", 48_000, 414_720_000_001),  # 100 days: half a frame and a hair
        ("8640000.00001041666", 48_000, 414_720_000_000),
        ("46912496118.0000208333", 192_000, 9_007_199_254_656_004),  # near 2^53 frames
        ("1.", 44_100.5, 44_100),  # 44100.5: to the even one
        (".5", 8_000, 4_000),
        ("+1E1", 8_000, 80_000),
    ],
)
def test_a_time_is_rounded_to_its_frame_exactly(path, time, rate_hz, frame):
    """A long show replayed from its file must move on the same frames."""
    content = f"time_s,filter,field,value\n{time},hum,q,5\n"
    assert [move.frame for move in moves_of(path, content, rate_hz)] == [frame]


@given(milliseconds=st.integers(0, 10**12), rate_hz=st.sampled_from([8_000, 44_100, 48_000, 192_000]))
def test_any_decimal_time_is_within_half_a_frame(milliseconds, rate_hz):
    """Compared with fractions, which do not round."""
    time = Fraction(milliseconds, 1000)
    with tempfile.TemporaryDirectory() as folder:
        content = f"time_s,filter,field,value\n{milliseconds // 1000}.{milliseconds % 1000:03},hum,q,5\n"
        (move,) = moves_of(Path(folder) / "m.csv", content, rate_hz)
    assert abs(move.frame - time * rate_hz) <= Fraction(1, 2)


ROW_FAULTS = [
    ("0,bel,gain_db,-3,", "filter", "filter must be one of the preset's, got 'bel': did you mean bell?"),
    ("0,,gain_db,-3,", "filter", "filter must be one of the preset's, got '': use one of hum, bell"),
    ("0,bell,gain,-3,", "field", "field must be one that moves can change in a resonator, got 'gain': did you mean gain_db?"),
    ("0,bell,depth_db,-3,", "field",
     "field must be one that moves can change in a resonator, got 'depth_db': use one of centre_hz, gain_db, "
     "pole_radius, bandwidth_hz, bandwidth_oct, q, decay_s, enabled"),
    ("0,bell,normalise,strike,", "field",
     "field must be one that moves can change in a resonator, got 'normalise': use one of centre_hz, gain_db, "
     "pole_radius, bandwidth_hz, bandwidth_oct, q, decay_s, enabled"),
    ("0,bell,gain_db,loud,", "gain_db", "filter 'bell': gain_db must be a number, got 'loud': write it like 0.5, -3 or 1e-3"),
    ("0,bell,gain_db,,", "gain_db", "filter 'bell': gain_db must be a number, got '': write it like 0.5, -3 or 1e-3"),
    ("0,bell,gain_db,1_0,", "gain_db", "filter 'bell': gain_db must be a number, got '1_0': write it like 0.5, -3 or 1e-3"),
    ("0,bell,gain_db,٣,", "gain_db", "filter 'bell': gain_db must be a number, got '٣': write it like 0.5, -3 or 1e-3"),
    ("0,bell,gain_db,25,", "gain_db", "filter 'bell': gain_db must be from -120 to 24 dB, got 25: choose a gain in the range"),
    ("0,bell,gain_db,nan,", "gain_db", "filter 'bell': gain_db must be from -120 to 24 dB, got nan: choose a gain in the range"),
    ("0,bell,pole_radius,1,", "pole_radius",
     "filter 'bell': pole_radius must be 0.001 or more and below 1, where a pole rings for ever, got 1: lower it or "
     "give decay_s"),
    ("0,hum,depth_db,1,", "depth_db",
     "filter 'hum': depth_db must be from -120 to 0 dB or -inf, got 1: a notch only cuts: use 0 or less, -inf for a "
     "null"),
    ("0,hum,enabled,1,", "enabled", "filter 'hum': enabled must be true or false, got '1': write true or false"),
    ("0,hum,q,true,", "q", "filter 'hum': q must be a number, got 'true': write it like 0.5, -3 or 1e-3"),
    ("-0.1,hum,q,5,", "time_s",
     "time_s must be 0 s or more, got -0.1: choose a time in the sound, counted from its start"),
    ("nan,hum,q,5,", "time_s",
     "time_s must be 0 s or more, got nan: choose a time in the sound, counted from its start"),
    ("1e300,hum,q,5,", "time_s",
     "time_s must be at most 187649984474 s (2^53 frames), got 1e+300: choose a time in the sound, counted from its start"),
    ("soon,hum,q,5,", "time_s", "time_s must be a number, got 'soon': write it like 0.5, -3 or 1e-3"),
    ("0,hum,q,5,601", "ramp_s",
     "ramp_s must be from 0 to 600 s, got 601: 0 jumps at once; use several moves for longer journeys"),
    ("0,hum,q,5,-1", "ramp_s", "ramp_s must be from 0 to 600 s, got -1: 0 jumps at once; use several moves for longer journeys"),
    ("0,hum,q,5,slow", "ramp_s", "ramp_s must be a number, got 'slow': write it like 0.5, -3 or 1e-3"),
    ("0,hum,q", "",
     "row must have 5 cells (time_s, filter, field, value, ramp_s), got 3: part cells by commas, write numbers with a "
     "decimal point, put names that hold commas in quotes"),
    ("0,hum,q,0,5,0", "",
     "row must have 5 cells (time_s, filter, field, value, ramp_s), got 6: part cells by commas, write numbers with a "
     "decimal point, put names that hold commas in quotes"),
    ("0,\"hum,q,5,0", "", "row must be cells parted by commas, and is not (unexpected end of data): mend its quotes"),
    ("0,hum,centre_hz,24000,", "centre_hz",
     "filter 'hum': centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 24000: lower it or raise the "
     "sample rate"),
    ("0,hum,bandwidth_hz,12000,", "bandwidth_hz",
     "filter 'hum': bandwidth_hz must give a width below 12000 Hz (a quarter of rate_hz 48000), got 12000 Hz: narrow "
     "it"),
]  # fmt: skip


@pytest.mark.parametrize(("row", "key", "message"), ROW_FAULTS)
def test_a_fault_is_told_with_its_line_and_field(path, row, key, message):
    """The wording is that of the same fault in Python: one checker, two uses."""
    assert faults_of(path, f"# moves\ntime_s,filter,field,value,ramp_s\n{row}\n") == [(3, key, message)]


def test_a_frame_is_whole_and_not_negative(path):
    """The clock of the live host."""
    content = "frame,filter,field,value\n-1,hum,q,5\n1.5,hum,q,5\n"
    assert faults_of(path, content) == [
        (2, "frame", "frame must be from 0 to 9.00719925474e+15 frames, got -1: choose a frame of the sound, counted from 0"),
        (3, "frame", "frame must be a whole number, got 1.5: round it"),
    ]


@pytest.mark.parametrize(
    ("header", "ends"),
    [
        ("time_s,filter,field", ["got no value: add what is missing"]),
        ("time,filter,field,value", ["got 'time': did you mean time_s?"]),
        ("time_s,filtre,feild,value", ["got 'filtre': did you mean filter?", "got 'feild': did you mean field?"]),
        ("time,frame,filter,field,value", ["got 'time': did you mean time_s?", "got both time_s and frame: keep one"]),
        ("time_s,frame,filter,field,value", ["got both time_s and frame: keep one"]),
        ("time_s,filter,field,value,value", ["got value twice: keep one"]),
        ("time_s,filter,field,value,colour", ["got 'colour': use one of time_s, frame, filter, field, value, ramp_s"]),
        ("0,hum,q,5", ["got '0': use one of time_s, frame, filter, field, value, ramp_s",
                       "got 'hum': use one of time_s, frame, filter, field, value, ramp_s",
                       "got 'q': use one of time_s, frame, filter, field, value, ramp_s",
                       "got '5': use one of time_s, frame, filter, field, value, ramp_s",
                       "got neither time_s nor frame: add one", "got no filter and no field and no value: add what is missing"]),
    ],
)  # fmt: skip
def test_a_header_that_will_not_do_is_refused(path, header, ends):
    """Without it no row can be understood, so rows are not looked at."""
    rule = "header line must name time_s or frame, filter, field and value, and may name ramp_s, "
    assert faults_of(path, f"\n{header}\nnonsense\n") == [(2, "", rule + end) for end in ends]


@pytest.mark.parametrize(("mark", "name"), [(";", "semicolons"), ("\t", "tabs")])
def test_cells_parted_by_another_mark_are_told_in_one_line(path, mark, name):
    """Spreadsheets part by semicolons where a comma is the decimal point; a list of unknown columns would hide that."""
    content = mark.join(("time_s", "filter", "field", "value")) + "\n" + mark.join(("0,5", "hum", "q", "5")) + "\n"
    assert faults_of(path, content) == [(1, "", f"cells must be parted by commas, got {name}: export it with commas")]


def test_a_file_larger_than_any_show_is_refused(path, monkeypatch):
    """It is some other file, and reading it whole would take the memory of the machine. The bound is lowered to be met."""
    assert limits.MOVES_BYTES == 64 * 2**20
    monkeypatch.setattr(limits, "MOVES_BYTES", 2**20)
    assert faults_of(path, "#" * (2**20 + 1)) == [
        (None, "", "file must be at most 1 MB, got a larger one: choose the right file")
    ]


@pytest.mark.parametrize(
    ("content", "line", "message"),
    [
        ("", None, "file must not be empty: choose the right file, or write something into it"),
        ("# nothing\n\n", None,
         "header line must name time_s or frame, filter, field and value, and may name ramp_s, got none: write it first"),
        (b'RIFF$\x08\xff\x00WAVE', 1, "file must be UTF-8 text, got byte 0xff: save it as UTF-8, or choose the right file"),
        (b'\xff\xfef\x00', 1, "file must be UTF-8 text, got byte 0xff: save it as UTF-8, or choose the right file"),
    ],
)  # fmt: skip
def test_a_file_that_is_no_table_is_refused(path, content, line, message):
    """A wrong file name must not look like a table without moves."""
    assert faults_of(path, content) == [(line, "", message)]


def test_a_missing_file_is_refused_by_name(path):
    """The same as every file this program reads."""
    with pytest.raises(FileError) as caught:
        load_moves(path, PRESET, 48_000)
    assert str(caught.value) == f"{path}: file must exist, got none: check the name and the folder"


def test_a_header_alone_is_a_show_without_moves(path):
    """What the live host writes when nothing was touched."""
    assert moves_of(path, "frame,filter,field,value,ramp_s\n") == ()


def test_every_fault_of_a_file_is_told_at_once_in_file_order(path):
    """Mending a file must not be a game of one fault a run."""
    content = "time_s,filter,field,value\n-1,bel,gain,x\n\n# fine\n0,hum,q\n1,bell,gain_db,99\n"
    assert [fault[:2] for fault in faults_of(path, content)] == [
        (2, "time_s"), (2, "filter"), (2, "field"), (5, ""), (6, "gain_db"),
    ]  # fmt: skip


def test_a_move_is_judged_by_the_state_that_those_before_it_have_reached(path):
    """A fixed bandwidth is legal at one centre and too wide at another; the order is that of frames, not of rows."""
    down = "{},hum,centre_hz,50,\n"
    widen = "{},hum,bandwidth_hz,150,\n"
    head = "frame,filter,field,value,ramp_s\n"
    assert len(moves_of(path, head + widen.format(0) + down.replace("50", "90").format(1))) == 2
    with pytest.raises(ParameterError) as caught:
        Preset([Notch("hum", 50, -20, bandwidth_hz=150)])
    told = str(caught.value)
    assert "got 150 Hz" in told
    assert faults_of(path, head + down.format(1) + widen.format(0)) == [(2, "centre_hz", told)]
    assert faults_of(path, head + down.format(0) + widen.format(1)) == [(3, "bandwidth_hz", told)]


def test_moves_that_only_make_sense_together_are_one_retune(path):
    """What a live session did in one step must load again, though the first of its moves alone could not stand."""
    preset = Preset([Notch("wide", 4000, -20, bandwidth_hz=3000)])
    moves = (Move(9, "wide", "centre_hz", 100.0), Move(9, "wide", "bandwidth_hz", 5.0))
    save_moves(moves, path)
    assert load_moves(path, preset, 48_000) == moves
    head = "frame,filter,field,value,ramp_s\n"
    apart = [
        "9,wide,centre_hz,100,\n10,wide,bandwidth_hz,5,\n",
        "9,wide,centre_hz,100,\n9,wide,bandwidth_hz,5,1\n",
        "9,wide,centre_hz,100,\n9,wide,centre_hz,100,\n9,wide,bandwidth_hz,5,\n",
    ]
    for rows in apart:
        assert (2, "centre_hz") in [fault[:2] for fault in faults_of(path, head + rows, preset=preset)]


def test_a_retune_is_the_neighbours_of_one_frame_filter_and_ramp_with_different_fields():
    """A field named again, or a second width, is a second step."""
    moves = [
        Move(5, "a", "q", 3), Move(5, "a", "centre_hz", 90), Move(5, "a", "q", 4), Move(5, "a", "decay_s", 1),
        Move(5, "b", "decay_s", 1), Move(5, "a", "enabled", False), Move(5, "a", "depth_db", -3, 1), Move(0, "a", "q", 9),
    ]  # fmt: skip
    assert [[moves.index(move) for move in together] for together in retunes(moves)] == [[7], [0, 1], [2], [3], [4], [5], [6]]


def test_a_retune_that_cannot_stand_is_told_at_the_move_to_mend(path):
    """Not at the whole of it."""
    content = "frame,filter,field,value\n0,hum,q,20\n0,hum,centre_hz,24000\n0,hum,depth_db,-3\n"
    assert [fault[:2] for fault in faults_of(path, content)] == [(3, "centre_hz")]


def test_a_file_is_checked_without_a_rate_for_all_that_no_rate_mends(path):
    """Before a sound file is opened its rate is not known: 30 kHz may be legal there, a wrong name never is."""
    head = "time_s,filter,field,value\n"
    path.write_text(head + "0,hum,centre_hz,30000\n1e12,hum,q,20\n")
    check_moves(path, PRESET)
    path.write_text(head + "0,hum,centre_hz,30000\n0,bel,q,20\n0,hum,centre_hz,9\n")
    with pytest.raises(FileError) as caught:
        check_moves(path, PRESET)
    assert [(fault.line, fault.key) for fault in caught.value.faults] == [(3, "filter"), (4, "centre_hz")]


def test_a_refused_move_does_not_make_those_after_it_faults(path):
    """Only what is wrong is told; the rest is judged from the last legal state."""
    content = "frame,filter,field,value\n0,hum,centre_hz,24000\n1,hum,q,20\n2,hum,centre_hz,120\n"
    assert [fault[0] for fault in faults_of(path, content)] == [2]


def test_moves_are_judged_at_the_rate_they_are_played_at(path):
    """The same file may be legal at one rate only."""
    content = "frame,filter,field,value\n0,hum,centre_hz,10000\n"
    assert len(moves_of(path, content, 48_000)) == 1
    assert faults_of(path, content, 16_000) == [
        (2, "centre_hz",
         "filter 'hum': centre_hz must be from 10 to 7840 Hz (0.49 of rate_hz 16000), got 10000: "
         "lower it or raise the sample rate"),
    ]  # fmt: skip
    with pytest.raises(ParameterError, match="rate_hz must be from 8000 to 192000 Hz"):
        moves_of(path, content, 1)


def test_an_unknown_name_among_very_many_is_told_without_the_list_of_them(path):
    """A bank of thousands would bury the fault."""
    preset = Preset([Resonator(f"r{number}", 100 + number, -40, q=9) for number in range(1000)])
    assert faults_of(path, "frame,filter,field,value\n0,r1000,q,5\n", preset=preset) == [
        (2, "filter", "filter must be one of the preset's, got 'r1000': look its name up in the preset")
    ]


def test_moves_need_no_compiler():
    """Checking a file must be quick: the engine's kernels are not needed for it."""
    code = "import sys, liveres.engine.moves; print([name for name in sys.modules if name.startswith(('numba', 'numpy'))])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=True)
    assert done.stdout.strip() == "[]"
