"""Run independent tasks here or in worker processes, and survive a dead worker.

Workers are started by a fork server, never by plain forking: a process whose
compiled loops have already run threads must not be forked.  Kept free of heavy
imports, so that a worker can limit its threads before numpy is loaded.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from typing import TypeVar

from latelight.threads import quiet_libraries, set_threads

__all__ = ["Lost", "run_tasks"]

Task = TypeVar("Task")
Result = TypeVar("Result")


@dataclass(frozen=True, slots=True)
class Lost:
    """A task without a result, because its worker died or could not answer.

    Attributes
    ----------
    reason : str
        What is known about it.
    """

    reason: str


def run_tasks(
    work: Callable[[Task], Result], tasks: Sequence[Task], *, jobs: int
) -> Iterator[tuple[int, Result | Lost]]:
    """Yield ``(index, result)`` of every task, in the order they finish.

    Parameters
    ----------
    work : callable
        A function at the top level of a module; it and the tasks are pickled
        when there is more than one job.
    tasks : sequence
        Arguments of ``work``, one a task.
    jobs : int
        Tasks at a time; 1 runs them in this process, one after the other.

    Raises
    ------
    ValueError
        If ``jobs`` is below 1.

    Notes
    -----
    A worker that dies (out of memory, a crash in a compiled library) takes the
    pool and all its unfinished tasks with it.  These are then run one by one, each
    in a fresh worker, until the one that kills its worker is found; it is
    reported as `Lost` and the rest go on together.
    """
    if jobs < 1:
        msg = f"jobs must be at least 1, got {jobs}"
        raise ValueError(msg)
    if jobs == 1:
        for index, task in enumerate(tasks):
            yield index, work(task)
        return
    todo = dict(enumerate(tasks))
    while todo:
        for index, result in _together(work, todo, jobs):
            del todo[index]
            yield index, result
        for index in list(todo):
            result = _alone(work, todo.pop(index), jobs)
            yield index, result
            if isinstance(result, Lost):
                break


def _together(
    work: Callable[[Task], Result], todo: dict[int, Task], jobs: int
) -> Iterator[tuple[int, Result | Lost]]:
    """Yield results until all are there or a worker has died."""
    with _Pool(min(jobs, len(todo)), threads=_threads_each(jobs)) as pool:
        index_of: dict[Future[Result], int] = {}
        try:
            for index, task in todo.items():
                index_of[pool.submit(work, task)] = index
        except BrokenProcessPool:
            pass  # died while the tasks were handed over: the rest stay to do
        for future in as_completed(index_of):
            error = future.exception()
            if error is None:
                yield index_of[future], future.result()
            elif not isinstance(error, BrokenProcessPool):
                yield index_of[future], _no_answer(error)


def _alone(work: Callable[[Task], Result], task: Task, jobs: int) -> Result | Lost:
    """Run one task in a worker of its own."""
    with _Pool(1, threads=_threads_each(jobs)) as pool:
        try:
            return pool.submit(work, task).result()
        except BrokenProcessPool:
            return Lost(
                "its worker process was killed; most often memory ran out: "
                "use fewer jobs, or smaller frames"
            )
        except Exception as error:
            return _no_answer(error)


def _no_answer(error: BaseException) -> Lost:
    return Lost(f"unexpected {type(error).__name__}: {error}")


def _threads_each(jobs: int) -> int:
    return max(1, (os.cpu_count() or 1) // jobs)


class _Pool(ProcessPoolExecutor):
    """A pool of limited workers that is ended at once when the caller stops early."""

    def __init__(self, workers: int, *, threads: int) -> None:
        self._others = set(multiprocessing.active_children())
        super().__init__(
            workers,
            mp_context=multiprocessing.get_context("forkserver"),
            initializer=_limit_worker,
            initargs=(threads,),
        )

    def __exit__(self, kind: object, value: object, trace: object) -> None:
        if kind is not None:
            # An interrupt, or results no longer wanted: do not wait for the rest.
            for child in set(multiprocessing.active_children()) - self._others:
                child.terminate()
        self.shutdown(wait=True, cancel_futures=True)


def _limit_worker(threads: int) -> None:
    """Set a worker's share of the machine, and leave interrupts to the driver."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    quiet_libraries()
    set_threads(threads)
