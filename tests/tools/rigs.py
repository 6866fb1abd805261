"""Two rigs that drive a real PortAudio stream where there is no sound card.

AlsaFileRig : PortAudio's ALSA path between two files. Runs far faster than time and loses nothing, so results can be
    compared to the bit; it cannot show lateness, for nothing paces it.
JackServer and JackRig : a JACK server on its dummy driver, and a client in this process that plays into another
    program and records what comes back. In time, or freewheeling when exactness is wanted; it can be killed mid-way.

PortAudio fixes its list of devices when it starts, so whatever uses a rig runs in a child process with the rig's
``environment``. Linux only.
"""

from __future__ import annotations

import contextlib
import ctypes.util
import functools
import itertools
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
import types
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import IO

import numpy as np
import pytest

RATE_HZ = 48_000
_ALSA_CONF = Path("/usr/share/alsa/alsa.conf")
_PARTS: dict[str, tuple[str, Callable[[], bool]]] = {
    "libportaudio": ("libportaudio2", lambda: ctypes.util.find_library("portaudio") is not None),
    "ALSA's configuration": ("libasound2-data", _ALSA_CONF.exists),
    "jackd": ("jackd2", lambda: shutil.which("jackd") is not None),
    "libjack": ("libjack-jackd2-0", lambda: ctypes.util.find_library("jack") is not None),
}
# what a rig is made of: its Debian package, and whether it is here


def in_ci() -> bool:
    """True where CI is set in the environment to anything but 0 or false."""
    return os.environ.get("CI", "").lower() not in ("", "0", "false")


def need(*parts: str) -> None:
    """Go on if the named parts of a rig are installed; else skip the test, or fail it where it must not be skipped.

    It must not be where CI is set in the environment, or LIVERES_REQUIRE_JACK is 1. Rigs exist on Linux alone:
    elsewhere the test is skipped whatever is set.
    """
    if sys.platform != "linux":
        pytest.skip("the rigs exist on Linux only")
    missing = [part for part in parts if not _PARTS[part][1]()]
    if not missing:
        return
    packages = " ".join(_PARTS[part][0] for part in missing)
    message = f"{' and '.join(missing)} must be installed for this test: sudo apt install {packages}"
    if in_ci() or os.environ.get("LIVERES_REQUIRE_JACK") == "1":
        pytest.fail(message, pytrace=False)
    pytest.skip(message)


def wait_until(condition: Callable[[], bool], timeout_s: float, what: str) -> None:
    """Look every 5 ms until the condition holds; AssertionError after ``timeout_s``."""
    end_s = time.monotonic() + timeout_s
    while not condition():
        if time.monotonic() > end_s:
            raise AssertionError(f"{what} must come within {timeout_s:g} s, has not")
        time.sleep(0.005)


@contextlib.contextmanager
def running(
    command: Sequence[str], environment: Mapping[str, str], ready: str, timeout_s: float = 30.0
) -> Iterator[subprocess.Popen[bytes]]:
    """A child process, from when it has written ``ready`` until the block ends; then it is interrupted as by Ctrl-C.

    It is killed only if that does not end it in 10 s: a JACK server waits 6 s for a client that just vanished.

    Raises : AssertionError - it ends or ``timeout_s`` passes before it is ready; what it wrote is in the message
    """
    with (
        tempfile.TemporaryFile() as said,
        subprocess.Popen(command, env=environment, stdin=subprocess.DEVNULL, stdout=said, stderr=said) as child,
    ):
        try:
            wait_until(lambda: child.poll() is not None or ready in _words(said), timeout_s, f"{ready!r} from {command}")
            if ready not in _words(said):
                raise AssertionError(f"{command} must write {ready!r}, ended with {child.returncode}: {_words(said)}")
            yield child
        finally:
            child.send_signal(signal.SIGINT)
            try:
                child.wait(10.0)
            except subprocess.TimeoutExpired:
                child.kill()


def _words(said: IO[bytes]) -> str:
    # pread, because the position of the file is shared with the child, which goes on writing there
    return os.pread(said.fileno(), 1 << 20, 0).decode(errors="replace")


# --- ALSA -------------------------------------------------------------------------------------


