"""Preset files: strict reading with every fault at once, writing that loses nothing."""

import dataclasses
import json
import math
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from unit.legal import presets

from liveres import limits, load_preset, save_preset
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.errors import FileError, ParameterError
from liveres.toml_lines import line_of, value_lines


def faults_of(path, content):
    """(line, key, message) of every fault a file of this content is refused for."""
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(FileError) as caught:
        load_preset(path)
    return [(fault.line, fault.key, fault.message) for fault in caught.value.faults]


def table(**changes):
    """A [[filters]] table of a legal notch with some keys changed, or left out where None."""
    keys = {"kind": '"notch"', "name": '"n"', "centre_hz": "100", "depth_db": "-6", "q": "10", **changes}
    return "[[filters]]\n" + "".join(f"{key} = {value}\n" for key, value in keys.items() if value is not None)


@pytest.fixture
def path(tmp_path):
    """Where this test's preset goes."""
    return tmp_path / "p.toml"


# --- reading ----------------------------------------------------------------------------------


def test_a_file_sets_the_fields_of_the_same_names(path):
    """The file format is the field names: nothing else has to be learnt."""
    path.write_text("""
        title = "Hall"
        notes = '''two
lines'''
        rate_hz = 96_000
        input_db = -6
        dry_db = -inf
        ceiling_db = -3.5
        lookahead_s = 2e-3
        guard = false
        trim = true
        [[filters]]
        kind = "notch"
        name = "hum"
        centre_hz = 50
        depth_db = -20
        bandwidth_hz = 2
        enabled = false
        [[filters]]
        kind = "resonator"
        name = "bell"
        centre_hz = 440.5
        gain_db = -3
        decay_s = 1.5
        normalise = "strike"
        channels = [1, 0]
        origin = "user"
    """)
    assert load_preset(path) == Preset(
        filters=[
            Notch("hum", 50, -20, bandwidth_hz=2, enabled=False),
            Resonator("bell", 440.5, -3, decay_s=1.5, normalise="strike", channels=[0, 1], origin="user"),
        ],
        title="Hall", notes="two\nlines", rate_hz=96_000, input_db=-6, dry_db=-math.inf, ceiling_db=-3.5,
        lookahead_s=0.002, guard=False, trim=True,
    )  # fmt: skip


def test_what_a_file_leaves_out_has_its_default(path):
    """A preset may be as short as its purpose."""
    path.write_text(table(name='"short"'))
    assert load_preset(path) == Preset(filters=[Notch("short", 100, -6, q=10)])


def test_filters_may_be_written_as_an_inline_list(path):
    """The same values in another legal spelling are the same preset."""
    path.write_text('filters = [\n {kind = "notch", name = "n", centre_hz = 100, depth_db = -6, q = 10},\n]')
    assert load_preset(path) == Preset(filters=[Notch("n", 100, -6, q=10)])


TOP_FAULTS = [
    ("titel = 'x'", "titel",
     "'titel' is not a key of a preset: did you mean title?"),
    ("loudness = 3", "loudness",
     "'loudness' is not a key of a preset: use one of title, notes, rate_hz, input_db, dry_db, ceiling_db, lookahead_s, "
     "guard, trim"),
    ("watch = 3", "watch",
     "watch must be a table, got 3: begin it with [watch]"),
    ("title = 3", "title",
     "title must be text, got 3: put it in quotes"),
    ("guard = 1", "guard",
     "guard must be true or false, got 1: write true or false"),
    ("input_db = true", "input_db",
     "input_db must be a number, got True: write it without quotes"),
    ("input_db = '-3'", "input_db",
     "input_db must be a number, got '-3': write it without quotes"),
    ("ceiling_db = 0.5", "ceiling_db",
     "ceiling_db must be from -60 to 0 dBFS, got 0.5: 0 dBFS is full scale and nothing fits above it"),
    ("dry_db = nan", "dry_db",
     "dry_db must be from -120 to 24 dB or -inf, got nan: use -inf to leave the dry sound out"),
    ("rate_hz = 4000", "rate_hz",
     "rate_hz must be from 8000 to 192000 Hz, got 4000: use a sample rate sound devices and files have"),
    ("rate_hz = 1" + "0" * 400, "rate_hz",
     "rate_hz must be a number that a double can hold, got one of over 308 digits: write fewer"),
    ("rate_hz = 2024-01-01", "rate_hz",
     "rate_hz must be a number, got datetime.date(2024, 1, 1): write it without quotes"),
    ("[filters]\nq = 3", "filters",
     "filters must be a list of tables, got {'q': 3}: begin each filter with [[filters]], in two brackets"),
    ("filters = [7]", "filters[1]",
     "filters must hold tables, got 7: begin each filter with [[filters]]"),
]  # fmt: skip


