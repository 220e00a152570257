"""The list of sources: from settings and table files to records."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from latelight.errors import SettingsError
from latelight.origin.settings import SourceSettings
from latelight.records import Source

__all__ = ["age_yr", "gather_sources", "read_source_table", "source_of"]

DAYS_PER_YEAR = 365.25
MJD_J2000 = 51544.5  # Julian epoch 2000.0

_UNITS = {
    "ra": "deg",
    "dec": "deg",
    "distance_pc": "pc",
    "distance_err_pc": "pc",
    "age_yr": "yr",
    "age_err_yr": "yr",
    "age_at_mjd": "d",
    "outburst_year": "yr",
    "peak_mag": "mag",
    "duration_days": "d",
}


def source_of(entry: SourceSettings) -> Source:
    """Turn one entry of the settings into a record.

    An outburst year becomes the age at the Julian epoch 2000.0.
    """
    age, age_at = entry.age_yr, entry.age_at_mjd
    if entry.outburst_year is not None:
        age, age_at = 2000.0 - entry.outburst_year, MJD_J2000
    return Source(
        name=entry.name,
        ra=entry.ra,
        dec=entry.dec,
        distance_pc=entry.distance_pc,
        distance_err_pc=entry.distance_err_pc,
        age_yr=age,
        age_err_yr=entry.age_err_yr,
        age_at_mjd=age_at,
        peak_mag=entry.peak_mag,
        duration_days=entry.duration_days,
    )


def age_yr(source: Source, mjd: float) -> float | None:
    """Return the time since a source's light arrived, at an epoch.

    Parameters
    ----------
    source : Source
        The outburst.
    mjd : float
        Epoch, MJD.

    Returns
    -------
    float or None
        Julian years; negative before the outburst, None when unknown.
    """
    if source.age_yr is None or source.age_at_mjd is None:
        return None
    return source.age_yr + (mjd - source.age_at_mjd) / DAYS_PER_YEAR


def gather_sources(
    entries: Iterable[SourceSettings], *, table: Path | None = None
) -> tuple[Source, ...]:
    """Join the sources of the settings and of a table file.

    Parameters
    ----------
    entries : iterable of SourceSettings
        The ``[[sources]]`` entries.
    table : Path, optional
        A table file of more.

    Returns
    -------
    tuple of Source
        In the order given, the table's last.

    Raises
    ------
    SettingsError
        If the table cannot be used, or two sources have one name.
    """
    listed = [source_of(entry) for entry in entries]
    if table is not None:
        listed += read_source_table(table)
    names: set[str] = set()
    faults = []
    for source in listed:
        if source.name in names:
            faults.append(
                f"sources: names must differ, got {source.name!r} twice; rename one"
            )
        names.add(source.name)
    if faults:
        raise SettingsError(table, faults)
    return tuple(listed)


def read_source_table(path: Path) -> tuple[Source, ...]:
    """Read sources from an ECSV or CSV file.

    Parameters
    ----------
    path : Path
        Table whose columns are named like the keys of ``[[sources]]``.  An empty
        or masked cell is a missing key.  Units in an ECSV file are converted.

    Returns
    -------
    tuple of Source
        One a row, in order.

    Raises
    ------
    SettingsError
        If the file cannot be read or a column, unit or value is wrong: one line a
        fault, all of them.
    """
    from astropy.io.registry import IORegistryError
    from astropy.table import Table

    style = "ascii.ecsv" if path.suffix.lower() == ".ecsv" else "ascii.csv"
    try:
        table = Table.read(path, format=style)
    except OSError as error:
        fault = f"cannot be read: {error.strerror or error}; give the path of a table"
        raise SettingsError(path, [fault]) from None
    except (IORegistryError, ValueError, UnicodeError) as error:
        reason = str(error).strip().splitlines()[0]
        fault = f"not a table ({reason}); save it as ECSV or CSV"
        raise SettingsError(path, [fault]) from None

    faults = _column_faults(table)
    sources = []
    for number, row in enumerate(table, start=1) if not faults else ():
        try:
            sources.append(source_of(SourceSettings(**_filled_cells(row))))
        except ValidationError as error:
            faults += _row_faults(number, error)
    if faults:
        raise SettingsError(path, faults)
    return tuple(sources)


def _column_faults(table: Any) -> list[str]:
    """Convert the table's columns to the stated units; return what is wrong."""
    from astropy import units

    known = list(SourceSettings.model_fields)
    faults = []
    for name in table.colnames:
        if name not in known:
            faults.append(
                f"column {name}: unknown; rename or remove it (known: "
                f"{', '.join(known)})"
            )
        elif table[name].unit is not None:
            wanted = _UNITS.get(name)
            try:
                table[name].convert_unit_to(wanted)
            except (units.UnitsError, TypeError, AttributeError, ValueError):
                faults.append(
                    f"column {name}: must be in {wanted or 'no unit'}, got "
                    f"{table[name].unit}; convert it"
                )
    return faults


def _filled_cells(row: Any) -> dict[str, Any]:
    """Return a row's values as plain Python ones, without the empty cells."""
    import numpy as np

    cells = {}
    for name in row.colnames:
        value = row[name]
        if np.ma.is_masked(value):
            continue
        if isinstance(value, np.generic):
            value = value.item()
        if isinstance(value, float) and np.isnan(value):
            continue
        # A name made of digits is read as a number.
        cells[name] = str(value) if name == "name" else value
    return cells


def _row_faults(number: int, error: ValidationError) -> list[str]:
    faults = []
    for detail in error.errors(include_url=False):
        key = f": {detail['loc'][0]}" if detail["loc"] else ""
        rule = detail["msg"].removeprefix("Input ").removeprefix("Value error, ")
        got = f", got {detail['input']!r}" if detail["loc"] else ""
        if detail["type"] == "missing":
            got = "; fill the cell"
        faults.append(f"row {number}{key}: {rule}{got}")
    return faults
