"""A plan before any frame is taken: what fields probe, and where echoes lie."""

from __future__ import annotations

import difflib
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from astropy.io import fits

import latelight
from latelight.config import NightConfig
from latelight.errors import SettingsError
from latelight.origin.sources import age_yr
from latelight.planning.cells import (
    Cells,
    cell_places,
    cells_of,
    joined,
    likeliest,
    uniq,
)
from latelight.planning.extent import PlannedField
from latelight.planning.rings import Layer, Ring, layer_depth_pc, ring_of
from latelight.planning.settings import FieldSettings, LayerSettings
from latelight.products.atomic import make_folder, write_bytes
from latelight.products.fits_file import ascii_text, fits_bytes
from latelight.products.plan_columns import (
    PLAN_CELL_COLUMNS,
    PLAN_COLUMNS,
    PLAN_RING_COLUMNS,
)
from latelight.products.plan_rows import PlanCellRow, PlanRingRow, PlanRow
from latelight.products.tables import make_table, to_ecsv
from latelight.records import Source
from latelight.reports.dates import mjd_of
from latelight.reports.plan_fields import field_row
from latelight.reports.plan_picture import SourcePanel, draw_plan

__all__ = ["PlanResult", "plan_fields"]

_EXAMPLE = """add what is to be planned, for example

[plan]
date = "2027-03-14"

[[fields]]
name = "Larkfield"
ra = 82.9
dec = -30.4
width_deg = 0.5

[[layers]]
name = "near sheet"
depth_pc = 40.0
"""


@dataclass(frozen=True, slots=True)
class PlanResult:
    """What a plan left behind.

    Attributes
    ----------
    fields : tuple of PlanRow
        One a source and field, by source, nearest field first.
    rings : tuple of PlanRingRow
        One a source and layer.
    mjd : float
        Date of the plan.
    folder : Path
        Where the products are.
    files : tuple of Path
        All of them.
    """

    fields: tuple[PlanRow, ...]
    rings: tuple[PlanRingRow, ...]
    mjd: float
    folder: Path
    files: tuple[Path, ...]


@dataclass(frozen=True, slots=True)
class _Echoes:
    """The layers of one source."""

    rows: tuple[PlanRingRow, ...]
    rings: tuple[tuple[str, Ring], ...]
    cells: Cells | None


def plan_fields(
    config: NightConfig,
    sources: Sequence[Source],
    *,
    mjd: float | None = None,
    folder: Path | None = None,
) -> PlanResult:
    """Plan the fields and layers of a settings file, and write the products.

    Parameters
    ----------
    config : NightConfig
        The settings; tables ``[plan]``, ``[[fields]]`` and ``[[layers]]``.
    sources : sequence of Source
        The listed outbursts.
    mjd : float or None
        Date of the plan, MJD; that of the settings by default.
    folder : Path or None
        Where to write; the folder ``plan`` in the output of the night by default.

    Raises
    ------
    SettingsError
        If there is nothing to plan, no date, or a layer names no source.
    ProductError
        If a product cannot be written.
    """
    mjd = _date(config) if mjd is None else mjd
    _check(config, sources)
    fields = [_field(entry) for entry in config.fields]
    rows = tuple(
        row
        for source in sources
        for row in sorted(
            (field_row(source, field, mjd=mjd, config=config) for field in fields),
            key=lambda row: row.separation,
        )
    )
    echoes = {source.name: _echoes(source, mjd, config) for source in sources}
    rings = tuple(row for found in echoes.values() for row in found.rows)
    folder = Path(config.night.output) / "plan" if folder is None else folder
    make_folder(folder)
    files = _write(folder, rows, rings, echoes)
    panels = [
        SourcePanel(source, age_yr(source, mjd), found.rings, found.cells)
        for source, found in zip(sources, echoes.values(), strict=True)
    ]
    panels.sort(key=lambda panel: not panel.rings)  # those with rings first
    files += (folder / "plan.png",)
    write_bytes(files[-1], draw_plan(panels, fields, mjd=mjd))
    return PlanResult(rows, rings, mjd, folder, files)


