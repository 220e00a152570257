"""Blocks of rows cover every row once, whatever the number of threads."""

import os

import numpy as np
import pytest

from latelight import threads


@pytest.fixture
def keep_threads():
    before = threads.n_threads()
    yield
    threads.set_threads(before)


@pytest.mark.parametrize("count", [1, 2, 5])
@pytest.mark.parametrize("n_rows", [1, 3, 1000])
def test_every_row_once(count, n_rows, keep_threads):
    threads.set_threads(count)
    hits = np.zeros(n_rows, int)

    def kernel(first, last):
        hits[first:last] += 1

    threads.over_rows(kernel, n_rows)
    assert (hits == 1).all()


@pytest.mark.parametrize("count", [1, 2, 5])
def test_items_keep_their_order_and_share_the_threads(count, keep_threads):
    threads.set_threads(count)
    results = threads.on_each(lambda item: (item, threads.n_threads()), ["b", "a"])
    assert results == [("b", max(1, count // 2)), ("a", max(1, count // 2))]
    assert threads.n_threads() == count


def test_a_failing_item_is_not_swallowed(keep_threads):
    threads.set_threads(2)
    with pytest.raises(ZeroDivisionError):
        threads.on_each(lambda item: 1 / item, [1, 0])


def test_a_failing_block_is_not_swallowed(keep_threads):
    threads.set_threads(2)

    def kernel(first, last):
        msg = "bad block"
        raise RuntimeError(msg)

    with pytest.raises(RuntimeError, match="bad block"):
        threads.over_rows(kernel, 10)


def test_count_below_one_is_refused(keep_threads):
    with pytest.raises(ValueError, match="count must be at least 1, got 0"):
        threads.set_threads(0)


def test_libraries_are_kept_to_one_thread(monkeypatch):
    for variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        monkeypatch.setenv(variable, "8")
    monkeypatch.setenv("NUMBA_NUM_THREADS", "8")
    threads.quiet_libraries()
    assert os.environ["OPENBLAS_NUM_THREADS"] == os.environ["OMP_NUM_THREADS"] == "1"
