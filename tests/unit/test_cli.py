"""The command line: what it prints, what it returns, and one clear message for everything that can be wrong."""

import csv
import json
import os
import subprocess
import sys

import numpy as np
import pytest
import soundfile
from unit.sounds import HALL, MOVES, STRAIGHT, noise, write

import liveres
from liveres import cli
from liveres.engine.moves import save_moves
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.presets import save_preset


@pytest.fixture
def desk(tmp_path, monkeypatch):
    """A folder with one of everything, which the test then works in."""
    monkeypatch.chdir(tmp_path)
    write("in.wav", noise(4800))
    save_preset(HALL, "hall.toml")
    save_preset(STRAIGHT, "straight.toml")
    save_moves(MOVES[:1], "moves.csv")
    (tmp_path / "bad.toml").write_text("ceiling_db = 3\nsize = 1\n")
    (tmp_path / "bad.csv").write_text("frame,filter,field,value\n0,nobody,gain_db,0\n")
    (tmp_path / "text.wav").write_text("not a sound at all\n")
    (tmp_path / "take.ogg").write_bytes(b"OggS\x00\x02\xff")
    (tmp_path / "bare").mkdir()
    return tmp_path


def liveres_says(words, capsys):
    """Exit code, standard output and standard error without the notice a first compilation gives."""
    code = cli.main(words.split() if isinstance(words, str) else words)
    out, errors = capsys.readouterr()
    return code, out, "".join(line for line in errors.splitlines(True) if "compiling the engine" not in line)


NO_FOLDER = "is a folder and must be a file: give the folder to render into as -o DIR"
RENDER = "render in.wav out.wav --preset hall.toml"
WRONG = [
    ([""], 2, "a command must be given, got none: use one of render, response, check, devices, live, rehearse"),
    (f"{RENDER} -x", 2, "liveres render has no option -x: see liveres render --help"),
    ("devices -3", 2, "liveres devices has no use for -3: see liveres devices --help"),
    ("-x", 2, "liveres has no option -x: see liveres --help"),
    ("render in.wav -o hall.toml --preset hall.toml", 2, "-o must be a folder, got the file hall.toml: choose another name"),
    (
        "render in.wav -o hall.toml/x --preset hall.toml", 1,
        "hall.toml/x: it must be a folder, and a file is in its way: choose another name",
    ),
    ("render in.wav out.wav --preset bare", 2, "bare: it must be a file, got a folder: name a file inside it"),
    (
        "check /dev/zero", 2, "/dev/zero: it must be an ordinary file, got a device or pipe: save the text in a file first",
    ),
    (
        "check take.ogg", 2,
        "take.ogg: it must be a sound file in WAV, RF64, W64, CAF, AIFF, FLAC, got something else: convert it first",
    ),
    ("rendr", 2, "there is no command rendr: did you mean render?"),
    ("--verson", 2, "liveres has no option --verson: did you mean --version?"),
    ("render in.wav out.wav --prest hall.toml", 2, "liveres render has no option --prest: did you mean --preset?"),
    ("render in.wav out.wav", 2, "liveres render needs --preset: see liveres render --help"),
    ("render --preset hall.toml", 2, "liveres render needs IN: see liveres render --help"),
    ("render in.wav --preset hall.toml", 2, "render takes IN and OUT, got 1 names: give both, or -o DIR for several inputs"),
    (
        "render in.wav out.wav x.wav --preset hall.toml", 2,
        "render takes IN and OUT, got 3 names: give both, or -o DIR for several inputs",
    ),
    ("render in.wav out.wav --preset", 2, "--preset: expected one argument: see liveres render --help"),
    (f"{RENDER} --block 0", 2, "--block must be from 1 to 65536 frames, got 0: 64 to 1024 is usual"),
    (f"{RENDER} --block 1.5", 2, "--block must be a whole number, got 1.5: round it"),
    (f"{RENDER} --block many", 2, "--block must be a number, got 'many': write digits"),
    (f"{RENDER} --tail 601", 2, "--tail must be from 0 to 600 s, got 601: 60 s outlasts everything a preset can ring"),
    (f"{RENDER} --tail nan", 2, "--tail must be from 0 to 600 s, got nan: 60 s outlasts everything a preset can ring"),
    ("render in.wav bare --preset hall.toml", 2, f"bare {NO_FOLDER}"),
    ("render bare out.wav --preset hall.toml", 2, f"bare {NO_FOLDER}"),
    (
        "render bare -o out --preset hall.toml", 2,
        "bare: it must hold sound files (.wav, .rf64, .w64, .caf, .flac, .aif, .aiff, .aifc), got none: name another folder",
    ),
    ("render none.wav out.wav --preset hall.toml", 2, "none.wav: there is no such file: check the name"),
    (
        "render text.wav out.wav --preset hall.toml", 2,
        "text.wav: it must be a sound file in WAV, RF64, W64, CAF, AIFF, FLAC, got something else: convert it first",
    ),
    (
        "render in.wav in.wav --preset hall.toml", 2,
        "in.wav: it must not be a file this render reads, got the same file as in.wav: choose another name",
    ),
    (
        "render in.wav out.mp3 --preset hall.toml", 2,
        "out.mp3: the name must end in one of .wav, .rf64, .w64, .caf, .flac, .aif, .aiff, .aifc, got .mp3: "
        "the ending chooses the container",
    ),
    (
        "render in.wav no/out.wav --preset hall.toml", 1,
        "no/out.wav: folder {desk}/no must exist, got none: make it or choose another place",
    ),
    ("render in.wav out.wav --preset none.toml", 2, "none.toml: file must exist, got none: check the name and the folder"),
    (
        f"{RENDER} --moves bad.csv", 2,
        "bad.csv:2: filter: filter must be one of the preset's, got 'nobody': use one of hum, ring, bell",
    ),
    (f"{RENDER} --report no/r.json", 2, "--report must lie in a folder that exists, got no/r.json: make the folder first"),
    (
        f"{RENDER} --report hall.toml", 2,
        "--report must be a file of its own, got hall.toml, which this render uses: choose another name",
    ),
    ("response", 2, "liveres response needs --preset: see liveres response --help"),
    ("response --preset none.toml", 2, "none.toml: file must exist, got none: check the name and the folder"),
    (
        "response --preset hall.toml --rate 7999", 2,
        "--rate must be from 8000 to 192000 Hz, got 7999: use a sample rate sound devices and files have",
    ),
    ("response --preset hall.toml --channel 32", 2, "--channel must be from 0 to 31, got 32: channels are counted from 0"),
    ("response --preset hall.toml --plot x.pdf", 2, "--plot must end in .png or .svg, got x.pdf: choose one of them"),
    (
        "response --preset hall.toml --sos no/x.csv", 1,
        "no/x.csv: folder {desk}/no must exist, got none: make it or choose another place",
    ),
    ("check", 2, "liveres check needs FILE: see liveres check --help"),
    ("devices now", 2, "liveres devices has no use for now: see liveres devices --help"),
    ("live --channels 33", 2, "--channels must be from 1 to 32, got 33: use fewer channels, or several runs"),
    ("live --seconds 0", 2, "--seconds must be from 0.1 to 604800 s, got 0: leave it out to run until stopped"),
]


