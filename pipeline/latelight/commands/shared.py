"""What the commands share: exit codes, arguments, loading settings, plain tables.

Nothing heavy is imported at the top of a command's module, so that ``--help`` is
instant.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar

from latelight.errors import SettingsError

if TYPE_CHECKING:
    from latelight.config import NightConfig
    from latelight.records import Source

__all__ = [
    "DONE",
    "EXIT_CODES",
    "INTERRUPTED",
    "SOME_FAILED",
    "UNUSABLE",
    "add_loudness",
    "add_settings",
    "complain",
    "count",
    "in_settings",
    "load_settings",
    "positive",
    "print_table",
]

DONE, SOME_FAILED, UNUSABLE, INTERRUPTED = 0, 1, 2, 130

EXIT_CODES = (
    "exit codes: 0 all done; 1 a pair, frame or series failed (pairs.ecsv and "
    "series.ecsv say why); 2 settings, usage or a folder; 130 interrupted"
)

Result = TypeVar("Result")


def add_loudness(parser: argparse.ArgumentParser) -> None:
    """Give a command the options ``-v`` and ``-q``."""
    how_much = parser.add_mutually_exclusive_group()
    how_much.add_argument(
        "-v",
        "--verbose",
        action="count",
        default=0,
        help="tell more on standard error; twice: times of every stage",
    )
    how_much.add_argument(
        "-q",
        "--quiet",
        action="store_const",
        const=-1,
        dest="verbose",
        help="tell nothing but errors; the closing table stays",
    )


def add_settings(parser: argparse.ArgumentParser) -> None:
    """Give a command the settings file as its argument."""
    parser.add_argument(
        "settings", type=Path, metavar="NIGHT.toml", help="settings of the night"
    )


def positive(text: str) -> int:
    """Read a whole number of at least 1."""
    try:
        number = int(text)
    except ValueError:
        number = 0
    if number < 1:
        msg = f"must be a whole number of at least 1, got {text!r}"
        raise argparse.ArgumentTypeError(msg)
    return number


def complain(message: str) -> None:
    """Say on standard error what went wrong."""
    print(f"latelight: {message}", file=sys.stderr)


def load_settings(path: Path) -> tuple[NightConfig, tuple[Source, ...]]:
    """Read the settings and the sources they name.

    Raises
    ------
    SettingsError
        If the file, or the table of sources it names, cannot be used.
    """
    from latelight.config import load_config
    from latelight.origin.sources import gather_sources

    config = load_config(path)
    table = config.origin.source_table
    try:
        sources = gather_sources(config.sources, table=Path(table) if table else None)
    except SettingsError as error:
        raise SettingsError(error.path or path, error.faults) from None
    return config, sources


def in_settings(path: Path, work: Callable[[], Result]) -> Result:
    """Name the settings file in faults that are found after it was read."""
    try:
        return work()
    except SettingsError as error:
        raise SettingsError(error.path or path, error.faults) from None


def print_table(heads: tuple[str, ...], rows: Sequence[tuple[str, ...]]) -> None:
    """Print aligned columns, and a blank line; nothing when there are no rows."""
    if not rows:
        return
    widths = [max(map(len, column)) for column in zip(heads, *rows, strict=True)]
    for cells in (heads, *rows):
        padded = (c.ljust(w) for c, w in zip(cells, widths, strict=True))
        print("  ".join(padded).rstrip())
    print()


def count(number: int, noun: str) -> str:
    """Return a number with its noun."""
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
