"""The record of a run: ``run.json`` and ``log.jsonl``."""

from __future__ import annotations

import importlib.metadata
import json
import logging
import platform
import resource
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import latelight
from latelight.errors import ProductError
from latelight.products.atomic import write_bytes

__all__ = ["Event", "log_event", "log_to", "peak_memory_mb", "versions", "write_record"]

LOGGER = logging.getLogger("latelight.night")

_LIBRARIES = (
    "astropy",
    "numba",
    "numpy",
    "photutils",
    "pillow",
    "pydantic",
    "scikit-image",
    "scipy",
    "sep",
)


@dataclass(frozen=True, slots=True)
class Event:
    """One line of the log.

    Attributes
    ----------
    message : str
        What happened.
    pair, stage : str
        Where; empty for the night as a whole.
    seconds : float or None
        How long it took.
    peak_memory_mb : float or None
        Highest resident memory of the process so far, MB (1e6 bytes).
    level : int
        Of :mod:`logging`.
    trace : str
        Traceback of an unexpected fault.
    """

    message: str
    pair: str = ""
    stage: str = ""
    seconds: float | None = None
    peak_memory_mb: float | None = None
    level: int = logging.INFO
    trace: str = ""


def log_event(event: Event) -> None:
    """Hand an event to the log of this process."""
    LOGGER.log(event.level, event.message, extra={"event": event})


@contextmanager
def log_to(path: Path, *, run_id: str) -> Iterator[None]:
    """Add every event to a file while inside, one JSON object a line.

    Parameters
    ----------
    path : Path
        The log; lines of earlier runs stay.
    run_id : str
        Tells the lines of this run from theirs.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    try:
        handler = _LineHandler(path, run_id)
    except OSError as error:
        reason = f"cannot be written ({error.strerror}): set another output folder"
        raise ProductError(path, reason) from error
    before = LOGGER.level
    LOGGER.addHandler(handler)
    LOGGER.setLevel(logging.DEBUG)
    try:
        yield
    finally:
        LOGGER.removeHandler(handler)
        LOGGER.setLevel(before)
        handler.close()


class _LineHandler(logging.FileHandler):
    """Write records as JSON lines; a full disk stops the run with its reason."""

    def __init__(self, path: Path, run_id: str) -> None:
        super().__init__(path, mode="a", encoding="utf-8")
        self._path = path
        self._run_id = run_id

    def format(self, record: logging.LogRecord) -> str:
        event = getattr(record, "event", None) or Event(record.getMessage())
        line: dict[str, Any] = {
            "time": _utc(record.created),
            "run": self._run_id,
            "level": record.levelname.lower(),
            "pair": event.pair,
            "stage": event.stage,
            "message": event.message,
        }
        if event.seconds is not None:
            line["seconds"] = round(event.seconds, 4)
        if event.peak_memory_mb is not None:
            line["peak_memory_mb"] = round(event.peak_memory_mb, 1)
        if event.trace:
            line["trace"] = event.trace
        return json.dumps(line, ensure_ascii=False)

    # Name and argument are the logging library's.
    def handleError(self, record: logging.LogRecord) -> None:  # noqa: ARG002, N802
        """Raise what the system said instead of printing it."""
        error = sys.exc_info()[1]
        said = getattr(error, "strerror", None) or str(error)
        reason = f"cannot be written ({said}): free some space or set another folder"
        raise ProductError(self._path, reason) from error


def write_record(path: Path, record: dict[str, Any]) -> None:
    """Write ``run.json``.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    text = json.dumps(record, indent=2, ensure_ascii=False)
    write_bytes(path, (text + "\n").encode())


def versions() -> dict[str, str]:
    """Return the versions of this program, of Python and of what it rests on."""
    found = {"latelight": latelight.__version__, "python": platform.python_version()}
    for name in _LIBRARIES:
        found[name] = importlib.metadata.version(name)
    return found


def peak_memory_mb() -> float:
    """Return the highest resident memory of this process so far, MB (1e6 bytes)."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    # Linux counts in KiB, macOS in bytes.
    return peak * (1.0 if sys.platform == "darwin" else 1024.0) / 1e6


def _utc(seconds: float) -> str:
    moment = datetime.fromtimestamp(seconds, tz=UTC)
    return moment.isoformat(timespec="milliseconds").replace("+00:00", "Z")
