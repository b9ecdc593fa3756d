"""Spread recordings over worker processes; the result does not depend on their number."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from multiprocessing import get_context
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
    context = get_context("spawn")
    with ProcessPoolExecutor(min(workers, len(tasks)), mp_context=context) as pool:
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