@pytest.mark.parametrize(("content", "key", "message"), TOP_FAULTS)
def test_a_top_level_fault_is_told_with_its_line_and_key(path, content, key, message):
    """One line of text must be enough to mend the file."""
    assert faults_of(path, "\n# a comment\n" + content) == [(3, key, message)]


FILTER_FAULTS = [
    ({"center_hz": "9"}, 7, "center_hz",
     "'center_hz' is not a key of a notch: did you mean centre_hz?"),
    ({"gain_db": "9"}, 7, "gain_db",
     "'gain_db' is not a key of a notch: use one of kind, name, centre_hz, depth_db, pole_radius, bandwidth_hz, "
     "bandwidth_oct, q, decay_s, channels, enabled, origin"),
    ({"normalise": "'peak'"}, 7, "normalise",
     "'normalise' is not a key of a notch: use one of kind, name, centre_hz, depth_db, pole_radius, bandwidth_hz, "
     "bandwidth_oct, q, decay_s, channels, enabled, origin"),
    ({"centre_hz": None}, 1, "centre_hz",
     "centre_hz must be given, got none: add it"),
    ({"depth_db": None}, 1, "depth_db",
     "depth_db must be given, got none: add it"),
    ({"centre_hz": "5"}, 4, "centre_hz",
     "centre_hz must be from 10 to 94080 Hz, got 5: move it into the range"),
    ({"centre_hz": "'5'"}, 4, "centre_hz",
     "centre_hz must be a number, got '5': write it without quotes"),
    ({"centre_hz": "30000"}, 4, "centre_hz",
     "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 30000: lower it or raise the sample rate"),
    ({"depth_db": "1"}, 5, "depth_db",
     "depth_db must be from -120 to 0 dB or -inf, got 1: a notch only cuts: use 0 or less, -inf for a null"),
    ({"q": None}, 1, "",
     "width must be given exactly once, as one of pole_radius, bandwidth_hz, bandwidth_oct, q, decay_s, got none: add "
     "one"),
    ({"decay_s": "1"}, 7, "decay_s",
     "width must be given exactly once, as one of pole_radius, bandwidth_hz, bandwidth_oct, q, decay_s, got q and "
     "decay_s: keep one"),
    ({"q": "0.4"}, 6, "q",
     "q must be from 0.5 to 1000000, got 0.4: below 0.5 the poles are not a pair and nothing rings"),
    ({"q": None, "pole_radius": "1"}, 6, "pole_radius",
     "pole_radius must be below 1, where a pole rings for ever, got 1: lower it or give decay_s"),
    ({"q": None, "pole_radius": "0.99999999"}, 6, "pole_radius",
     "pole_radius must be from 0.001 to 0.9999976015 (a decay of 60 s at rate_hz 48000; at 1 it would ring for ever), "
     "got 0.99999999: lower it"),
    ({"channels": "[0, 0]"}, 7, "channels",
     "channels must name each channel once and at least one, got [0, 0]: leave it out for all channels"),
    ({"channels": "[32]"}, 7, "channels",
     "channels must be from 0 to 31, got 32: channels are counted from 0"),
    ({"channels": "1"}, 7, "channels",
     "channels must be a list of channel numbers counted from 0, got 1: write it like [0, 1]"),
    ({"enabled": "'no'"}, 7, "enabled",
     "enabled must be true or false, got 'no': write true or false"),
    ({"origin": "'usr'"}, 7, "origin",
     "origin must be one of preset, user, watch, got 'usr': did you mean user?"),
]  # fmt: skip


