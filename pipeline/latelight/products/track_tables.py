"""Write the tables of tracks, of their points and of interpretations."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from astropy import table as astropy_table

from latelight.products.atomic import write_bytes
from latelight.products.tables import make_table, to_ecsv, to_fits, to_votable
from latelight.products.track_columns import (
    INTERPRETATION_COLUMNS,
    TRACK_COLUMNS,
    TRACK_POINT_COLUMNS,
)
from latelight.products.track_rows import InterpretationRow, TrackPointRow, TrackRow

__all__ = [
    "interpretation_table",
    "track_point_table",
    "track_table",
    "write_track_tables",
]


def track_table(rows: Sequence[TrackRow]) -> astropy_table.Table:
    """Return the tracks as a table: those worth a look first, then by significance."""
    ordered = sorted(rows, key=lambda row: (row.verdict != "track", -row.snr, row.id))
    return make_table("tracks", ordered, TRACK_COLUMNS)


def track_point_table(rows: Sequence[TrackPointRow]) -> astropy_table.Table:
    """Return the points of the tracks as a table, by track and time."""
    ordered = sorted(rows, key=lambda row: (row.track, row.mjd, row.frame))
    return make_table("track_points", ordered, TRACK_POINT_COLUMNS)


def interpretation_table(rows: Sequence[InterpretationRow]) -> astropy_table.Table:
    """Return the interpretations as a table: by arc, the best source first."""
    ordered = sorted(rows, key=_by_arc_and_score)
    return make_table("interpretations", ordered, INTERPRETATION_COLUMNS)


def write_track_tables(
    folder: Path,
    *,
    tracks: Sequence[TrackRow],
    points: Sequence[TrackPointRow],
    interpretations: Sequence[InterpretationRow],
) -> tuple[Path, ...]:
    """Write the tables that all epochs together give, each whole or not at all.

    Parameters
    ----------
    folder : Path
        Where; it must exist.
    tracks, points, interpretations : sequences of rows
        In any order: the tables sort them.

    Returns
    -------
    tuple of Path
        ``tracks.ecsv``, ``.fits`` and ``.vot``, ``track_points.ecsv`` and
        ``interpretations.ecsv``.

    Raises
    ------
    ProductError
        If a file cannot be written.
    """
    found = track_table(tracks)
    files: tuple[tuple[str, Callable[[Any], bytes], Any], ...] = (
        ("tracks.ecsv", to_ecsv, found),
        ("tracks.fits", to_fits, found),
        ("tracks.vot", to_votable, found),
        ("track_points.ecsv", to_ecsv, track_point_table(points)),
        ("interpretations.ecsv", to_ecsv, interpretation_table(interpretations)),
    )
    for name, encode, table in files:
        write_bytes(folder / name, encode(table))
    return tuple(folder / name for name, _, _ in files)


def _by_arc_and_score(row: InterpretationRow) -> tuple[Any, ...]:
    unknown = row.score is None
    return row.kind, row.id, unknown, -(row.score or 0.0), row.source