@pytest.mark.parametrize("words, code, message", WRONG, ids=[str(words) for words, _, _ in WRONG])
def test_everything_wrong_gets_one_clear_message_and_the_right_exit_code(desk, capsys, words, code, message):
    """A script reads the code, a person the line; neither wants a traceback."""
    found = liveres_says(words, capsys)
    assert found == (code, "", f"liveres: {message.format(desk=desk)}\n")
    assert not os.path.exists("out.wav")


def test_a_faulty_preset_is_told_with_all_its_faults_at_once(desk, capsys):
    """One round of mending, not one for each fault."""
    code, out, errors = liveres_says("render in.wav out.wav --preset bad.toml", capsys)
    lines = errors.splitlines()
    assert (code, out) == (2, "") and len(lines) == 2
    assert lines[0].startswith("liveres: bad.toml:1: ceiling_db: ") and lines[1].startswith("liveres: bad.toml:2: size: ")


@pytest.mark.parametrize(
    "words",
    [
        "render in.wav --preset hall.toml out.wav --quiet",
        "render --preset hall.toml in.wav --tail 2 out.wav",
        "check hall.toml moves.csv --preset hall.toml in.wav",
        "check --json hall.toml --preset hall.toml moves.csv",
        "check -- -hall.toml",
        "check hall.toml -- --preset",
    ],
)
def test_files_may_stand_before_between_and_after_options(desk, capsys, words):
    """People add what they forgot at the end of the line; and after -- nothing is an option."""
    for name in ("-hall.toml", "--preset"):
        (desk / name).write_bytes((desk / "hall.toml").read_bytes())
    assert liveres_says(words, capsys)[0] == 0
    assert os.path.exists("out.wav") == words.startswith("render")


