"""What conftest.py promises to every run: an empty compile cache of its own, or the one it is given."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import hypothesis


def test_the_run_has_a_compile_cache():
    """The other tests here run this one alone and read what it writes."""
    folder = os.environ["NUMBA_CACHE_DIR"]
    print(f"\ncache {folder} {len(os.listdir(folder))}")
    assert Path(folder).is_dir()


def cache_of_a_run(**environment: str) -> tuple[Path, int]:
    """The compile cache of a test run started with ``environment``, and how many files it began with."""
    test = f"{__file__}::{test_the_run_has_a_compile_cache.__name__}"
    inherited = {name: value for name, value in os.environ.items() if name != "NUMBA_CACHE_DIR"}
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "-s", "-p", "no:cacheprovider", test],
        env=inherited | environment, cwd=Path(__file__).parents[2], capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stdout + done.stderr
    _, folder, files = next(line for line in done.stdout.splitlines() if line.startswith("cache ")).split()
    return Path(folder), int(files)


def test_each_run_begins_with_an_empty_compile_cache_and_removes_it():
    """Numba does not notice a changed helper in another file: a kept cache would test old code."""
    (first, first_files), (second, second_files) = cache_of_a_run(), cache_of_a_run()
    assert first != second and first_files == second_files == 0
    assert not first.exists() and not second.exists()


def test_a_compile_cache_that_is_already_set_is_used_and_left(tmp_path):
    """Somebody who measures or inspects compiled code chooses the folder."""
    (tmp_path / "theirs").write_text("")
    assert cache_of_a_run(NUMBA_CACHE_DIR=str(tmp_path)) == (tmp_path, 1)
    assert (tmp_path / "theirs").exists()


def test_property_tests_have_no_deadline():
    """A first call compiles, and a busy machine is no fault."""
    assert hypothesis.settings.default.deadline is None
