"""What is known about one pair on its way: its row so far, and its log."""

from __future__ import annotations

import logging
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

from latelight.night.pairing import Pair, failed_pair
from latelight.night.record import Event, peak_memory_mb
from latelight.products.rows import PairRow

__all__ = ["Journal"]


class Journal:
    """Collects facts for a pair's row and lines for the log.

    Parameters
    ----------
    pair : Pair
        The pair; its row counts as failed until it is closed as done.

    Attributes
    ----------
    row : PairRow
        With all the facts added so far, so that a pair that fails late still
        shows what went well.
    events : list of Event
        In order.
    at : str
        The stage that is running, or that failed; empty between stages.
    """

    def __init__(self, pair: Pair) -> None:
        self._name = pair.name
        self._start = time.perf_counter()
        self.row: PairRow = failed_pair(pair, "")
        self.events: list[Event] = []
        self.at = ""

    def add(self, **facts: Any) -> None:
        """Fill fields of the row."""
        self.row = replace(self.row, **facts)

    def say(self, message: str, *, stage: str, level: int = logging.INFO) -> None:
        """Add a line to the log."""
        self.events.append(Event(message, self._name, stage, level=level))

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Time a stage; one that fails leaves no line but the pair's."""
        start = time.perf_counter()
        self.at = name
        yield
        self.at = ""
        seconds = time.perf_counter() - start
        memory = peak_memory_mb()
        self.events.append(
            Event(f"{name} done", self._name, name, seconds, memory, logging.DEBUG)
        )

    def close_done(self, message: str) -> None:
        """Mark the pair as done."""
        self.add(status="done", reason="")
        self._close(f"done: {message}", logging.INFO, "")

    def close_failed(self, reason: str, *, trace: str = "") -> None:
        """Mark the pair as failed."""
        self.add(status="failed", reason=reason)
        self._close(f"failed: {reason}", logging.ERROR, trace)

    def _close(self, message: str, level: int, trace: str) -> None:
        seconds, memory = time.perf_counter() - self._start, peak_memory_mb()
        self.add(seconds=seconds, peak_memory=memory)
        self.events.append(
            Event(message, self._name, self.at, seconds, memory, level, trace)
        )