def _date(config: NightConfig) -> float:
    if config.plan.date is None:
        fault = 'plan.date: missing; add date = "2027-03-14" to [plan] or give --at'
        raise SettingsError(None, [fault])
    try:
        return mjd_of(str(config.plan.date))
    except ValueError as error:
        raise SettingsError(None, [f"plan.date: {error}"]) from None


def _check(config: NightConfig, sources: Sequence[Source]) -> None:
    faults = []
    if not config.fields and not config.layers:
        faults.append(f"fields: none given, and no layers; {_EXAMPLE}")
    if not sources:
        faults.append(
            "sources: none listed; add [[sources]] with name, ra, dec, distance and age"
        )
    names = [source.name for source in sources]
    for number, layer in enumerate(config.layers):
        if layer.source is not None and layer.source not in names:
            near = difflib.get_close_matches(layer.source, names, n=1)
            hint = f"did you mean {near[0]!r}?" if near else "list it under [[sources]]"
            fault = f"must be a listed source, got {layer.source!r}; {hint}"
            faults.append(f"layers[{number}].source: {fault}")
    for table, names in (
        ("fields", [field.name for field in config.fields]),
        ("layers", [layer.name for layer in config.layers]),
    ):
        for number, name in enumerate(names):
            if name in names[:number]:
                fault = f"names must differ, got {name!r} twice; rename one"
                faults.append(f"{table}[{number}].name: {fault}")
    if faults:
        raise SettingsError(None, faults)


def _field(entry: FieldSettings) -> PlannedField:
    width = entry.width_deg or 0.0
    return PlannedField(
        name=entry.name,
        ra=entry.ra,
        dec=entry.dec,
        width_deg=width,
        height_deg=entry.height_deg or width,
        radius_deg=entry.radius_deg or 0.0,
    )


def _layer(entry: LayerSettings, config: NightConfig) -> Layer:
    return Layer(
        name=entry.name,
        depth_pc=entry.depth_pc,
        distance_pc=entry.distance_pc,
        thickness_pc=entry.thickness_pc or config.plan.thickness_pc,
        slope=entry.slope,
        slope_pa=entry.slope_pa,
    )


def _echoes(source: Source, mjd: float, config: NightConfig) -> _Echoes:
    rows, rings, parts = [], [], []
    for entry in config.layers:
        if entry.source not in (None, source.name):
            continue
        layer = _layer(entry, config)
        try:
            ring, cells = _ring_and_cells(source, layer, mjd, config)
        except ValueError as error:
            rows.append(_ring_row(source, layer, mjd, None, None, str(error)))
            continue
        kept = likeliest(cells, config.plan.moc_probability)
        rows.append(_ring_row(source, layer, mjd, ring, kept, ""))
        rings.append((layer.name, ring))
        parts.append(cells)
    whole = likeliest(joined(parts), config.plan.moc_probability) if parts else None
    return _Echoes(tuple(rows), tuple(rings), whole)


def _ring_and_cells(
    source: Source, layer: Layer, mjd: float, config: NightConfig
) -> tuple[Ring, Cells]:
    """Return where a layer echoes a source; ValueError with the reason where not."""
    age = age_yr(source, mjd)
    if source.distance_pc is None or age is None:
        missing = "distance" if source.distance_pc is None else "age"
        msg = f"{missing} of the source unknown"
        raise ValueError(msg)
    if age <= 0.0:
        msg = f"the outburst's light arrives {-age:.4g} years after the date"
        raise ValueError(msg)
    known = {
        "ra": source.ra,
        "dec": source.dec,
        "age_yr": age,
        "distance_pc": source.distance_pc,
        "age_err_yr": source.age_err_yr or 0.0,
        "distance_err_pc": source.distance_err_pc or 0.0,
    }
    duration = source.duration_days or config.plan.duration_days
    ring = ring_of(layer, **known)
    cells = cells_of(layer, **known, order=config.plan.order, duration_days=duration)
    return ring, cells


