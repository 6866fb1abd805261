"""What starting up loads, how long it takes, and that imports point downward only."""

import subprocess
import sys
import time
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
HEAVY = ("numpy", "numba", "llvmlite", "scipy", "soundfile", "sounddevice", "tomlkit", "matplotlib", "rich", "textual")


def loaded_by(code):
    """Names of the heavy modules a fresh interpreter has loaded after running ``code``."""
    script = f"{code}\nimport sys\nprint('loaded:', *(name for name in {HEAVY!r} if name in sys.modules))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=60, check=True, cwd=ROOT)
    return done.stdout.splitlines()[-1].split()[1:]


@pytest.mark.parametrize(
    "code",
    [
        "import liveres",
        "import liveres; liveres.__version__; dir(liveres)",
        "from liveres.cli import main; main(['--help'])",
        "from liveres.cli import main; main(['--version'])",
        "from liveres.cli import main; main(['render', '--help'])",
        "from liveres.cli import main; main(['rendr'])",
    ],
)
def test_asking_for_help_loads_nothing_heavy(code):
    """Help must come at once, also where the sound system or the compiler is broken."""
    assert loaded_by(code) == []


@pytest.mark.parametrize(
    "code, allowed",
    [
        ("from liveres import Notch, Preset", ()),
        ("from liveres import Notch, Preset, load_preset", ()),
        ("import liveres.commands.response", ("numpy",)),
        ("import liveres.commands.check", ("numpy", "soundfile")),
        ("import liveres.hosts.plans", ("numpy", "soundfile")),
        ("import liveres.hosts.portaudio", ()),
    ],
)
def test_light_parts_stay_light(code, allowed):
    """Settings, checks and pictures need no compiler, and offline work no sound system."""
    assert set(loaded_by(code)) <= set(allowed)


def test_rendering_loads_no_sound_system_no_screen_and_no_pictures():
    """A server has neither."""
    assert set(loaded_by("from liveres import render")) & {"sounddevice", "textual", "matplotlib", "rich"} == set()


@pytest.mark.timing
def test_help_comes_within_three_tenths_of_a_second():
    """Best of five, so that another program's hiccup does not count."""
    took = []
    for _ in range(5):
        began = time.perf_counter()
        subprocess.run([sys.executable, "-m", "liveres", "--help"], capture_output=True, check=True, cwd=ROOT)
        took.append(time.perf_counter() - began)
    assert min(took) < 0.3


def test_imports_point_downward_only():
    """Floors hold only as long as nothing reaches up; the contract stands in pyproject.toml."""
    script = "from importlinter.cli import lint_imports_command; lint_imports_command()"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=120, cwd=ROOT)
    assert done.returncode == 0, done.stdout
    assert "Contracts: 1 kept, 0 broken." in done.stdout
