"""How many threads this process may use, and how a kernel is spread over them.

Compiled kernels release the interpreter lock and work on a block of rows, so
plain threads share them; results do not depend on how many there are.
"""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

__all__ = ["n_threads", "on_each", "over_rows", "quiet_libraries", "set_threads"]

Item = TypeVar("Item")
Result = TypeVar("Result")

_LIBRARY_VARIABLES = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "NUMBA_NUM_THREADS",
)

_threads = max(1, os.cpu_count() or 1)
# A thread that shares the process with others has a part of the threads only.
_share = threading.local()


def set_threads(count: int) -> None:
    """Set how many threads this process may use.

    Parameters
    ----------
    count : int
        At least 1.

    Raises
    ------
    ValueError
        If ``count`` is below 1.
    """
    global _threads
    if count < 1:
        msg = f"count must be at least 1, got {count}"
        raise ValueError(msg)
    _threads = count


def quiet_libraries() -> None:
    """Keep linear algebra and compiled loops to one thread; call before numpy loads.

    Their sums depend in the last digit on how many threads share them, and theirs
    would come on top of ours.
    """
    for variable in _LIBRARY_VARIABLES:
        os.environ[variable] = "1"


def n_threads() -> int:
    """Return how many threads the caller may use."""
    return getattr(_share, "count", _threads)


def on_each(work: Callable[[Item], Result], items: Sequence[Item]) -> list[Result]:
    """Call ``work`` on every item, side by side where there are threads for it.

    Parameters
    ----------
    work : callable
        Spends most of its time where the interpreter lock is not held; inside it,
        ``n_threads`` is its fair share.
    items : sequence
        What it is called with.

    Returns
    -------
    list
        Results in the order of the items; the first error is raised.
    """
    available = n_threads()
    count = min(available, len(items))
    if count <= 1:
        return [work(item) for item in items]

    def in_share(item: Item) -> Result:
        _share.count = available // count
        return work(item)

    with ThreadPoolExecutor(count) as pool:
        return list(pool.map(in_share, items))


def over_rows(kernel: Callable[[int, int], None], n_rows: int) -> None:
    """Call ``kernel(first, last)`` on blocks of rows until all are done.

    Parameters
    ----------
    kernel : callable
        Writes rows ``first <= row < last`` of its output and nothing else.
    n_rows : int
        Rows in all.
    """
    count = min(n_threads(), n_rows)
    if count <= 1:
        kernel(0, n_rows)
        return
    # Several blocks a thread, so that an uneven frame keeps both busy.
    n_blocks = min(4 * count, n_rows)
    edges = [n_rows * i // n_blocks for i in range(n_blocks + 1)]
    with ThreadPoolExecutor(count) as pool:
        list(pool.map(kernel, edges[:-1], edges[1:]))
