"""Write the tables of pairs and arcs: ECSV for all, FITS and VOTable for candidates.

The bytes depend on the rows and the package version alone: no dates, no host
names, no order of arrival.  Text columns are never masked, since neither ECSV
nor VOTable can tell a masked text from an empty one.
"""

from __future__ import annotations

import io
from collections.abc import Callable, Sequence
from dataclasses import astuple
from pathlib import Path
from typing import Any

import numpy as np
from astropy import table as astropy_table
from astropy.io import fits
from astropy.io.votable import from_table

import latelight
from latelight.products.atomic import write_bytes
from latelight.products.column import Column
from latelight.products.columns import (
    ARC_COLUMNS,
    CANDIDATE_COLUMNS,
    PAIR_COLUMNS,
    RESIDUAL_COLUMNS,
)
from latelight.products.fits_file import ascii_text, fits_bytes
from latelight.products.rows import ArcRow, CandidateRow, PairRow, ResidualRow

__all__ = [
    "arc_table",
    "candidate_table",
    "make_table",
    "pair_table",
    "residual_table",
    "to_ecsv",
    "to_fits",
    "to_votable",
    "write_tables",
]

# The smallest int32: a fill value that no count or sign can take.
_INTEGER_NULL = np.iinfo(np.int32).min
_CONVENTIONS = (
    "Empty cells: not known or not applicable. Angles on the sky: degrees east of "
    "north. Pixels: the first is 0. Depth: positive towards the observer."
)


def candidate_table(rows: Sequence[CandidateRow]) -> astropy_table.Table:
    """Return the candidates as a table, most significant first."""
    ordered = sorted(rows, key=lambda row: (-row.snr, row.id))
    return make_table("candidates", ordered, CANDIDATE_COLUMNS)


def arc_table(rows: Sequence[ArcRow]) -> astropy_table.Table:
    """Return the ridges as a table, by pair, most significant first."""
    ordered = sorted(rows, key=lambda row: (row.pair, -row.snr, row.x, row.y))
    return make_table("arcs", ordered, ARC_COLUMNS)


def pair_table(rows: Sequence[PairRow]) -> astropy_table.Table:
    """Return the pairs as a table, by name."""
    return make_table("pairs", sorted(rows, key=lambda row: row.pair), PAIR_COLUMNS)


def residual_table(rows: Sequence[ResidualRow]) -> astropy_table.Table:
    """Return the compact residuals as a table, by pair, most significant first."""
    ordered = sorted(rows, key=lambda row: (row.pair, -abs(row.snr), row.x, row.y))
    return make_table("residuals", ordered, RESIDUAL_COLUMNS)


def to_ecsv(table: astropy_table.Table) -> bytes:
    """Return a table as ECSV."""
    stream = io.StringIO()
    table.write(stream, format="ascii.ecsv")
    return stream.getvalue().encode()


def to_fits(table: astropy_table.Table) -> bytes:
    """Return a table as a FITS binary table with checksums.

    Masked reals become NaN and masked integers TNULL; UCDs and descriptions go
    to TUCDn and TCOMMn.  FITS text is ASCII: other letters are written as
    backslash escapes.
    """
    plain = table.copy()
    plain.meta.clear()
    for name in plain.colnames:
        if plain[name].dtype.kind == "U":
            plain[name] = [ascii_text(value) for value in plain[name]]
    hdu = fits.table_to_hdu(plain)
    hdu.name = str(table.meta["table"]).upper()
    for number, name in enumerate(table.colnames, start=1):
        info = table[name].info
        hdu.header[f"TUCD{number}"] = info.meta["ucd"]
        hdu.header[f"TCOMM{number}"] = info.description
    primary = fits.PrimaryHDU()
    primary.header["CREATOR"] = table.meta["creator"]
    primary.header.add_comment(table.meta["conventions"])
    return fits_bytes([primary, hdu])