@pytest.mark.parametrize(("changes", "line", "key", "message"), FILTER_FAULTS)
def test_a_fault_of_a_filter_is_told_with_its_line_key_and_name(path, changes, line, key, message):
    """The wording is that of the same fault in Python: one checker, two uses."""
    place = f"filters[2].{key}" if key else "filters[2]"
    first = "title = 'x'\n\n" + table(name='"first"')
    offset = first.count("\n")
    assert faults_of(path, first + table(**changes)) == [(line + offset, place, f"filter 'n': {message}")]


def test_a_width_too_wide_for_its_centre_is_told_in_the_words_of_the_same_fault_in_python(path):
    """One checker, two uses."""
    with pytest.raises(ParameterError) as caught:
        Preset([Notch("n", 100, -6, bandwidth_hz=900)])
    assert "got 900 Hz" in str(caught.value)
    assert faults_of(path, table(q=None, bandwidth_hz="900")) == [(6, "filters[1].bandwidth_hz", str(caught.value))]


@pytest.mark.parametrize(
    ("changes", "key", "message"),
    [
        ({"name": None}, "name", "name must be given, got none: add it"),
        ({"name": "''"}, "name", "name must be a word that is not empty, got '': give the filter a name"),
        ({"name": "3"}, "name", "name must be a word that is not empty, got 3: give the filter a name"),
    ],
)
def test_a_filter_without_a_good_name_is_told_by_its_number(path, changes, key, message):
    """Filters are counted from 1, as people count."""
    assert [fault[1:] for fault in faults_of(path, table(**changes))] == [(f"filters[1].{key}", message)]


@pytest.mark.parametrize(
    ("kind", "message"),
    [
        (None, "kind must be given, got none: add it"),
        ('"nothc"', "kind must be one of notch, resonator, got 'nothc': did you mean notch?"),
        ("[1]", "kind must be one of notch, resonator, got [1]: use one of notch, resonator"),
    ],
)
def test_a_filter_of_unknown_kind_is_refused(path, kind, message):
    """Everything else about it is still checked."""
    faults = faults_of(path, table(kind=kind, centre_hz="5"))
    assert [fault[1:] for fault in faults] == [
        ("filters[1].kind", f"filter 'n': {message}"),
        ("filters[1].centre_hz", "filter 'n': centre_hz must be from 10 to 94080 Hz, got 5: move it into the range"),
    ]


def test_a_name_that_stands_twice_is_refused_where_it_stands_again(path):
    """Also between filters that have other faults."""
    content = table(centre_hz="5") + table(name='"m"') + table(q="0.1")
    assert faults_of(path, content)[1] == (
        15, "filters[3].name", "name must be unique among filters, got 'n' twice: rename one",
    )  # fmt: skip


def test_too_many_filters_of_a_kind_are_refused_at_the_first_too_many(path):
    """The engine's room is fixed."""
    content = "".join(table(name=f'"n{number}"') for number in range(limits.NOTCHES_MAX + 2))
    assert faults_of(path, content) == [
        (128 * 6 + 1, "filters[129]", "filters must hold at most 128 of kind notch, got 130: remove some")
    ]


def test_the_rate_is_that_of_the_file_and_a_bad_one_raises_no_further_faults(path):
    """A centre can only be judged against a rate that exists."""
    assert faults_of(path, "rate_hz = 16000\n" + table(centre_hz="9000"))[0][1:] == (
        "filters[1].centre_hz",
        "filter 'n': centre_hz must be from 10 to 7840 Hz (0.49 of rate_hz 16000), got 9000: lower it or raise the sample rate",
    )
    assert [fault[1] for fault in faults_of(path, "rate_hz = 1\n" + table(centre_hz="90000"))] == ["rate_hz"]


