"""Truth and sources as tables."""

from __future__ import annotations

import io
from collections.abc import Iterable, Sequence
from dataclasses import asdict
from pathlib import Path

from astropy.table import Table

from latelight.errors import ProductError
from latelight.records import Source
from latelight.simulation.truth import FieldTruth, FrameTruth, PairTruth

__all__ = [
    "echo_rows",
    "frame_row",
    "nuisance_rows",
    "source_rows",
    "track_point_rows",
    "track_rows",
    "write_table",
]

Row = dict[str, str | float]

# Numbers of a track that hold for all epochs.
TRACK_NUMBERS = (
    "mjd",
    "ra",
    "dec",
    "x",
    "y",
    "normal_pa",
    "speed_arcsec_yr",
    "change_arcsec_yr2",
    "length_arcsec",
    "width_arcsec",
    "depth_pc",
    "bound_all",
    "bound_best",
)

UNITS = {
    "ra": "deg",
    "dec": "deg",
    "x": "pix",
    "y": "pix",
    "normal_pa": "deg",
    "speed_arcsec_yr": "arcsec / yr",
    "shift_arcsec": "arcsec",
    "shift_px": "pix",
    "surface_brightness": "mag / arcsec2",
    "length_arcsec": "arcsec",
    "width_arcsec": "arcsec",
    "change_arcsec_yr2": "arcsec / yr2",
    "offset_arcsec": "arcsec",
    "depth_pc": "pc",
    "distance_pc": "pc",
    "distance_err_pc": "pc",
    "age_yr": "yr",
    "age_err_yr": "yr",
    "age_at_mjd": "d",
    "mjd": "d",
    "zero_point": "mag",
    "fwhm_px": "pix",
    "angle": "deg",
    "radius_px": "pix",
    "mag": "mag",
    "counts": "adu",
}


def echo_rows(truth: PairTruth, **labels: str) -> list[Row]:
    """Return one row an echo, led by labels such as field and file names."""
    return [{**labels, **asdict(echo)} for echo in truth.echoes]


def track_rows(truth: FieldTruth, **labels: str) -> list[Row]:
    """Return one row a track, numbered from 1 and led by labels."""
    return [
        {
            **labels,
            "track": number,
            "source": echo.source,
            **{name: getattr(echo, name) for name in TRACK_NUMBERS},
            "surface_brightness": echo.surface_brightness[truth.grid],
        }
        for number, echo in enumerate(truth.echoes, start=1)
    ]


def track_point_rows(
    truth: FieldTruth, frames: Sequence[str], **labels: str
) -> list[Row]:
    """Return one row for every track and epoch, led by labels.

    ``bound_first`` is the S/N of a perfect filter on the epoch against the first.
    """
    return [
        {
            **labels,
            "track": number,
            "frame": frame,
            "mjd": truth.mjds[epoch],
            "ra": echo.ras[epoch],
            "dec": echo.decs[epoch],
            "offset_arcsec": echo.offsets_arcsec[epoch],
            "surface_brightness": echo.surface_brightness[epoch],
            "bound_first": echo.bound_pairs[0][epoch],
        }
        for number, echo in enumerate(truth.echoes, start=1)
        for epoch, frame in enumerate(frames)
    ]


def frame_row(truth: FrameTruth, *, mjd: float, **labels: str) -> Row:
    """Return one row for a frame."""
    return {
        **labels,
        "mjd": mjd,
        "zero_point": truth.zero_point,
        "fwhm_px": truth.fwhm_px,
        "cosmic_ray_pixels": int(truth.cosmic_rays.sum()),
        "saturated_pixels": int(truth.saturated.sum()),
    }


def nuisance_rows(truth: FrameTruth, **labels: str) -> list[Row]:
    """Return one row for every trail, mover, variable star, ghost and halo."""
    ny, nx = truth.expected.shape
    rows: list[Row] = []

    def add(kind: str, x: float, y: float, **numbers: float) -> None:
        blank = dict.fromkeys(("angle", "radius_px", "mag", "counts"), float("nan"))
        rows.append({**labels, "kind": kind, "x": x, "y": y, **blank, **numbers})

    for trail in truth.trails:
        add("trail", trail.x, trail.y, angle=trail.angle, counts=trail.peak_counts)
    for x, y, mag in truth.movers:
        add("mover", float(x), float(y), mag=float(mag))
    for x, y, radius, height in truth.ghosts:
        add("disc", float(x), float(y), radius_px=float(radius), counts=float(height))
    stars = truth.stars
    inside = (stars.x > 0) & (stars.x < nx - 1) & (stars.y > 0) & (stars.y < ny - 1)
    for i in (inside & stars.variable).nonzero()[0]:
        add(
            "variable",
            float(stars.x[i]),
            float(stars.y[i]),
            mag=float(stars.mag[i]),
            counts=float(stars.counts[i]),
        )
    return rows


def source_rows(sources: Iterable[Source]) -> list[Row]:
    """Return one row a source, with those columns of a source list that are known."""
    rows = [asdict(source) for source in sources]
    known = {name for row in rows for name, value in row.items() if value is not None}
    return [
        {name: value for name, value in row.items() if name in known} for row in rows
    ]


def _as_table(rows: list[Row]) -> Table:
    """Return rows, at least one, as a table with units and six decimals."""
    table = Table()
    for name in rows[0]:
        values = [row[name] for row in rows]
        table[name] = [round(v, 6) if isinstance(v, float) else v for v in values]
        if name in UNITS:
            table[name].unit = UNITS[name]
    return table


def write_table(path: Path, rows: list[Row]) -> Path:
    """Write rows, at least one, as ECSV.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    text = io.StringIO()
    _as_table(rows).write(text, format="ascii.ecsv")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text.getvalue(), encoding="utf-8")
    except OSError as error:
        reason = f"{error.strerror or error}; choose a folder that can be written"
        raise ProductError(path, reason) from None
    return path
