"""Spread recordings over worker processes; the result does not depend on their number."""

from __future__ import annotations

import os
import signal
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from multiprocessing import active_children, get_context
from typing import TypeVar

from glidefit.errors import GlidefitError

_Task = TypeVar("_Task")
_Result = TypeVar("_Result")
_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")


def run_all(
    work: Callable[[_Task], _Result],
    tasks: Sequence[_Task],
    *,
    workers: int,
    name: Callable[[_Task], str],
    done: Callable[[str], None],
) -> list[_Result | GlidefitError]:
    """``work`` on every task, in order; a `GlidefitError` takes the place of its result.

    Parameters
    ----------
    work : callable
        A function of a module, with plain data in and out.
    tasks : sequence
    workers : int
        1 works in this process.
    name : callable
        Name of a task for messages.
    done : callable
        Called with the name of each finished task.

    Raises
    ------
    GlidefitError
        If a worker process is killed (by the system, for want of memory).
    """
    if workers <= 1 or len(tasks) <= 1:
        return [_one(work, task, name, done) for task in tasks]
    for variable in _THREADS:  # read when a worker first loads its numerical libraries
        os.environ.setdefault(variable, "1")
    results: dict[int, _Result | GlidefitError] = {}
    with _pool(min(workers, len(tasks))) as pool:
        with _interrupts_ignored():
            waiting: dict[Future[_Result | GlidefitError], int] = {
                pool.submit(_guarded, work, task): i for i, task in enumerate(tasks)
            }
        while waiting:
            for future in wait(waiting, return_when=FIRST_COMPLETED).done:
                i = waiting.pop(future)
                try:
                    results[i] = future.result()
                except BrokenProcessPool as error:
                    raise GlidefitError(
                        "a worker process was ended from outside, most likely for want of memory. "
                        "Run again with fewer --workers."
                    ) from error
                done(name(tasks[i]))
    return [results[i] for i in range(len(tasks))]


@contextmanager
def _pool(workers: int) -> Iterator[ProcessPoolExecutor]:
    """Worker processes; they are ended at once, not waited for, when the block fails."""
    others = set(active_children())
    with ProcessPoolExecutor(
        workers, mp_context=get_context("spawn"), initializer=_ignore_interrupts
    ) as pool:
        try:
            yield pool
        except BaseException:
            for process in set(active_children()) - others:
                process.terminate()
            raise


@contextmanager
def _interrupts_ignored() -> Iterator[None]:
    """Processes started inside inherit that they ignore Ctrl-C: this one alone answers it."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


def _ignore_interrupts() -> None:
    # Where it is not inherited, as under Windows.
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def _one(
    work: Callable[[_Task], _Result],
    task: _Task,
    name: Callable[[_Task], str],
    done: Callable[[str], None],
) -> _Result | GlidefitError:
    result = _guarded(work, task)
    done(name(task))
    return result


def _guarded(work: Callable[[_Task], _Result], task: _Task) -> _Result | GlidefitError:
    try:
        return work(task)
    except GlidefitError as error:
        return error