def test_a_folder_may_be_named_right_after_its_letter(desk, capsys):
    """-oDIR is as good as -o DIR, and is not taken for an option nobody knows."""
    assert liveres_says("render in.wav -odone --preset hall.toml --quiet", capsys)[0] == 0
    assert os.listdir("done") == ["in.wav"]


# --- help -------------------------------------------------------------------------------------


@pytest.mark.parametrize("words", ["--help", "-h", ""])
def test_help_says_first_what_it_is_and_minds_the_ears(capsys, words):
    """The first lines are all that many people read."""
    code, out, errors = liveres_says(words, capsys)
    assert (code, errors) == (0, "")
    assert out.startswith("A real-time resonator and notch host:")
    assert "Mind your ears." in out
    for name in ("render", "response", "check", "devices", "live"):
        assert f"\n    {name} " in out


@pytest.mark.parametrize("name", ["render", "response", "check", "devices", "live"])
def test_the_help_of_each_command_ends_with_examples_it_would_take(capsys, name):
    """An example that is itself wrong teaches the wrong thing."""
    code, out, errors = liveres_says([name, "--help"], capsys)
    assert (code, errors) == (0, "")
    examples = out.split("examples:\n")[1].splitlines()
    assert examples
    for line in examples:
        words = line.split()
        assert words[0] == "liveres"
        assert cli.parse([word.strip('"') for word in words[1:]]).command == name


def test_the_version_is_that_of_the_package(capsys):
    """A report of a fault needs it."""
    assert liveres_says("--version", capsys) == (0, f"liveres {liveres.__version__}\n", "")


# --- render -----------------------------------------------------------------------------------


def without_the_ring(errors):
    """What else was said: the hall's resonator is cut off in every render here, and that is told."""
    return "".join(line for line in errors.splitlines(keepends=True) if "ends while it still rings" not in line)


def test_render_says_what_came_out(desk, capsys):
    """Length, level and the hash to compare with."""
    code, out, errors = liveres_says(f"{RENDER} --moves moves.csv --tail 0.5 --report r.json", capsys)
    report = json.loads((desk / "r.json").read_text())
    assert (code, without_the_ring(errors)) == (0, "")
    assert out.startswith("out.wav: 0.60 s, 2 x 48000 Hz, PCM_16, peak ")
    assert out.rstrip().endswith(f"samples {report['samples_sha256']}")
    assert report["frames"] == soundfile.info("out.wav").frames == 28_800 and report["moves_made"] == 1


def test_render_with_json_prints_the_report_and_nothing_else(desk, capsys):
    """A script parses all of it."""
    code, out, errors = liveres_says(f"{RENDER} --json", capsys)
    assert (code, without_the_ring(errors)) == (0, "") and json.loads(out)["output"] == "out.wav"


def test_render_can_be_quiet_but_not_about_what_is_missing(desk, capsys):
    """A file cut short is news even then."""
    code, out, errors = liveres_says(f"{RENDER} --quiet", capsys)
    assert (code, out, without_the_ring(errors)) == (0, "", "")
    held = (desk / "in.wav").read_bytes()
    (desk / "in.wav").write_bytes(held[: len(held) - 4000])
    code, out, errors = liveres_says(f"{RENDER} --quiet", capsys)
    assert (code, out) == (0, "")
    assert without_the_ring(errors) == (
        "liveres: out.wav: in.wav is cut short: its header promises 4800 frames, 3800 can be read, and those were rendered\n"
    )


def test_a_folder_is_rendered_into_another_and_one_bad_file_makes_exit_code_1(desk, capsys):
    """The good ones are there, the bad one is named, the script knows."""
    (desk / "takes").mkdir()
    for name in ("a", "b"):
        write(f"takes/{name}.wav", noise(2000))
    (desk / "takes" / "bad.wav").write_text("no sound")
    code, out, errors = liveres_says("render takes -o done --preset hall.toml --report done/r.json", capsys)
    assert code == 1
    assert sorted(line.split(":")[0] for line in out.splitlines()) == ["done/a.wav", "done/b.wav"]
    assert without_the_ring(errors) == (
        "liveres: takes/bad.wav: it must be a sound file in WAV, RF64, W64, CAF, AIFF, FLAC, got something else: "
        "convert it first\n"
    )
    report = json.loads((desk / "done" / "r.json").read_text())
    assert [one["input"] for one in report["renders"]] == ["takes/a.wav", "takes/b.wav"] and len(report["errors"]) == 1
    assert sorted(os.listdir("done")) == ["a.wav", "b.wav", "r.json"]


