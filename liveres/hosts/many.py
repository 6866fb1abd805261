"""Rendering many files at once, one on each processor core, so that one failure harms no other.

Workers are fresh processes. They take their orders to stop from the parent alone, and stop between two pieces of
sound, by an exception, so that no half file is left; a worker whose parent has died stops by itself.
Thread: control, the main thread of a program.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
import time
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from multiprocessing.synchronize import Event

from liveres.errors import LiveresError
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
    plans = list(plans)
    context = multiprocessing.get_context("spawn")
    stop = context.Event()
    workers = max(1, min(workers or core_count(), len(plans)))
    pool = ProcessPoolExecutor(workers, mp_context=context, initializer=_begin_worker, initargs=(stop,))
    try:
        with _interrupts_held_back():
            futures = {pool.submit(_render_one, plan, settings): plan for plan in plans}
        for future in as_completed(futures):
            on_outcome(_outcome(futures[future], future))
    except BaseException:
        stop.set()
        raise
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


def core_count() -> int:
    """Processor cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _outcome(plan: Plan, future: Future) -> Outcome:
    error = future.exception()
    if error is None:
        return Outcome(plan, future.result(), None)
    if isinstance(error, (LiveresError, OSError)):
        return Outcome(plan, None, str(error))
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


def _begin_worker(stop: Event) -> None:
    global _stop
    _stop = stop
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
    plan.out_path.parent.mkdir(parents=True, exist_ok=True)
    return render(plan.in_path, plan.out_path, progress=listen, **settings)
