"""The house rules that a machine can check: short modules, documents that name what exists, commands that work."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
MODULES = sorted((ROOT / "liveres").rglob("*.py"))


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_module_is_short_and_says_what_it_is(path):
    """Four hundred lines a file, and sixty a function besides a long docstring, are what a reader holds in mind."""
    text = path.read_text()
    assert len(text.splitlines()) <= 400
    tree = ast.parse(text)
    assert not tree.body or ast.get_docstring(tree)
    for node in ast.walk(tree):
        if isinstance(node, ast.FunctionDef):
            assert node.end_lineno - node.lineno < 75, node.name


def test_the_top_level_holds_what_was_agreed():
    """A stranger finds the right place by looking at a dozen names."""
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True).stdout.split()
    names = {name.split("/")[0] for name in listed if not name.startswith(".")}
    assert names <= {"README.md", "DEVELOPERS.md", "pyproject.toml", "liveres", "presets", "tests", "benchmarks"}


@pytest.mark.parametrize("document", ["README.md", "DEVELOPERS.md", "tests/README.md", "benchmarks/README.md"])
def test_documents_name_files_that_exist(document):
    """A wrong path costs a newcomer more than none."""
    text = (ROOT / document).read_text()
    for name in re.findall(r"`((?:liveres|presets|tests|benchmarks|unit|reference|properties|realtime|hygiene)/[\w./-]+)`", text):
        assert (ROOT / name).exists() or (ROOT / "tests" / name).exists() or name == "benchmarks/results/", name


def test_every_module_is_on_the_developers_map():
    """The map of floors is read before the code."""
    text = (ROOT / "DEVELOPERS.md").read_text()
    for path in MODULES:
        if path.stem not in ("__init__", "__main__") and "commands" != path.parent.name:
            assert re.search(rf"\b{path.stem}\b", text), path


def test_the_readmes_python_example_runs():
    """What stands there is copied."""
    (example,) = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(), re.S)
    subprocess.run([sys.executable, "-c", example], check=True, cwd=ROOT)


def test_the_readmes_preset_and_moves_are_legal(tmp_path):
    """What stands there is copied."""
    text = (ROOT / "README.md").read_text()
    (preset,), (moves,) = re.findall(r"```toml\n(.*?)```", text, re.S), re.findall(r"```csv\n(.*?)```", text, re.S)
    (tmp_path / "p.toml").write_text(preset)
    (tmp_path / "m.csv").write_text(moves)
    words = ["check", "--preset", str(tmp_path / "p.toml"), str(tmp_path / "p.toml"), str(tmp_path / "m.csv")]
    done = subprocess.run([sys.executable, "-m", "liveres", *words], capture_output=True, text=True)
    assert done.returncode == 0, done.stdout + done.stderr


def test_the_readmes_first_command_does_what_it_says(tmp_path):
    """Setting up is the test run's own business; what is run after it is the same line."""
    line = re.search(r"<!-- main job -->\n```sh\n(.*)\n```", (ROOT / "README.md").read_text())[1]
    words = line.split("&&")[-1].split()[1:]
    words[2] = str(tmp_path / words[2])
    done = subprocess.run([sys.executable, "-m", "liveres", *words], cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0 and "true peak" in done.stdout
    assert (tmp_path / "spoken-ah.wav").stat().st_size > 1_000_000


def test_the_lint_is_clean():
    """Style is settled by a tool, not by argument."""
    done = subprocess.run([sys.executable, "-m", "ruff", "check", "--no-cache", "."], cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stdout