def test_every_fault_of_a_file_is_told_at_once_in_file_order(path):
    """Mending a file must not be a game of one fault a run."""
    path.write_text(
        "titel = 'x'\nguard = 1\n" + table(centre_hz="30000", colour="'red'", depth_db=None, q="'x'")
        + table(name='"m"', bandwidth_hz="9") + table()
    )  # fmt: skip
    with pytest.raises(FileError) as caught:
        load_preset(path)
    assert [line.removeprefix(f"{path}:") for line in str(caught.value).splitlines()] == [
        "1: titel: 'titel' is not a key of a preset: did you mean title?",
        "2: guard: guard must be true or false, got 1: write true or false",
        "3: filters[1].depth_db: filter 'n': depth_db must be given, got none: add it",
        "6: filters[1].centre_hz: filter 'n': centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 30000: "
        "lower it or raise the sample rate",
        "7: filters[1].q: filter 'n': q must be a number, got 'x': write it without quotes",
        "8: filters[1].colour: filter 'n': 'colour' is not a key of a notch: use one of kind, name, centre_hz, depth_db, "
        "pole_radius, bandwidth_hz, bandwidth_oct, q, decay_s, channels, enabled, origin",
        "15: filters[2].bandwidth_hz: filter 'm': width must be given exactly once, as one of pole_radius, bandwidth_hz, "
        "bandwidth_oct, q, decay_s, got q and bandwidth_hz: keep one",
        "18: filters[3].name: name must be unique among filters, got 'n' twice: rename one",
    ]


@pytest.mark.parametrize(
    ("content", "line", "message"),
    [
        ("rate_hz = 48000\nguard true", 2,
         "file must be TOML, got a fault in its syntax, Expected '=' after a key in a key/value pair "
         "(at line 2, column 7): mend it"),
        ("title = 'a'\ntitle = 'b'\n", 2,
         "file must be TOML, got a fault in its syntax, Cannot overwrite a value (at line 2, column 12): mend it"),
        ("title = 'a", None, "file must be TOML, got a fault in its syntax, Expected \"'\" (at end of document): mend it"),
        ("title = " + "[" * 100_000, None, "file must be TOML, got brackets nested too deeply: write it flatter"),
        ("# nothing\n", None, "file must set at least one key, got comments alone: write a preset into it"),
        ("", None, "file must not be empty: choose the right file, or write something into it"),
        (b"title = '\xe9'", 1, "file must be UTF-8 text, got byte 0xe9: save it as UTF-8, or choose the right file"),
    ],
)  # fmt: skip
def test_a_file_that_is_no_toml_is_refused_with_the_line_the_parser_gives(path, content, line, message):
    """Half-edited files are the usual case."""
    assert faults_of(path, content) == [(line, "", message)]


def test_a_missing_file_is_refused_by_name(path):
    """The same as every file this program reads."""
    with pytest.raises(FileError) as caught:
        load_preset(path)
    assert str(caught.value) == f"{path}: file must exist, got none: check the name and the folder"


def test_a_full_bank_of_resonators_loads(path):
    """16,384 is the most a preset can hold, and the count a recorded object may need."""
    bank = Preset([Resonator(f"r{number}", 20 + number, -40, decay_s=1.5) for number in range(limits.RESONATORS_MAX)])
    save_preset(bank, path)
    assert load_preset(path) == bank


@pytest.mark.timing
def test_a_full_bank_loads_while_the_user_looks_on(path):
    """Under 3 s, most of it the parser's; some 1 s on an idle core."""
    save_preset(Preset([Resonator(f"r{number}", 20 + number, -40, decay_s=1.5) for number in range(limits.RESONATORS_MAX)]), path)
    start = time.perf_counter()
    load_preset(path)
    assert time.perf_counter() - start < 3.0


def test_loading_needs_no_writer():
    """Start-up time: the TOML writer is only brought in when a file is to be kept."""
    code = "import sys, liveres.presets; print([name for name in sys.modules if name.startswith(('tomlkit', 'numba'))])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=True)
    assert done.stdout.strip() == "[]"


# --- lines ------------------------------------------------------------------------------------


