"""Rendering many files at once, one on each processor core, so that one failure harms no other.

Workers are fresh processes, each in a pool of its own: one that is killed, as happens when memory runs out, takes no
other's file with it. Its file is rendered once more, in a fresh process and after the others. Workers take their orders
to stop from the parent alone, and stop between two pieces of sound, by an exception, so that no half file is left; a
worker whose parent has died stops by itself.
Thread: control, the main thread of a program.
"""

from __future__ import annotations

import contextlib
import ctypes
import multiprocessing
import os
import signal
import threading
import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from multiprocessing.synchronize import Event
from pathlib import Path

from liveres.errors import LiveresError
from liveres.files import make_folder, temporary_prefix
from liveres.hosts.offline import render
from liveres.hosts.plans import Plan

_GRACE_S = 5.0
# for a worker to clean up after its parent died; a piece of sound takes a small part of it


class Stopped(LiveresError):
    """The render was told to stop before its end."""


@dataclass(frozen=True)
class Outcome:
    """How one render ended: with a report, or with an error's text."""

    plan: Plan
    report: dict | None
    error: str | None


def render_many(
    plans: Iterable[Plan], settings: dict[str, object], on_outcome: Callable[[Outcome], object], workers: int | None = None
) -> None:
    """Render every plan and tell of each as it ends, in whatever order they do.

    settings : the keywords of ``render`` that all share
    workers : processes at once; as many as there are cores when left out
    Raises : whatever interrupts the wait, once every worker has stopped
    """
    waiting = deque(plans)
    killed: set[Plan] = set()
    # plans whose worker was killed; each gets one more
    context = multiprocessing.get_context("spawn")
    stop = context.Event()
    free = [_Worker(context, stop) for _ in range(max(1, min(workers or core_count(), len(waiting))))]
    busy: dict[Future, tuple[_Worker, Plan]] = {}
    try:
        while waiting or busy:
            while waiting and free:
                worker, plan = free.pop(), waiting.popleft()
                busy[worker.begin(plan, settings)] = worker, plan
            ended, _ = wait(busy, return_when=FIRST_COMPLETED)
            for future in ended:
                worker, plan = busy.pop(future)
                free.append(worker)
                if isinstance(future.exception(), BrokenProcessPool):
                    worker.replace(plan)
                    if plan not in killed:
                        killed.add(plan)
                        waiting.append(plan)
                        continue
                on_outcome(_outcome(plan, future))
    except BaseException:
        stop.set()
        raise
    finally:
        for worker in (*free, *(worker for worker, _ in busy.values())):
            worker.close()


class _Worker:
    """One process that renders one file after another."""

    def __init__(self, context: multiprocessing.context.SpawnContext, stop: Event):
        self._context, self._stop = context, stop
        self._process = context.Value(ctypes.c_int64, 0, lock=False)
        self._open()

    def _open(self) -> None:
        orders = (self._stop, self._process)
        self._pool = ProcessPoolExecutor(1, mp_context=self._context, initializer=_begin_worker, initargs=orders)

    def begin(self, plan: Plan, settings: dict[str, object]) -> Future:
        """Have a plan rendered."""
        with _interrupts_held_back():
            return self._pool.submit(_render_one, plan, settings)

    def replace(self, plan: Plan) -> None:
        """Make room for a new process after the one at work on ``plan`` was killed, and clear away what it began."""
        self._pool.shutdown()
        if self._process.value:
            folder = Path(os.path.realpath(plan.out_path)).parent
            for begun in folder.glob(f"{temporary_prefix(self._process.value)}*"):
                with contextlib.suppress(OSError):
                    begun.unlink()
        self._process.value = 0
        self._open()

    def close(self) -> None:
        """Wait for the process to end."""
        self._pool.shutdown(wait=True, cancel_futures=True)


def core_count() -> int:
    """Processor cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _outcome(plan: Plan, future: Future) -> Outcome:
    error = future.exception()
    if error is None:
        return Outcome(plan, future.result(), None)
    if isinstance(error, LiveresError):
        return Outcome(plan, None, str(error))
    if isinstance(error, OSError) and error.strerror:
        return Outcome(plan, None, f"{error.filename or plan.in_path}: the system refused: {error.strerror}")
    if isinstance(error, BrokenProcessPool):
        return Outcome(
            plan, None, f"{plan.in_path}: the process that rendered it was killed, twice: free some memory, or render it alone"
        )
    return Outcome(plan, None, f"{plan.in_path}: the process that rendered it failed ({type(error).__name__}: {error})")


@contextlib.contextmanager
def _interrupts_held_back() -> Iterator[None]:
    """Start processes that ignore Ctrl-C from their first breath: they inherit it, and the parent listens again."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


# --- inside a worker --------------------------------------------------------------------------

_stop: Event
_alone = threading.Event()
# set when this worker is told to stop itself, or its parent has died


def _begin_worker(stop: Event, process: ctypes.c_int64) -> None:
    global _stop
    _stop = stop
    process.value = os.getpid()
    for name in ("SIGTERM", "SIGHUP"):
        if hasattr(signal, name):
            signal.signal(getattr(signal, name), lambda number, frame: _alone.set())
    threading.Thread(target=_watch_parent, daemon=True).start()


def _watch_parent() -> None:
    multiprocessing.parent_process().join()
    _alone.set()
    time.sleep(_GRACE_S)
    os._exit(1)


def _render_one(plan: Plan, settings: dict[str, object]) -> dict:
    def listen(done: int, total: int) -> None:
        if _stop.is_set() or _alone.is_set():
            raise Stopped(f"{plan.in_path}: told to stop, nothing was written")

    listen(0, 0)
    make_folder(plan.out_path.parent)
    return render(plan.in_path, plan.out_path, progress=listen, **settings)
