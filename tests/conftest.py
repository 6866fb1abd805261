"""What every test run shares: an empty compile cache, settings of the property tests, and the rigs.

Loaded before any test module, and so before Numba and NumPy, which read their environment when imported.
"""

from __future__ import annotations

import os
import shutil
import tempfile

_own_cache = None
if not os.environ.get("NUMBA_CACHE_DIR"):
    # compiled code is kept for the run, so that child processes need not compile again, and for no longer:
    # Numba does not notice a change in a helper of another file
    _own_cache = tempfile.mkdtemp(prefix="liveres-tests-")
    os.environ["NUMBA_CACHE_DIR"] = _own_cache
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
# the matrices here are small: more threads only spin

import hypothesis  # noqa: E402
import pytest  # noqa: E402
from tools import rigs  # noqa: E402

hypothesis.settings.register_profile("searching", deadline=None)
hypothesis.settings.register_profile("repeatable", deadline=None, derandomize=True)
hypothesis.settings.load_profile("repeatable" if rigs.in_ci() else "searching")
# in CI the same examples every time; elsewhere new ones, which find more


def pytest_unconfigure():
    """Remove the compile cache, unless it was somebody else's."""
    if _own_cache is not None:
        shutil.rmtree(_own_cache, ignore_errors=True)
        os.environ.pop("NUMBA_CACHE_DIR", None)


@pytest.fixture
def alsa_rig(tmp_path):
    """A PortAudio device between two files: ``rig.play(x)``, ``rig.run(command)``, ``rig.recorded()``."""
    folder = tmp_path / "alsa"
    folder.mkdir()
    return rigs.AlsaFileRig(folder)


@pytest.fixture
def jack_server(monkeypatch):
    """A JACK server on its dummy driver, 1024 frames a cycle; child processes of the test are led to it."""
    with rigs.JackServer() as server:
        for name, value in server.settings.items():
            monkeypatch.setenv(name, value)
        yield server


@pytest.fixture
def jack_rig(jack_server):
    """A JACK client that plays and records: ``rig.patch("PortAudio")``, ``rig.play(x)``."""
    with rigs.JackRig(jack_server) as rig:
        yield rig
