"""Workers: order of results, errors in their place, and an end when something goes wrong."""

from __future__ import annotations

import math
import multiprocessing
import operator
import os
import pickle
import signal
import threading
import time
from pathlib import Path

import pytest

from glidefit.errors import GlidefitError, InputError, InputErrors
from glidefit.reading.settings_file import read_settings
from glidefit.running.workers import run_all


def silent(name):
    pass


def run(work, tasks, *, workers, done=silent):
    return run_all(work, tasks, workers=workers, name=str, done=done)


@pytest.mark.parametrize("workers", [1, 2])
def test_results_come_in_the_order_of_the_tasks(workers):
    finished = []
    assert run(math.sqrt, [81, 1, 25, 4], workers=workers, done=finished.append) == [9, 1, 5, 2]
    assert sorted(finished) == ["1", "25", "4", "81"]


def test_work_is_done_in_other_processes():
    pids = set(run(operator.call, [os.getpid] * 4, workers=2))
    assert os.getpid() not in pids
    assert len(pids) <= 2


def test_one_task_or_one_worker_needs_no_process():
    for tasks, workers in (([os.getpid], 4), ([os.getpid] * 3, 1)):
        assert set(run(operator.call, tasks, workers=workers)) == {os.getpid()}


def test_results_are_the_same_for_any_number_of_workers():
    tasks = [0.1 * k for k in range(9)]
    results = [run(math.sin, tasks, workers=n) for n in (1, 2, 3)]
    assert results[0] == results[1] == results[2] == [math.sin(t) for t in tasks]


@pytest.mark.parametrize("workers", [1, 2])
def test_user_errors_take_the_place_of_results(workers):
    tasks = [Path("nowhere at all/a.toml"), Path("nowhere at all/b.toml")]
    results = run(read_settings, tasks, workers=workers)
    assert [type(result) for result in results] == [InputError, InputError]
    assert [result.where for result in results] == ["a.toml", "b.toml"]
    assert all(result.found.startswith("there is no such file in ") for result in results)


ERROR = InputError("a.csv, row 2", "holds 1", expected="2", remedy="Write 2.")


@pytest.mark.parametrize("error", [ERROR, InputErrors([ERROR, ERROR])])
def test_user_errors_travel_whole(error):
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is type(error)
    assert str(again) == str(error)


@pytest.mark.parametrize("workers", [1, 2])
def test_fault_of_the_program_is_raised(workers):
    with pytest.raises(ValueError, match="math domain error"):
        run(math.sqrt, [4, -1, 9], workers=workers)
    assert not multiprocessing.active_children()


@pytest.mark.skipif(os.name != "posix", reason="signals")
def test_killed_worker_is_told_with_what_to_do():
    with pytest.raises(GlidefitError) as told:
        run(signal.raise_signal, [signal.SIGKILL, signal.SIGKILL], workers=2)
    assert str(told.value) == (
        "a worker process was ended from outside, most likely for want of memory. Run again with "
        "fewer --workers."
    )
    assert told.value.exit_code == 3


def test_ctrl_c_does_not_wait_for_workers():
    def stop(name):
        raise KeyboardInterrupt

    # Were they waited for, this test would take a day.
    with pytest.raises(KeyboardInterrupt):
        run(time.sleep, [0, 86_400, 86_400], workers=2, done=stop)
    assert not multiprocessing.active_children()


def test_ctrl_c_is_heard_again_after_starting_workers():
    before = signal.getsignal(signal.SIGINT)
    run(math.sqrt, [1, 4], workers=2)
    assert signal.getsignal(signal.SIGINT) is before


def test_works_outside_of_the_main_thread():
    results = []
    thread = threading.Thread(target=lambda: results.extend(run(math.sqrt, [1, 4], workers=2)))
    thread.start()
    thread.join()
    assert results == [1, 2]


def test_workers_use_one_thread_each(monkeypatch):
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
        monkeypatch.delenv(name, raising=False)
    assert run(os.getenv, ["OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"], workers=2) == ["1", "1"]
