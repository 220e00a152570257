"""Read the tables of a finished night back into the rows they were written from.

Tables are read by the names of their columns, so a table to which columns were
added, or whose columns were put in another order, is read all the same.
"""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from astropy import units
from astropy.table import Table

from latelight.errors import ProductError
from latelight.products.column import Column
from latelight.products.columns import CANDIDATE_COLUMNS, PAIR_COLUMNS
from latelight.products.rows import CandidateRow, PairRow
from latelight.products.track_columns import (
    INTERPRETATION_COLUMNS,
    TRACK_COLUMNS,
    TRACK_POINT_COLUMNS,
)
from latelight.products.track_rows import InterpretationRow, TrackPointRow, TrackRow

__all__ = [
    "read_candidates",
    "read_interpretations",
    "read_pairs",
    "read_track_points",
    "read_tracks",
]

_RowType = TypeVar("_RowType")
_REMAKE = "run the night again with this version"
_KINDS = {"text": ("U", "text"), "integer": ("iu", "whole numbers")}


def read_candidates(folder: Path) -> tuple[CandidateRow, ...]:
    """Return the candidates of a night, best first.

    Parameters
    ----------
    folder : Path
        Output folder of ``latelight run``.

    Raises
    ------
    ProductError
        If ``candidates.ecsv`` is not there or cannot be read, or a column or a
        value that is never missing is.
    """
    return _read(folder, "candidates.ecsv", CandidateRow, CANDIDATE_COLUMNS)


def read_pairs(folder: Path) -> tuple[PairRow, ...]:
    """Return the pairs of a night, by name; see :func:`read_candidates`."""
    return _read(folder, "pairs.ecsv", PairRow, PAIR_COLUMNS)


def read_tracks(folder: Path) -> tuple[TrackRow, ...]:
    """Return the tracks of a night, best first; see :func:`read_candidates`."""
    return _read(folder, "tracks.ecsv", TrackRow, TRACK_COLUMNS)


def read_track_points(folder: Path) -> tuple[TrackPointRow, ...]:
    """Return the points of tracks, by track and time; see :func:`read_candidates`."""
    return _read(folder, "track_points.ecsv", TrackPointRow, TRACK_POINT_COLUMNS)


def read_interpretations(folder: Path) -> tuple[InterpretationRow, ...]:
    """Return what arcs mean for each source; see :func:`read_candidates`."""
    return _read(
        folder, "interpretations.ecsv", InterpretationRow, INTERPRETATION_COLUMNS
    )


def _read(
    folder: Path, name: str, row_type: type[_RowType], columns: tuple[Column, ...]
) -> tuple[_RowType, ...]:
    path = Path(folder) / name
    table = _table(path)
    missing = [column.name for column in columns if column.name not in table.colnames]
    if missing:
        words = ", ".join(missing)
        raise ProductError(path, f"cannot be read: no column {words}; {_REMAKE}")
    optional = {field.name: "None" in str(field.type) for field in fields(row_type)}  # type: ignore[arg-type]
    values = [
        _column_values(path, table[column.name], column, optional=optional[column.name])
        for column in columns
    ]
    names = [column.name for column in columns]
    return tuple(
        row_type(**dict(zip(names, row, strict=True)))
        for row in zip(*values, strict=True)
    )


def _table(path: Path) -> Table:
    if not path.parent.is_dir():
        raise ProductError(
            path.parent, "is no folder: give the output folder of a finished night"
        )
    try:
        text = path.read_text(encoding="utf-8")
        return Table.read(text.splitlines(), format="ascii.ecsv")
    except FileNotFoundError:
        reason = f"does not exist: give the output folder of a night, or {_REMAKE}"
        raise ProductError(path, reason) from None
    except OSError as error:
        reason = f"cannot be read ({error.strerror or error}): check its permissions"
        raise ProductError(path, reason) from None
    except Exception as error:  # any other fault the parser has a name for
        said = (str(error).strip() or type(error).__name__).splitlines()[0]
        reason = f"cannot be read as an ECSV table ({said}); {_REMAKE}"
        raise ProductError(path, reason) from None


def _column_values(
    path: Path, stored: Any, column: Column, *, optional: bool
) -> list[Any]:
    """Return the values of a column as plain Python ones, None where masked."""
    letters, words = _KINDS.get(column.kind, ("fiu", "numbers"))
    # An empty table's cells have no kind to be wrong.
    if len(stored) and stored.dtype.kind not in letters:
        raise ProductError(
            path,
            f"cannot be read: column {column.name} must hold {words}, got "
            f"{stored.dtype.name}; {_REMAKE}",
        )
    unit = units.Unit(column.unit)
    if unit != (stored.unit or units.dimensionless_unscaled):
        raise ProductError(
            path,
            f"cannot be read: column {column.name} must be in "
            f"{column.unit or 'no unit'}, got {stored.unit or 'no unit'}; {_REMAKE}",
        )
    missing = np.ma.getmaskarray(np.ma.asarray(stored))
    if column.kind == "text":
        # A masked text cannot be told from an empty one.
        return ["" if no else str(v) for v, no in zip(stored, missing, strict=True)]
    if column.kind == "real":
        missing = missing | ~np.isfinite(np.ma.filled(stored, 0.0))
    if missing.any() and not optional:
        raise ProductError(
            path,
            f"cannot be read: row {int(missing.argmax()) + 1} has no {column.name}, "
            f"which is never missing; {_REMAKE}",
        )
    plain = int if column.kind == "integer" else float
    return [
        None if no else plain(value)
        for value, no in zip(np.ma.getdata(stored), missing, strict=True)
    ]