def test_a_report_that_would_fall_on_an_output_is_refused(desk, capsys):
    """The sound would be lost under its own report."""
    code, _, errors = liveres_says("render in.wav -o done --preset hall.toml --report done/in.wav", capsys)
    assert (code, errors) == (
        2, "liveres: --report must be a file of its own, got done/in.wav, which this render uses: choose another name\n",
    )


# --- response ---------------------------------------------------------------------------------


def test_response_prints_a_row_a_filter_and_the_totals(desk, capsys):
    """What a person needs to judge a preset by."""
    code, out, errors = liveres_says("response --preset hall.toml", capsys)
    assert (code, errors) == (0, "")
    rows = [line.split() for line in out.splitlines()]
    assert [row[0] for row in rows[2:6]] == ["name", "hum", "ring", "bell"]
    assert "largest steady gain, every channel: +3.52 dB at 440.000 Hz" in out
    assert "longest decay: 2 s" in out and "held to -4.00 dBFS, 3.00 dB under the ceiling" in out


def test_response_tells_the_channels_apart(desk, capsys):
    """A filter on one loudspeaker is not on the other."""
    filters = [Resonator("a", 500.0, 0.0, decay_s=0.5), Notch("b", 500.0, -20.0, q=5.0, channels=[1, 3])]
    save_preset(Preset(filters), "four.toml")
    _, out, _ = liveres_says("response --preset four.toml --json", capsys)
    assert [one["channels"] for one in json.loads(out)["totals"]] == ["channels 0, 2 and all others", "channels 1, 3"]
    _, out, _ = liveres_says("response --preset four.toml --channel 1 --json", capsys)
    assert [one["channels"] for one in json.loads(out)["totals"]] == ["channel 1"]
    _, out, _ = liveres_says("response --preset four.toml --channel 0 --json", capsys)
    assert [one["name"] for one in json.loads(out)["filters"]] == ["a"]


def test_response_shows_the_trim_the_engine_would_use(desk, capsys):
    """Two ways of reckoning one number would drift apart."""
    save_preset(Preset([Resonator("a", 500.0, 6.0, decay_s=0.5)], dry_db=-6.0, trim=True, guard=False), "trim.toml")
    _, out, _ = liveres_says("response --preset trim.toml --json", capsys)
    result = json.loads(out)
    assert result["trim_db"] < -6.0 and result["totals"][0]["gain_db"] <= -1.0 + 1e-9
    tone = np.sin(2 * np.pi * 500 * np.arange(144_000) / 48_000)[:, None]
    y = liveres.Processor(liveres.load_preset("trim.toml"), 48_000, 1).process(tone)
    assert 20 * np.log10(np.max(np.abs(y[-48_000:]))) == pytest.approx(result["totals"][0]["gain_db"], abs=0.01)


def test_response_says_when_trim_has_no_room(desk, capsys):
    """The engine refuses such a preset; asking about it tells why."""
    save_preset(Preset([Resonator("a", 500.0, 6.0, decay_s=0.5)], trim=True), "full.toml")
    code, out, _ = liveres_says("response --preset full.toml --plot full.png", capsys)
    assert code == 0 and "trim: the dry sound alone reaches the ceiling, and no engine takes this preset: lower dry_db" in out


def test_response_writes_sections_with_all_their_digits(desk, capsys):
    """Read back, they are the same bits the engine runs on."""
    assert liveres_says("response --preset hall.toml --sos sections.csv", capsys)[0] == 0
    with open("sections.csv", newline="") as file:
        head, *rows = csv.reader(file)
    assert head == ["kind", "name", "b0", "b1", "b2", "a0", "a1", "a2"]
    assert [row[:2] for row in rows] == [["notch", "hum"], ["notch", "ring"], ["resonator", "bell"]]
    chain = np.array([[float(number) for number in row[2:]] for row in rows if row[0] == "notch"])
    assert np.array_equal(chain, liveres.Processor(HALL).sos())


