"""Tasks in processes: order, limits, and workers that die."""

import os
import signal
import time
from pathlib import Path

import pytest

from latelight.night.engine import Lost, run_tasks


@pytest.fixture(autouse=True)
def _workers_find_this_module(monkeypatch):
    """Workers import the tasks by name; pytest leaves the root off the path."""
    monkeypatch.syspath_prepend(str(Path(__file__).parents[2]))


def _square(x):
    return x * x


def _slow_first(x):
    time.sleep(0.3 if x == 0 else 0.0)
    return x


def _killed_at_three(x):
    if x == 3:
        os.kill(os.getpid(), signal.SIGKILL)
    return x


def _raises_at_one(x):
    if x == 1:
        raise RuntimeError("a fault of the program")
    return x


def _threads(_):
    from latelight.threads import n_threads

    return n_threads(), os.environ["OMP_NUM_THREADS"], os.environ["NUMBA_NUM_THREADS"]


def _process(_):
    return os.getpid()


@pytest.mark.parametrize("jobs", [1, 2])
def test_every_task_has_its_result(jobs):
    assert dict(run_tasks(_square, range(6), jobs=jobs)) == {i: i * i for i in range(6)}


def test_one_job_stays_in_this_process_and_two_do_not():
    assert dict(run_tasks(_process, [0, 1], jobs=1)) == {0: os.getpid(), 1: os.getpid()}
    assert os.getpid() not in dict(run_tasks(_process, [0, 1], jobs=2)).values()


def test_results_come_as_they_finish():
    assert [i for i, _ in run_tasks(_slow_first, [0, 1], jobs=2)] == [1, 0]


def test_no_tasks_start_no_worker():
    assert list(run_tasks(_square, [], jobs=2)) == []


def test_a_killed_worker_costs_its_own_task_only():
    results = dict(run_tasks(_killed_at_three, range(7), jobs=2))
    lost = results.pop(3)
    assert isinstance(lost, Lost)
    assert "worker process was killed" in lost.reason
    assert results == {i: i for i in (0, 1, 2, 4, 5, 6)}


def test_an_exception_in_a_worker_is_told_and_the_rest_goes_on():
    results = dict(run_tasks(_raises_at_one, range(4), jobs=2))
    assert results.pop(1) == Lost("unexpected RuntimeError: a fault of the program")
    assert results == {0: 0, 2: 2, 3: 3}


def test_workers_share_the_machine():
    share = max(1, os.cpu_count() // 2)
    results = dict(run_tasks(_threads, [0, 1], jobs=2))
    assert results == dict.fromkeys([0, 1], (share, str(share), str(share)))


def test_stopping_early_ends_the_workers():
    results = run_tasks(time.sleep, [0.0, 60.0, 60.0], jobs=2)
    next(results)
    start = time.monotonic()
    results.close()
    assert time.monotonic() - start < 10


def test_jobs_below_one_are_refused():
    with pytest.raises(ValueError, match="jobs must be at least 1, got 0"):
        list(run_tasks(_square, [1], jobs=0))