def test_lines_are_found_in_every_spelling_toml_has():
    """Strings that look like tables, lists over lines, dotted and quoted keys, comments with brackets."""
    lines = value_lines('''# [[filters]]
title = """
[[filters]] # "" not one
q = 1"""""
notes = 'a # b' # [c]
a."b c".d = { e = [1, { f = 2 }], g = "]" }
list = [
  1.5, # one
  [2,
   3],
]
[[filters]]
q = 1
[[ filters ]]
q = 2
[filters.sub]
x = 1979-05-27 07:32:00
[[filters.deep]]
y = \'\'\'it\'s
\'\'\'
z = ""
''')
    assert {place: line for place, line in lines.items() if len(place) != 1 or place[0] != "filters"} == {
        ("title",): 2, ("notes",): 5, ("a",): 6, ("a", "b c"): 6, ("a", "b c", "d"): 6, ("a", "b c", "d", "e"): 6,
        ("a", "b c", "d", "e", 1): 6, ("a", "b c", "d", "e", 2): 6, ("a", "b c", "d", "e", 2, "f"): 6, ("a", "b c", "d", "g"): 6,
        ("list",): 7, ("list", 1): 8, ("list", 2): 9, ("list", 2, 1): 9, ("list", 2, 2): 10,
        ("filters", 1): 12, ("filters", 1, "q"): 13, ("filters", 2): 14, ("filters", 2, "q"): 15,
        ("filters", 2, "sub"): 16, ("filters", 2, "sub", "x"): 17,
        ("filters", 2, "deep"): 18, ("filters", 2, "deep", 1): 18,
        ("filters", 2, "deep", 1, "y"): 19, ("filters", 2, "deep", 1, "z"): 21,
    }  # fmt: skip
    assert line_of(lines, ("filters", 2, "missing")) == 14
    assert line_of(lines, ("nowhere",)) is None


@given(preset=presets())
def test_lines_point_at_their_keys_in_any_saved_preset(preset):
    """The text of a line begins with the key that the line is given for."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "p.toml"
        save_preset(preset, path)
        text = path.read_bytes().decode()
    lines = text.split("\n")
    found = value_lines(text)
    assert len([place for place in found if len(place) == 3]) >= 5 * len(preset.filters)
    for place, line in found.items():
        if place == ("filters",) or isinstance(place[-1], int):
            assert lines[line - 1].startswith(("[[filters]]", "channels"))
        else:
            assert lines[line - 1].startswith(f"{place[-1]} = ")


# --- writing ----------------------------------------------------------------------------------


@given(preset=presets())
def test_any_legal_preset_comes_back_equal(preset):
    """What a user has set is never lost or moved by a rounding."""
    with tempfile.TemporaryDirectory() as folder:
        save_preset(preset, Path(folder) / "p.toml")
        assert load_preset(Path(folder) / "p.toml") == preset


@given(old=presets(names=st.sampled_from("abcdefgh")), new=presets(names=st.sampled_from("abcdefgh")))
def test_any_legal_preset_comes_back_equal_from_over_any_other_whose_remarks_stay(old, new):
    """Saving into a file that people have written in must be as exact as saving a new one."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "p.toml"
        save_preset(old, path)
        text = path.read_bytes().decode()
        text = text.replace("\n\n[[filters]]\n", "\n# a tail\n\n# of the next\n[[filters]] # header\n")
        path.write_bytes(f"# the head\n{text}# the end".encode())
        assert load_preset(path) == old
        save_preset(new, path)
        assert load_preset(path) == new
        saved = path.read_bytes().decode()
    assert saved.startswith("# the head\n")
    assert saved.endswith("# the end\n") or not old.filters
    assert saved.count("# the end\n") == 1
    kept = {one.name for one in old.filters} & {one.name for one in new.filters}
    assert saved.count("[[filters]] # header\n") == saved.count("# of the next\n") == len(kept)


HAND_WRITTEN = """\
# The hall, as set on the first evening.
title = "Hall"   # shown on the screen
rate_hz = 48_000

# --- the hum ---
[[filters]]   # measured
kind = "notch"
name = "hum"
centre_hz = 5e1   # mains
depth_db = -20.0
q = 10
# q = 20 was too narrow

# the bell
[[filters]]
kind = "resonator"
name = "bell"
gain_db = -3
decay_s = 1.50
centre_hz = 440
# second thoughts

# below everything
"""


def test_saving_what_a_file_holds_already_changes_no_byte_of_it(path):
    """Equal values keep their spelling, defaults that are left out stay left out."""
    path.write_text(HAND_WRITTEN)
    save_preset(load_preset(path), path)
    assert path.read_text() == HAND_WRITTEN