class AlsaFileRig:
    """A PortAudio device named "rig" that reads its input from a file and writes its output to another.

    folder : an empty folder of the test's own
    channels : of both files; the stream must be opened with as many, float32, at 48,000 Hz
    """

    device = "rig"
    QUIET_FRAMES = 65_536
    # zeros after the sound: at the end of its file ALSA hands out its last buffer for ever, which is then silent

    def __init__(self, folder: Path, channels: int = 2):
        need("libportaudio", "ALSA's configuration")
        self.channels = channels
        self._in, self._out, conf = folder / "in.raw", folder / "out.raw", folder / "asound.conf"
        conf.write_text(
            f"<{_ALSA_CONF}>\n"
            f'pcm.rig_out {{ type file slave.pcm {{ type null }} file "{self._out}" format "raw" }}\n'
            f'pcm.rig_in {{ type file slave.pcm {{ type null }} file "/dev/null" infile "{self._in}" format "raw" }}\n'
            'pcm.rig { type asym playback.pcm "rig_out" capture.pcm "rig_in" }\n'
        )
        self._settings = {"ALSA_CONFIG_PATH": str(conf), "JACK_DEFAULT_SERVER": "none", "JACK_NO_START_SERVER": "1"}
        self.play(np.zeros((0, channels), np.float32))

    @property
    def environment(self) -> dict[str, str]:
        """What a child process must be started with."""
        return {**os.environ, **self._settings}

    def play(self, x: np.ndarray) -> None:
        """Lay down what the stream is to hear: (frames, channels) float32, then silence for ever."""
        quiet = np.zeros((self.QUIET_FRAMES, self.channels), "<f4")
        np.concatenate([x.astype("<f4"), quiet]).tofile(self._in)
        self._out.unlink(missing_ok=True)

    def run(self, command: Sequence[str], timeout_s: float = 60.0) -> subprocess.CompletedProcess[str]:
        """Run a child that ends by itself; for one that does not, see ``run_until``."""
        return subprocess.run(command, env=self.environment, capture_output=True, text=True, timeout=timeout_s)

    def run_until(self, command: Sequence[str], frames: int, timeout_s: float = 60.0) -> subprocess.CompletedProcess[str]:
        """Run a child until it has played ``frames``, interrupt it as Ctrl-C does, and wait for its end."""
        with tempfile.TemporaryFile("w+") as out, tempfile.TemporaryFile("w+") as err:
            with subprocess.Popen(command, env=self.environment, stdout=out, stderr=err) as child:
                try:
                    wait_until(
                        lambda: child.poll() is not None or self.recorded_frames >= frames, timeout_s, f"{frames} frames"
                    )
                    child.send_signal(signal.SIGINT)
                    child.wait(timeout_s)
                finally:
                    child.kill()
            out.seek(0), err.seek(0)
            return subprocess.CompletedProcess(command, child.returncode, out.read(), err.read())

    @property
    def recorded_frames(self) -> int:
        """Frames the stream has played so far."""
        return self._out.stat().st_size // (4 * self.channels) if self._out.exists() else 0

    def recorded(self, frames: int = -1) -> np.ndarray:
        """What the stream played: (frames, channels) float32, all of it or the first ``frames``."""
        count = -1 if frames < 0 else frames * self.channels
        samples = np.fromfile(self._out, "<f4", count=count)
        return samples[: len(samples) // self.channels * self.channels].reshape(-1, self.channels)


# --- JACK -------------------------------------------------------------------------------------

_serial = itertools.count()


class JackServer:
    """A JACK server of our own on the dummy driver, up while the ``with`` block runs; other servers are left alone.

    period_frames : frames a cycle
    realtime : ask for real-time scheduling, which the system may refuse to ordinary users
    Raises : AssertionError - it does not answer within 10 s; its own words are in the message
    """

    def __init__(self, period_frames: int = 1024, realtime: bool = False, channels: int = 2):
        need("jackd", "libjack")
        self.name = f"liveres-{os.getpid()}-{next(_serial)}"
        self.period_frames = period_frames
        self._command = [
            "jackd", "-n", self.name, *(("-R", "-P", "60") if realtime else ("-r",)),
            "-d", "dummy", "-r", str(RATE_HZ), "-p", str(period_frames), "-C", str(channels), "-P", str(channels),
        ]  # fmt: skip
        self._killed = False

    @property
    def settings(self) -> Mapping[str, str]:
        """Environment variables that lead JACK programs to this server and keep them from starting one."""
        return {"JACK_DEFAULT_SERVER": self.name, "JACK_NO_START_SERVER": "1"}

    @property
    def environment(self) -> dict[str, str]:
        """What a child process must be started with."""
        return {**os.environ, **self.settings}

    def __enter__(self) -> JackServer:
        self._start()
        return self

    def __exit__(self, *_: object) -> None:
        self._stop()
        if self._killed:
            # a killed server stays in JACK's shared register, which holds eight; one of the same name takes its
            # entry and its memory over, and hands them back when it is stopped in the ordinary way
            self._start()
            self._stop()
        for left in Path("/dev/shm").glob(f"jack_sem.*_{self.name}_*"):
            left.unlink(missing_ok=True)

    @property
    def alive(self) -> bool:
        """True while the server's process runs."""
        return self._process.poll() is None

    def kill(self) -> None:
        """End the server without warning, as a crash or a pulled cable does: for tests of device loss."""
        self._killed = True
        self._process.kill()
        self._process.wait()

    def _start(self) -> None:
        self._log = tempfile.TemporaryFile()
        self._process = subprocess.Popen(self._command, stdin=subprocess.DEVNULL, stdout=self._log, stderr=self._log)
        try:
            wait_until(lambda: not self.alive or self._answers(), 10.0, "an answer of the JACK server")
        except AssertionError as failure:
            failure.add_note(self._stop())
            raise
        if not self.alive:
            raise AssertionError(f"JACK server must stay up, ended at once: {self._stop()}")

    def _stop(self) -> str:
        """End the server in the ordinary way, or by force after 10 s; returns what it said."""
        self._process.terminate()
        try:
            self._process.wait(10.0)
        except subprocess.TimeoutExpired:
            self.kill()
        with self._log as log:
            return _words(log)

    def _answers(self) -> bool:
        jack = _jack()
        try:
            jack.Client("knock", servername=self.name, no_start_server=True).close()
        except jack.JackOpenError:
            return False
        return True


class _Take:
    """One playing of a sound: what to play, what was heard meanwhile, and how far it has come [frames]."""

    def __init__(self, sound: np.ndarray):
        self.sound = sound
        self.heard = np.zeros_like(sound)
        self.at = 0


class JackRig:
    """A JACK client in this process that plays into another program and records what comes back.

    server : a JackServer that is up
    channels : ports each way, rig:o0 ... and rig:i0 ...
    xruns : times the server reported lateness to this client
    """

    def __init__(self, server: JackServer, channels: int = 2):
        jack = _jack()
        self.client = jack.Client("rig", servername=server.name, no_start_server=True)
        self._outs = [self.client.outports.register(f"o{i}") for i in range(channels)]
        self._ins = [self.client.inports.register(f"i{i}") for i in range(channels)]
        self._take = _Take(np.zeros((0, channels), np.float32))
        self.xruns = 0
        self.client.set_process_callback(self._process)
        self.client.set_xrun_callback(self._late)

    def __enter__(self) -> JackRig:
        self.client.activate()
        return self

    def __exit__(self, *_: object) -> None:
        self.client.deactivate()
        self.client.close()

    def patch(self, program: str, timeout_s: float = 20.0) -> None:
        """Wait for a program's ports, cut every link they have, and wire rig -> program -> rig.

        program : its JACK client name, such as PortAudio
        """
        wait_until(
            lambda: all(len(ports) >= len(self._outs) for ports in self._ports(program)), timeout_s, f"ports of {program}"
        )
        sinks, sources = self._ports(program)
        for port in (*sinks, *sources):
            for other in self.client.get_all_connections(port):
                self.client.disconnect(*((other, port) if port.is_input else (port, other)))
        for ours, theirs in zip(self._outs, sinks, strict=False):
            self.client.connect(ours, theirs)
        for theirs, ours in zip(sources, self._ins, strict=False):
            self.client.connect(theirs, ours)

    def play(self, x: np.ndarray, tail_frames: int = 16_384, freewheel: bool = True, timeout_s: float = 30.0) -> np.ndarray:
        """Play ``x`` and ``tail_frames`` of silence; returns as many frames as were recorded meanwhile, float32.

        x : (frames, channels)
        freewheel : run as fast as all programs follow, so that none can be late; else in time
        Raises : AssertionError - not done within ``timeout_s``
        """
        take = _Take(np.concatenate([x, np.zeros((tail_frames, len(self._outs)))]).astype(np.float32))
        if freewheel:
            self.client.set_freewheel(True)
        self._take = take
        try:
            wait_until(lambda: take.at >= len(take.sound), timeout_s, f"{len(take.sound)} frames")
        finally:
            if freewheel:
                self.client.set_freewheel(False)
        return take.heard

    def _ports(self, program: str) -> tuple[list, list]:
        """A program's inputs and outputs, in order."""
        ports = self.client.get_ports(f"^{program}:", is_audio=True)
        return [port for port in ports if port.is_input], [port for port in ports if port.is_output]

    def _process(self, frames: int) -> None:
        # JACK's thread; only it writes to a take, and the test's thread reads heard once at has reached the end
        take = self._take
        start, part = take.at, take.sound[take.at : take.at + frames]
        for channel, (out, into) in enumerate(zip(self._outs, self._ins, strict=True)):
            buffer = out.get_array()
            buffer[:] = 0.0
            buffer[: len(part)] = part[:, channel]
            take.heard[start : start + len(part), channel] = into.get_array()[: len(part)]
        take.at = start + len(part)

    def _late(self, _delay_us: float) -> None:
        self.xruns += 1


@functools.cache
def _jack() -> types.ModuleType:
    """The JACK-Client package, its library told not to write to stderr."""
    import jack

    jack.set_error_function(lambda _message: None)
    jack.set_info_function(lambda _message: None)
    return jack
