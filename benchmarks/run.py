"""All benchmarks: ``python benchmarks/run.py``. A table on the screen, and JSON in benchmarks/results/.

Each figure is the median of several runs, or the worst for what must meet a deadline; comparisons with scipy run in
turn with ours, so that a machine that drifts drifts for both. Set-up and warm-up are outside the timing.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
import scipy.signal
import soundfile

import liveres
from liveres import Notch, Preset, Processor, Resonator

RATE_HZ = 48_000
NOTCHES = [Notch(f"n{k}", 100 * 1.24**k, -12, bandwidth_oct=0.1) for k in range(24)]
RESULTS = Path(__file__).parent / "results"
SPEECH = Path(liveres.__file__).parent / "data" / "speech.flac"


def paired(ours: Callable[[], object], theirs: Callable[[], object], pairs: int = 31) -> tuple[float, float, float]:
    """Median seconds of each, taken in turn, and the median of the ratio ours / theirs pair by pair."""
    ours(), theirs()
    times = [(_time(ours), _time(theirs)) for _ in range(pairs)]
    return (
        statistics.median(mine for mine, _ in times),
        statistics.median(other for _, other in times),
        statistics.median(mine / other for mine, other in times),
    )


def _time(work: Callable[[], object]) -> float:
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def notches_beside_scipy() -> dict:
    """24 notches, stereo, 64-frame calls with state carried over: time of a call, and its ratio to sosfilt."""
    x = np.random.default_rng(0).uniform(-0.3, 0.3, (64, 2)).astype(np.float32)
    p = Processor(Preset(NOTCHES))
    sos, zi = p.sos(), np.zeros((24, 2, 2))

    def theirs() -> None:
        nonlocal zi
        for _ in range(200):
            _, zi = scipy.signal.sosfilt(sos, x, axis=0, zi=zi)

    mine, other, ratio = paired(lambda: [p.process(x) for _ in range(200)], theirs)
    return {"call_us": 1e6 * mine / 200, "sosfilt_call_us": 1e6 * other / 200, "ratio": ratio, "wanted": "ratio at most 1"}


def bank_beside_scipy() -> dict:
    """4,096 resting resonators, mono, 1,024-frame calls: time a resonator and frame, and how often sosfilt's fits in."""
    x = np.random.default_rng(0).uniform(-0.01, 0.01, (1024, 1))
    bank = [Resonator(f"r{k}", 50 + 4 * k, -40, decay_s=1.0) for k in range(4096)]
    p = Processor(Preset(bank, dry_db=float("-inf")), channels=1)
    sos = np.array([[*bank[999].section(RATE_HZ).bandpass()[:3], 1.0, *bank[999].section(RATE_HZ).bandpass()[3:]]])
    long = np.tile(x[:, 0], 32)
    mine, other, ratio = paired(lambda: p.process(x), lambda: scipy.signal.sosfilt(sos, long))
    share = ratio / 4096 * 32
    return {
        "ns": 1e9 * mine / 4096 / 1024, "sosfilt_ns": 1e9 * other / len(long), "times_faster": 1 / share, "wanted": "at least 25"
    }  # fmt: skip


