"""Preset files written without loss, into files that people have written in, and over any others."""

import dataclasses
import json
import math
import subprocess
import sys
import tempfile
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from unit.legal import presets

from liveres import load_preset, save_preset
from liveres.engine.settings import Notch, Preset, Resonator
from liveres.errors import ParameterError


@pytest.fixture
def path(tmp_path):
    """Where this test's preset goes."""
    return tmp_path / "p.toml"


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