def _ring_row(
    source: Source,
    layer: Layer,
    mjd: float,
    ring: Ring | None,
    cells: Cells | None,
    remark: str,
) -> PlanRingRow:
    distance = source.distance_pc
    depth = None if distance is None else layer_depth_pc(layer, distance)
    return PlanRingRow(
        source=source.name,
        layer=layer.name,
        mjd=mjd,
        dust_depth=layer.depth_pc if depth is None else depth,
        observer_distance=(
            layer.distance_pc if distance is None or depth is None else distance - depth
        ),
        thickness=layer.thickness_pc,
        slope=layer.slope,
        slope_pa=layer.slope_pa,
        ra=None if ring is None else ring.ra,
        dec=None if ring is None else ring.dec,
        shift=None if ring is None else ring.shift_deg,
        radius=None if ring is None else ring.radius_deg,
        radius_err=None if ring is None else ring.radius_err_deg,
        radius_inner=None if ring is None else ring.inner_deg,
        radius_outer=None if ring is None else ring.outer_deg,
        cells=None if cells is None else int(cells.cell.size),
        area=None if cells is None else _area(cells),
        remark=remark,
    )


def _area(cells: Cells) -> float:
    """Return the area of cells, square degrees."""
    sky = 4.0 * np.pi * np.degrees(1.0) ** 2
    return float(cells.cell.size * sky / (12.0 * 4.0**cells.order))


def _write(
    folder: Path,
    fields: Sequence[PlanRow],
    rings: Sequence[PlanRingRow],
    echoes: dict[str, _Echoes],
) -> tuple[Path, ...]:
    listed: list[PlanCellRow] = []
    files = [folder / f"plan{what}.ecsv" for what in ("", "_rings", "_cells")]
    for name, found in echoes.items():
        if found.cells is None:
            continue
        listed += _cell_rows(name, found.cells)
        path = folder / f"plan_{_file_name(name, list(echoes))}.moc.fits"
        write_bytes(path, _moc_bytes(name, found.cells))
        files.append(path)
    tables = (
        make_table("plan", fields, PLAN_COLUMNS),
        make_table("plan_rings", rings, PLAN_RING_COLUMNS),
        make_table("plan_cells", listed, PLAN_CELL_COLUMNS),
    )
    for path, table in zip(files, tables, strict=False):
        write_bytes(path, to_ecsv(table))
    return tuple(files)


def _cell_rows(name: str, cells: Cells) -> list[PlanCellRow]:
    ra, dec = cell_places(cells.cell, cells.order)
    return [
        PlanCellRow(
            source=name,
            order=cells.order,
            cell=int(cell),
            ra=float(east),
            dec=float(north),
            probability=float(share),
        )
        for cell, east, north, share in zip(
            cells.cell, ra, dec, cells.probability, strict=True
        )
    ]


def _file_name(name: str, names: Sequence[str]) -> str:
    """Return a name with nothing in it that a file system minds, unlike the others."""
    plain = [re.sub(r"[^A-Za-z0-9.+-]+", "_", other).strip("_.") for other in names]
    own = plain[names.index(name)] or "source"
    alike = [other for other, text in zip(names, plain, strict=True) if text == own]
    return own if len(alike) < 2 else f"{own}_{alike.index(name) + 1}"


def _moc_bytes(name: str, cells: Cells) -> bytes:
    """Return a MOC in FITS: IVOA MOC 2.0, section on FITS serialisation."""
    hdu = fits.BinTableHDU.from_columns(
        [fits.Column(name="UNIQ", format="K", array=uniq(cells))]
    )
    hdu.header["MOCVERS"] = ("2.0", "MOC version")
    hdu.header["MOCDIM"] = ("SPACE", "physical dimension")
    hdu.header["ORDERING"] = ("NUNIQ", "coding of the cells")
    hdu.header["COORDSYS"] = ("C", "ICRS")
    hdu.header["MOCORD_S"] = (cells.order, "MOC resolution: best order")
    hdu.header["MOCORDER"] = (cells.order, "the same, as in MOC 1.1")
    hdu.header["PIXTYPE"] = "HEALPIX"
    hdu.header["MOCTOOL"] = (f"latelight {latelight.__version__}", "made by")
    hdu.header["MOCTYPE"] = ("CATALOG", "cells of a list")
    hdu.header["OBJECT"] = (ascii_text(name)[:60], "outburst whose echo shows there")
    return fits_bytes([fits.PrimaryHDU(), hdu])