def moving_bank() -> dict:
    """10,000 resonators with centre and decay all moving at once, mono: load of one core at 48 kHz."""
    count, frames = 10_000, 4800
    bank = [Resonator(f"r{k}", 50 + 1.5 * k, -40, decay_s=1.0) for k in range(count)]
    p = Processor(Preset(bank, dry_db=float("-inf")), channels=1)
    x = np.random.default_rng(0).uniform(-0.01, 0.01, (frames, 1))
    for k in range(count):
        p.retune(f"r{k}", centre_hz=60 + 1.6 * k, decay_s=2.0, ramp_s=60.0)
    p.process(x)
    seconds = statistics.median(_time(lambda: p.process(x)) for _ in range(15))
    still_moving = int(p.memory.groups["moving"].sum())
    assert still_moving == -(-count // 32), still_moving
    return {"load_percent": 100 * seconds / (frames / RATE_HZ), "wanted": "load under 60"}


CALLBACK = """
import json, time
from liveres import Live, Notch, Preset
with Live(Preset([Notch(f"n{k}", 100 * 1.24**k, -12, bandwidth_oct=0.1) for k in range(24)]), "system", 64) as live:
    live.unmute()
    time.sleep(10)
    print(json.dumps(live.counters()))
"""


@contextlib.contextmanager
def sound_server() -> Iterator[dict[str, str]]:
    """A JACK server without a sound card, blocks of 64 frames, in real time; yields the environment that leads to it."""
    name = f"liveres-bench-{os.getpid()}"
    server = subprocess.Popen(
        ["jackd", "-n", name, "-R", "-P", "60", "-d", "dummy", "-r", "48000", "-p", "64", "-C", "2", "-P", "2"],
        stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
    )  # fmt: skip
    try:
        time.sleep(2)
        yield {**os.environ, "JACK_DEFAULT_SERVER": name, "JACK_NO_START_SERVER": "1"}
    finally:
        server.terminate()
        server.wait()


def worst_callback() -> dict:
    """24 notches on a real stream of 64-frame blocks: the slowest callback of 10 s as a share of its period."""
    with sound_server() as environment:
        said = subprocess.run([sys.executable, "-c", CALLBACK], env=environment, capture_output=True, text=True, check=True)
    counters = json.loads(said.stdout.splitlines()[-1])
    share = 100 / counters["period_s"]
    return {
        "worst_percent": share * counters["worst_callback_s"], "mean_percent": share * counters["mean_callback_s"],
        "callbacks": counters["callbacks"], "realtime": counters["realtime"], "wanted": "worst under 15",
    }  # fmt: skip


def rendering() -> dict:
    """A ten-minute mono speech file through 24 notches, files and hashes included: times real time."""
    speech, rate_hz = soundfile.read(SPEECH, dtype="int16")
    with tempfile.TemporaryDirectory() as folder:
        source, target = Path(folder) / "in.wav", Path(folder) / "out.wav"
        soundfile.write(source, np.tile(speech, 42), rate_hz)
        preset = Preset(NOTCHES)
        liveres.render(SPEECH, target, preset)
        seconds = statistics.median(_time(lambda: liveres.render(source, target, preset)) for _ in range(3))
        length_s = soundfile.info(source).duration
    return {"times_real_time": length_s / seconds, "wanted": "at least 200"}


def start_up() -> dict:
    """Whole processes with a warm compile cache: --help; and live from the command to its first block of sound."""
    liveres_command = [sys.executable, "-m", "liveres"]

    def help_s() -> float:
        return _time(lambda: subprocess.run([*liveres_command, "--help"], capture_output=True, check=True))

    def live_s(environment: dict[str, str]) -> float:
        began = time.perf_counter()
        with subprocess.Popen(
            [*liveres_command, "live", "--device", "system", "--seconds", "0.5"],
            env=environment, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True,
        ) as child:  # fmt: skip
            # said after the first callback has come
            next(line for line in child.stdout if line.startswith("audio thread"))
            took = time.perf_counter() - began
            child.stdout.read()
        return took

    help_s()
    with sound_server() as environment:
        live_s(environment)
        to_sound = statistics.median(live_s(environment) for _ in range(5))
    return {
        "help_s": statistics.median(help_s() for _ in range(7)), "live_s": to_sound,
        "wanted": "help under 0.3, live under 2",
    }  # fmt: skip


BENCHMARKS = {
    "notches": notches_beside_scipy,
    "bank": bank_beside_scipy,
    "moving": moving_bank,
    "callback": worst_callback,
    "render": rendering,
    "start": start_up,
}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("names", nargs="*", metavar="NAME", help=f"of {', '.join(BENCHMARKS)}; all when left out")
    names = parser.parse_args().names or list(BENCHMARKS)
    results = {}
    for name in names:
        results[name] = BENCHMARKS[name]()
        figures = "  ".join(
            f"{key} {value:.4g}" if isinstance(value, float) else f"{key} {value}"
            for key, value in results[name].items() if key != "wanted"
        )  # fmt: skip
        print(f"{name:9} {figures}   ({results[name]['wanted']})", flush=True)
    commit = subprocess.run(["git", "rev-parse", "--short", "HEAD"], capture_output=True, text=True).stdout.strip()
    governor = Path("/sys/devices/system/cpu/cpu0/cpufreq/scaling_governor")
    machine = {
        "machine": platform.machine(), "python": platform.python_version(), "numpy": np.__version__, "scipy": scipy.__version__,
        "cores": os.cpu_count(), "governor": governor.read_text().strip() if governor.exists() else "not known", "commit": commit,
    }  # fmt: skip
    RESULTS.mkdir(exist_ok=True)
    path = RESULTS / f"{datetime.now(UTC):%Y%m%d-%H%M%S}.json"
    path.write_text(json.dumps({"on": machine, "results": results}, indent=1))
    print(f"written to {path.relative_to(Path.cwd()) if path.is_relative_to(Path.cwd()) else path}")


if __name__ == "__main__":
    main()