@pytest.mark.parametrize("name, mark", [("x.png", b"\x89PNG"), ("x.svg", b"<?xml"), ("X.SVG", b"<?xml")])
@pytest.mark.parametrize("preset", [HALL, STRAIGHT, Preset([Resonator("r", 5000.0, 0.0, q=20)], dry_db=float("-inf"))])
def test_response_draws_a_picture(desk, capsys, name, mark, preset):
    """Of notches and resonators, of either alone, of nothing; the same preset gives the same bytes."""
    save_preset(preset, "drawn.toml")
    assert liveres_says(f"response --preset drawn.toml --plot {name}", capsys)[0] == 0
    first = (desk / name).read_bytes()
    assert first.startswith(mark) and len(first) > 20_000
    liveres_says(f"response --preset drawn.toml --plot {name}", capsys)
    assert (desk / name).read_bytes() == first


def test_response_says_in_the_picture_which_channels_it_shows(desk, capsys):
    """One channel's curve must not pass for that of all; a legend explains every mark; decays read as plain numbers."""
    save_preset(Preset([Resonator("a", 500.0, 0.0, decay_s=0.5), Notch("b", 99.0, -9.0, q=5.0, channels=[1])]), "two.toml")
    assert liveres_says("response --preset two.toml --plot two.svg", capsys)[0] == 0
    title = "two   channel 0 and all others (the others differ: - -channel N draws one), 48000 Hz"
    assert f"<!-- {title} -->" in picture_words("two.svg")
    assert liveres_says("response --preset two.toml --plot two.svg --channel 1", capsys)[0] == 0
    words = picture_words("two.svg")
    assert "<!-- two   channel 1, 48000 Hz -->" in words
    for mark in ("notch poles", "notch zeros", "resonator poles", "resonator zeros", "0.1", "1"):
        assert f"<!-- {mark} -->" in words


def picture_words(path):
    """Comments of an SVG picture: the words its letters were drawn from, two hyphens parted, as XML wants it."""
    with open(path, encoding="utf-8") as file:
        return [line.strip() for line in file if "<!--" in line]


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX homes")
def test_a_picture_is_drawn_without_a_word_where_the_home_cannot_be_written(desk):
    """A machine in a rack often runs as a user without a home; a script takes words on standard error for a fault."""
    (desk / "file").write_bytes(b"")
    homes = dict.fromkeys(("HOME", "XDG_CONFIG_HOME", "XDG_CACHE_HOME"), str(desk / "file" / "home"))
    env = {key: value for key, value in os.environ.items() if key != "MPLCONFIGDIR"} | homes
    done = run(["response", "--preset", "hall.toml", "--plot", "x.png"], env=env)
    assert (done.returncode, done.stderr) == (0, "") and os.path.exists("x.png")


def test_response_of_no_filters_is_an_answer_too(desk, capsys):
    """Nothing is also something that one can ask about."""
    code, out, _ = liveres_says("response --preset straight.toml", capsys)
    assert code == 0 and "no filters" in out and "nothing rings" in out


# --- check ------------------------------------------------------------------------------------


def test_check_tells_good_files_from_bad_ones(desk, capsys):
    """One line each, by what they are and not only by what they are called."""
    (desk / "preset.txt").write_bytes((desk / "hall.toml").read_bytes())
    (desk / "moves.txt").write_bytes(b"# by hand\n" + (desk / "moves.csv").read_bytes())
    (desk / "sound.bin").write_bytes((desk / "in.wav").read_bytes())
    words = "check hall.toml moves.csv in.wav preset.txt moves.txt sound.bin --preset hall.toml"
    assert liveres_says(words, capsys) == (
        0,
        "hall.toml: OK, preset: 2 notches, 1 resonator, 48000 Hz\n"
        "moves.csv: OK, moves: 1 move, the last at 0.016 s\n"
        "in.wav: OK, sound: WAV PCM_16, 2 channels, 48000 Hz, 0.10 s\n"
        "preset.txt: OK, preset: 2 notches, 1 resonator, 48000 Hz\n"
        "moves.txt: OK, moves: 1 move, the last at 0.016 s\n"
        "sound.bin: OK, sound: WAV PCM_16, 2 channels, 48000 Hz, 0.10 s\n",
        "",
    )


