"""Preset files read strictly, with every fault at once."""

import math
import subprocess
import sys
import time

import pytest

from liveres import limits, load_preset, save_preset
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.errors import FileError, ParameterError


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
     "guard, trim, filters, watch"),
    ("[[filter]]\nq = 3", "filter", "'filter' is not a key of a preset: did you mean filters?"),
    ("[wach]\nq = 3", "wach", "'wach' is not a key of a preset: did you mean watch?"),
    ("watch = 3", "watch",
     "watch must be a table, got 3: begin it with [watch]"),
    ("title = 3", "title",
     "title must be text, got 3: put it in quotes"),
    ("guard = 1", "guard",
     "guard must be true or false, got 1: write true or false"),
    ("input_db = true", "input_db",
     "input_db must be a number, got true: write a number"),
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
     "rate_hz must be a number, got 2024-01-01: write a number"),
    ("[filters]\nq = 3", "filters",
     "filters must be a list of tables, got a table: begin each filter with [[filters]], in two brackets"),
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
    ({"q": "true"}, 6, "q", "q must be a number, got true: write a number"),
    ({"centre_hz": "nan"}, 4, "centre_hz",
     "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got nan: write a number"),
    ({"centre_hz": "{}"}, 4, "centre_hz",
     "centre_hz must be a number, got a table: write a number"),
    ({"gain_db": "9"}, 7, "gain_db",
     "'gain_db' is not a key of a notch: use one of kind, name, centre_hz, depth_db, pole_radius, bandwidth_hz, "
     "bandwidth_oct, q, decay_s, channels, enabled"),
    ({"normalise": "'peak'"}, 7, "normalise",
     "'normalise' is not a key of a notch: use one of kind, name, centre_hz, depth_db, pole_radius, bandwidth_hz, "
     "bandwidth_oct, q, decay_s, channels, enabled"),
    ({"centre_hz": None}, 1, "centre_hz",
     "centre_hz must be given, got none: add it"),
    ({"depth_db": None}, 1, "depth_db",
     "depth_db must be given, got none: add it"),
    ({"centre_hz": "5"}, 4, "centre_hz",
     "centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 5: raise it"),
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
     "pole_radius must be 0.001 or more and below 1, where a pole rings for ever, got 1: lower it or give decay_s"),
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
        ("filters[1].centre_hz", "filter 'n': centre_hz must be from 10 to 23520 Hz (0.49 of rate_hz 48000), got 5: raise it"),
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
        "pole_radius, bandwidth_hz, bandwidth_oct, q, decay_s, channels, enabled",
        "15: filters[2].bandwidth_hz: filter 'm': width must be given exactly once, as one of pole_radius, bandwidth_hz, "
        "bandwidth_oct, q, decay_s, got q and bandwidth_hz: keep one",
        "18: filters[3].name: name must be unique among filters, got 'n' twice: rename one",
    ]


_EQUALS = "a key must be followed by = and its value"
_PLAIN = "text goes in quotes, numbers stand without units and with a decimal point"
_QUOTES = "text must end with the quotes it began with, got none of them"


@pytest.mark.parametrize(
    ("content", "line", "message"),
    [
        ("rate_hz = 48000\nguard true", 2, f"{_EQUALS}, got no =: write it like guard = true"),
        ("rate_hz", 1, f"{_EQUALS}, got no =: write it like guard = true"),
        ("title = 'a'\ntitle = 'b'\n", 2, "a key must be given once, got it a second time: keep one"),
        ("title = 'a'\ntitle = 'b'", 2, "a key must be given once, got it a second time: keep one"),
        ("filters = [{q = 1, q = 2}]", 1, "a key must be given once, got it a second time: keep one"),
        ("[watch]\n[watch]\n", 2,
         "a table must be begun once, got it a second time: keep one; each filter begins with [[filters]]"),
        ("[watch\nmax_notches = 3", 1,
         "a table must begin with a line like [watch] or [[filters]], got other brackets: close them"),
        ("title = Hall\n", 1, f"a value must be text, a number, true, false or a list, got none of them: {_PLAIN}"),
        ("guard =", 1, f"a value must be text, a number, true, false or a list, got none of them: {_PLAIN}"),
        ("input_db = -6 dB\n", 1, f"a line must end after its value, got more: {_PLAIN}"),
        ("input_db = -6,5\n", 1, f"a line must end after its value, got more: {_PLAIN}"),
        ('title = "a\nguard = true', 1, f"{_QUOTES}: close it"),
        ("title = 'a", None, f"{_QUOTES}: close it"),
        ('title = """a', None, f"{_QUOTES}: close it"),
        ('notes = "C:\\hall"', 1,
         "a backslash in double quotes must be written twice, got one: write two, or use single quotes"),
        ("filters = [1,\n2", 2, "a list must end with ], got none: close it"),
        ("= 3", 1, "a line must be key = value, a table in brackets or a # comment, got none of them: mend it"),
        ('title = "a\x01"', 1,
         "file must be TOML, got a fault in its syntax (Illegal character '\\x01'): write each line as key = value"),
        ("title = " + "[" * 100_000, None, "file must be TOML, got brackets nested too deeply: write it flatter"),
        ("# nothing\n", None, "file must set at least one key, got comments alone: write a preset into it"),
        ("", None, "file must not be empty: choose the right file, or write something into it"),
        (b"title = '\xe9'", 1, "file must be UTF-8 text, got byte 0xe9: save it as UTF-8, or choose the right file"),
    ],
)  # fmt: skip
def test_a_file_that_is_no_toml_is_refused_with_the_line_the_parser_gives(path, content, line, message):
    """Half-edited files are the usual case."""
    assert faults_of(path, content) == [(line, "", message)]


def test_the_largest_preset_of_any_use_is_read_and_a_larger_file_refused(path):
    """A disk image named by mistake must not be read into memory; the fullest bank must still fit."""
    name = "a resonator whose name nearly fills a line of text on any screen"
    save_preset(
        Preset([
            Resonator(f"{name} {number}", 1000 + number / 3, -60.123456789, decay_s=1 / 3, normalise="strike",
                      channels=range(32), enabled=False, origin="watch")
            for number in range(limits.RESONATORS_MAX)
        ]), path
    )  # fmt: skip
    assert path.stat().st_size < limits.PRESET_BYTES == 16 * 2**20
    assert len(load_preset(path).filters) == limits.RESONATORS_MAX
    assert faults_of(path, b"#" * (limits.PRESET_BYTES + 1)) == [
        (None, "", "file must be at most 16 MB, got a larger one: choose the right file")
    ]


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