def to_votable(table: astropy_table.Table) -> bytes:
    """Return a table as a VOTable with units, descriptions and UCDs."""
    document = from_table(table)
    first = document.get_first_table()
    first.name = table.meta["table"]
    first.description = f"{table.meta['creator']}. {table.meta['conventions']}"
    for field in first.fields:
        field.ucd = table[field.name].info.meta["ucd"]
    stream = io.BytesIO()
    document.to_xml(stream)
    return stream.getvalue()


def write_tables(
    folder: Path,
    *,
    candidates: Sequence[CandidateRow],
    arcs: Sequence[ArcRow],
    pairs: Sequence[PairRow],
    residuals: Sequence[ResidualRow],
) -> tuple[Path, ...]:
    """Write the tables of a night, each whole or not at all.

    Parameters
    ----------
    folder : Path
        Where; it must exist.
    candidates, arcs, pairs, residuals : sequences of rows
        In any order: the tables sort them.

    Returns
    -------
    tuple of Path
        ``candidates.ecsv``, ``.fits`` and ``.vot``, ``arcs.ecsv``,
        ``pairs.ecsv`` and ``residuals.ecsv``.

    Raises
    ------
    ProductError
        If a file cannot be written.
    """
    found = candidate_table(candidates)
    files: tuple[tuple[str, Callable[[Any], bytes], Any], ...] = (
        ("candidates.ecsv", to_ecsv, found),
        ("candidates.fits", to_fits, found),
        ("candidates.vot", to_votable, found),
        ("arcs.ecsv", to_ecsv, arc_table(arcs)),
        ("pairs.ecsv", to_ecsv, pair_table(pairs)),
        ("residuals.ecsv", to_ecsv, residual_table(residuals)),
    )
    for name, encode, table in files:
        write_bytes(folder / name, encode(table))
    return tuple(folder / name for name, _, _ in files)


def make_table(
    name: str, rows: Sequence[Any], columns: tuple[Column, ...]
) -> astropy_table.Table:
    """Return rows as a table, in the order given.

    Parameters
    ----------
    name : str
        What the table is called inside its files.
    rows : sequence of frozen records
        All of one kind; their fields are the columns, in order.
    columns : tuple of Column
        What the columns mean.

    Raises
    ------
    ValueError
        If a value is NaN or infinite.
    """
    by_field = list(zip(*map(astuple, rows), strict=True)) or [()] * len(columns)
    table = astropy_table.Table()
    for column, values in zip(columns, by_field, strict=True):
        table[column.name] = _COLUMN_MAKERS[column.kind](column, values)
        table[column.name].info.meta = {"ucd": column.ucd}
    table.meta["table"] = name
    table.meta["creator"] = f"latelight {latelight.__version__}"
    table.meta["conventions"] = _CONVENTIONS
    return table


def _text(column: Column, values: Sequence[Any]) -> astropy_table.Column:
    return astropy_table.Column(values, dtype=str, description=column.description)


def _integer(column: Column, values: Sequence[Any]) -> astropy_table.MaskedColumn:
    made = astropy_table.MaskedColumn(
        [0 if value is None else value for value in values],
        mask=[value is None for value in values],
        dtype=np.int32,
        description=column.description,
    )
    made.fill_value = _INTEGER_NULL
    return made


def _real(column: Column, values: Sequence[Any]) -> astropy_table.MaskedColumn:
    known = [value is not None for value in values]
    for value in values:
        if value is not None and not np.isfinite(value):
            msg = f"{column.name} must be finite or None (not known), got {value!r}"
            raise ValueError(msg)
    return astropy_table.MaskedColumn(
        [
            # "+ 0.0" turns a rounded -0.0 into 0.0.
            float(format(float(value), column.format)) + 0.0 if ok else 0.0
            for value, ok in zip(values, known, strict=True)
        ],
        mask=np.logical_not(known),
        dtype=np.float64,
        unit=column.unit or None,
        format=column.format,
        description=column.description,
    )


_COLUMN_MAKERS = {"text": _text, "integer": _integer, "real": _real}