def test_check_names_every_fault_and_ends_with_2(desk, capsys):
    """A sound file is read to its end, for a header tells little."""
    sound = noise(4800)
    sound[100, 0], sound[200, 1], sound[300, 0], sound[301, 0] = np.nan, np.inf, -1e30, 16.0
    write("nan.wav", sound, "FLOAT")
    held = (desk / "in.wav").read_bytes()
    (desk / "cut.wav").write_bytes(held[: len(held) - 4000])
    code, out, errors = liveres_says("check hall.toml bad.toml bad.csv moves.csv cut.wav nan.wav none.toml bare", capsys)
    lines = errors.splitlines()
    assert code == 2 and out == "hall.toml: OK, preset: 2 notches, 1 resonator, 48000 Hz\n"
    assert lines[0].startswith("liveres: bad.toml:1: ceiling_db: ") and lines[1].startswith("liveres: bad.toml:2: size: ")
    assert lines[2:] == [
        "liveres: bad.csv: moves are for one preset, got none: name it with --preset",
        "liveres: moves.csv: moves are for one preset, got none: name it with --preset",
        "liveres: cut.wav: it must hold the 4800 frames its header promises, got 3800: copy or record it again",
        "liveres: nan.wav: every sample must be a number from -16 to 16, where 1 is full scale, "
        "got 3 that are not: export it again",
        "liveres: none.toml: file must exist, got none: check the name and the folder",
        "liveres: bare: it must be a file, got a folder: name a file inside it",
    ]


def test_check_counts_the_samples_that_a_render_would_trap(desk, capsys):
    """Two ways of counting one fault would leave a person wondering which to believe."""
    sound = np.zeros((100, 1))
    sound[1:6, 0] = np.nan, np.inf, 1e30, -16.0, np.nextafter(np.float32(16), np.float32(17))
    write("odd.wav", sound, "FLOAT")
    assert liveres_says("check odd.wav", capsys)[2].endswith("got 4 that are not: export it again\n")
    report = json.loads(liveres_says("render odd.wav out.wav --preset straight.toml --json", capsys)[1])
    assert report["meters"]["traps"]["input"] == 4


def test_check_with_json_says_the_same_to_a_script(desk, capsys):
    """Kind, verdict and faults of every file."""
    code, out, _ = liveres_says("check in.wav bad.toml --json", capsys)
    good, bad = json.loads(out)["files"]
    assert code == 2 and good["ok"] and good["kind"] == "sound" and good["faults"] == []
    assert not bad["ok"] and bad["kind"] == "preset" and len(bad["faults"]) == 2


# --- the edges of the program -----------------------------------------------------------------


def run(words, **keywords):
    return subprocess.run([sys.executable, "-m", "liveres", *words], capture_output=True, text=True, timeout=120, **keywords)


def test_it_runs_as_a_module_and_passes_its_exit_code_on(desk):
    """The way that works without an installed script."""
    done = run(["check", "hall.toml", "bad.toml"])
    assert done.returncode == 2 and done.stdout.startswith("hall.toml: OK") and "Traceback" not in done.stderr


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX pipes")
def test_a_reader_that_leaves_early_is_no_error(desk):
    """As in: liveres response --preset big.toml | head."""
    save_preset(Preset([Resonator(f"r{i}", 100.0 + i, -40.0, decay_s=1.0) for i in range(2000)]), "big.toml")
    command = [sys.executable, "-m", "liveres", "response", "--preset", "big.toml"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        process.stdout.readline()
        process.stdout.close()
        assert process.stderr.read() == ""
        assert process.wait(timeout=60) == 1


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs the device that is always full")
def test_an_output_that_cannot_be_written_is_told(desk):
    """What was asked for did not arrive."""
    with open("/dev/full", "w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "liveres", "response", "--preset", "hall.toml"], stdout=full, stderr=subprocess.PIPE, text=True
        )
    assert done.returncode == 1 and done.stderr == "liveres: the system refused: No space left on device\n"


def test_a_name_the_terminal_cannot_write_is_written_all_the_same(desk):
    """A filter may be called anything; a terminal may know less."""
    save_preset(Preset([Notch("grüße ♫", 100.0, -6.0, q=2)]), "names.toml")
    done = run(["response", "--preset", "names.toml"], env={**os.environ, "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"})
    assert done.returncode == 0 and "gr\\xfc\\xdfe \\u266b" in done.stdout


def test_an_error_nobody_foresaw_is_one_line_too(desk, capsys, monkeypatch):
    """A fault of the program's own: still no traceback, but the way to one."""

    def fail(*arguments):
        raise ZeroDivisionError("division by zero")

    monkeypatch.setattr("liveres.commands.check.load_preset", fail)
    assert liveres_says("check hall.toml", capsys) == (
        1, "",
        "liveres: an error nobody foresaw, ZeroDivisionError: division by zero; python -X dev -m liveres shows where\n",
    )
