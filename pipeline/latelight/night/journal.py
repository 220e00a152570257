"""What is known about one pair on its way: its row so far, and its log."""

from __future__ import annotations

import logging
import time
import traceback
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

from latelight.errors import LatelightError
from latelight.night.pairing import AnyPair, failed_pair
from latelight.night.record import Event, peak_memory_mb
from latelight.products.rows import PairRow

__all__ = ["Journal"]


class Journal:
    """Collects facts for a pair's row and lines for the log.

    Parameters
    ----------
    pair : Pair or StackPair
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

    def __init__(self, pair: AnyPair) -> None:
        self._name = pair.name
        self._seconds = 0.0
        self._since = time.perf_counter()
        self.row: PairRow = failed_pair(pair, "")
        self.events: list[Event] = []
        self.at = ""

    @property
    def closed(self) -> bool:
        """Whether the pair is done or has failed with a reason."""
        return self.row.status == "done" or self.row.reason != ""

    @contextmanager
    def guarded(self) -> Iterator[None]:
        """Work on the pair; whatever goes wrong closes it as failed, and is kept.

        An error raised on purpose leaves its reason, anything else its kind, and its
        traceback in the log.  The time of the pair is that spent in here.
        """
        self._since = time.perf_counter()
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            try:
                yield
            except LatelightError as error:
                self.close_failed(str(error))
            except Exception as error:
                where = self.at or "chain"
                reason = f"{where}: unexpected {type(error).__name__}: {error}"
                self.close_failed(reason, trace=traceback.format_exc())
        for text in dict.fromkeys(
            f"{w.category.__name__}: {w.message}" for w in caught
        ):
            self.say(text, stage="", level=logging.WARNING)
        self._seconds += time.perf_counter() - self._since

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
        seconds = self._seconds + time.perf_counter() - self._since
        memory = peak_memory_mb()
        self.add(seconds=seconds, peak_memory=memory)
        self.events.append(
            Event(message, self._name, self.at, seconds, memory, level, trace)
        )
