"""The compile cache is where it can be written, is named by the sources, and leaves the host program's setting alone."""

from __future__ import annotations

import os

import numba
import numpy as np
import pytest

from liveres import Preset, Processor, Resonator
from liveres.kernels import _jit, block


def test_a_cache_folder_in_the_environment_is_respected(monkeypatch, tmp_path):
    """Whoever sets it has a reason."""
    monkeypatch.setenv("NUMBA_CACHE_DIR", str(tmp_path))
    assert _jit.cache_dir() == tmp_path and _jit.cache_is_cold()


def test_the_folder_is_the_users_and_named_by_the_sources(monkeypatch, tmp_path):
    """A changed kernel must never run from an old compile."""
    monkeypatch.delenv("NUMBA_CACHE_DIR", raising=False)
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    folder = _jit.cache_dir()
    assert folder.parent == tmp_path / "liveres" and folder.is_dir()
    assert folder == _jit.cache_dir()


def test_a_constant_from_another_floor_names_another_folder(monkeypatch, tmp_path):
    """Bounds of the safety stage are compiled in: changing one must not leave the old one at work."""
    for source in ("kernels/_jit.py", "limits.py", "theory/poles.py", "theory/true_peak.py"):
        (tmp_path / source).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / source).write_text("a = 1\n")
    monkeypatch.delenv("NUMBA_CACHE_DIR", raising=False)
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    monkeypatch.setattr(_jit, "__file__", str(tmp_path / "kernels/_jit.py"))
    before = _jit.cache_dir()
    (tmp_path / "limits.py").write_text("a = 2\n")
    assert _jit.cache_dir() != before


def test_where_the_users_folder_cannot_be_written_a_temporary_one_serves(monkeypatch):
    """Numba would refuse to import; a read-only home is common on kiosks and in containers."""
    monkeypatch.delenv("NUMBA_CACHE_DIR", raising=False)
    monkeypatch.setenv("XDG_CACHE_HOME", "/proc/nowhere")
    folder = _jit.cache_dir()
    assert folder.name.startswith("liveres-") and "proc" not in str(folder)
    # nobody else may leave compiled code there for us to run
    assert folder.stat().st_mode & 0o077 == 0 and folder.stat().st_uid == os.getuid()


def test_numbas_own_setting_is_put_back():
    """Other compiled code in the same program keeps its cache."""
    before = numba.config.CACHE_DIR
    with _jit._own_cache():
        pass
    assert numba.config.CACHE_DIR == before


def test_denormals_are_flushed_inside_and_work_again_outside():
    """The mode belongs to the caller's thread: leaving it changed would spoil other people's arithmetic."""
    smallest = np.float64(5e-324)
    p = Processor(Preset([Resonator("r", 1000, 0, decay_s=0.01)]), channels=1)
    p.process(np.full((64, 1), 1e-310))
    assert not p.memory.ringing.any()
    assert smallest * np.float64(1.0) == smallest and smallest > 0


@pytest.mark.parametrize("name", ["advance", "carry_out"])
def test_entries_are_compiled_when_imported(name):
    """Nothing may compile while sound is running."""
    assert getattr(block, name).signatures