def test_only_what_differs_is_rewritten(path):
    """A file under version control shows what was changed and nothing else."""
    path.write_text(HAND_WRITTEN)
    preset = load_preset(path)
    hum, bell = preset.filters
    save_preset(dataclasses.replace(preset, trim=True, filters=[hum.changed(centre_hz=60), bell.changed(enabled=False)]), path)
    assert path.read_text() == (
        HAND_WRITTEN.replace("centre_hz = 5e1   # mains", "centre_hz = 60   # mains")
        .replace("rate_hz = 48_000\n", "rate_hz = 48_000\ntrim = true\n")
        .replace("centre_hz = 440\n# second thoughts\n", "centre_hz = 440\n# second thoughts\nenabled = false\n")
    )


def test_filters_are_added_dropped_and_moved_with_the_lines_above_them(path):
    """A remark belongs to the filter it stands over, wherever that filter goes."""
    path.write_text(HAND_WRITTEN)
    preset = load_preset(path)
    added = Notch("new", 77.5, -math.inf, bandwidth_oct=0.1, channels=[1])
    save_preset(dataclasses.replace(preset, filters=[preset.filters[1].changed(q=30), added]), path)
    assert path.read_text() == """\
# The hall, as set on the first evening.
title = "Hall"   # shown on the screen
rate_hz = 48_000

# the bell
[[filters]]
kind = "resonator"
name = "bell"
gain_db = -3
centre_hz = 440
# second thoughts
q = 30

[[filters]]
kind = "notch"
name = "new"
centre_hz = 77.5
depth_db = -inf
bandwidth_oct = 0.1
channels = [1]

# below everything
"""


def test_a_new_file_is_plain_to_read(path):
    """Whole numbers without a point, every level in sight, filters without the keys they do not need."""
    notes = 'first "line"\nsecond'
    save_preset(Preset([Resonator("r", 440, -3.5, decay_s=2, normalise="strike")], title="é", notes=notes), path)
    assert path.read_text(encoding="utf-8") == """\
title = "é"
notes = \"\"\"
first \\"line\\"
second\"\"\"
rate_hz = 48000
input_db = 0
dry_db = 0
ceiling_db = -1
lookahead_s = 0
guard = true
trim = false

[[filters]]
kind = "resonator"
name = "r"
centre_hz = 440
gain_db = -3.5
decay_s = 2
normalise = "strike"
"""


@pytest.mark.parametrize(
    "old",
    [
        b"", b"no toml at all", b"\xff\xfe", b"guard = 1", b"filters = 3\n", b"[filters]\nq = 1", b"[[filters]]\nname = [1]",
        b"[[filters]]\n[filters.sub]\nx = 1", b"[other]\nx = 1\n[[filters]]\nname='n'\n[again]\n", b"filters = [{name = 'n'}]",
        b"title.sub = 3", b"input_db = 1\r\n# kept\r\n",
    ],
)  # fmt: skip
def test_a_file_of_any_content_can_be_saved_over(path, old):
    """The name was chosen by the user; what comes back must be the preset in full."""
    path.write_bytes(old)
    preset = Preset([Notch("n", 100, -6, q=10), Resonator("m", 200, 0, q=5)], title="t")
    save_preset(preset, path)
    assert load_preset(path) == preset


def test_a_write_that_fails_leaves_the_old_preset_and_no_other_file(path):
    """The venue's settings survive a full disk; the limit here is the kernel's own."""
    save_preset(Preset(title="old"), path)
    code = (
        "import resource, tomlkit\n"
        "from liveres import LiveresError, Preset, Resonator, save_preset\n"
        "bank = Preset([Resonator(f'r{n}', 100 + n, -3, q=9) for n in range(1000)])\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (4096, 4096))\n"
        f"try: save_preset(bank, {json.dumps(str(path))})\n"
        "except LiveresError as error: print(error)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=True)
    assert done.stdout == (
        f"{path}: the file grew larger than this disk or account permits: write less of it, or write it elsewhere\n"
    )
    assert load_preset(path) == Preset(title="old")
    assert list(path.parent.iterdir()) == [path]


def test_half_a_character_is_refused_before_anything_is_written(path):
    """A lone surrogate has no place in UTF-8."""
    with pytest.raises(ParameterError) as caught:
        save_preset(Preset(title="a\ud800"), path)
    assert str(caught.value) == "title, notes and names must be whole characters, got '\\ud800': remove it"
    assert not path.exists()
