"""Where the arcs of a finished night will be at a date: table and finder charts."""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from latelight.errors import ProductError
from latelight.forecast.brightness import predict_brightness
from latelight.forecast.predict import Forecast, date_moved, predict
from latelight.products.atomic import make_folder, write_bytes
from latelight.products.forecast_columns import FORECAST_COLUMNS
from latelight.products.forecast_rows import ForecastRow
from latelight.products.picture import png_bytes
from latelight.products.tables import make_table, to_ecsv
from latelight.records import FloatArray
from latelight.reports.finder import draw_finder
from latelight.reports.finder_ground import Grounds
from latelight.reports.known_frames import KnownFrame, inside, known_frames
from latelight.reports.moving_arcs import FollowedArc, NightArcs, read_arcs
from latelight.sky import separation_deg

__all__ = ["ForecastResult", "forecast_arcs", "forecast_row"]

# log10 of odds below which the sense of a motion is said to be unsure.
_SURE = 1.0


@dataclass(frozen=True, slots=True)
class ForecastResult:
    """What a forecast left behind.

    Attributes
    ----------
    rows : tuple of ForecastRow
        One an arc, tracks first.
    left_out : dict of str to str
        Why an arc of the tables has none, by id.
    table : Path
        ``forecast.ecsv``.
    charts : tuple of Path
        Finder charts.
    no_chart : dict of str to str
        Why an arc has no chart, by id.
    """

    rows: tuple[ForecastRow, ...]
    left_out: dict[str, str]
    table: Path
    charts: tuple[Path, ...]
    no_chart: dict[str, str]


def forecast_arcs(
    output: Path,
    *,
    mjd: float,
    ids: Sequence[str] = (),
    folder: Path | None = None,
    slit_width: float = 1.0,
    slit_length: float = 30.0,
) -> ForecastResult:
    """Forecast the arcs of a night, write the table and the finder charts.

    Parameters
    ----------
    output : Path
        Output folder of ``latelight run``.
    mjd : float
        The date, MJD (UTC).
    ids : sequence of str
        Tracks and candidates to forecast; all that move by default.
    folder : Path or None
        Where ``forecast.ecsv`` and the folder ``forecast`` go; ``output`` by default.
    slit_width, slit_length : float
        Of the slits drawn, arcsec, positive.

    Raises
    ------
    ProductError
        If a table cannot be read or a product not be written, or the tables hold no
        arc of a name given.
    """
    night = read_arcs(output)
    chosen = _chosen(output, night, ids)
    frames = known_frames(output)
    rows = tuple(
        forecast_row(
            arc, mjd, frames=frames, slit_width=slit_width, slit_length=slit_length
        )
        for arc in chosen
    )
    folder = output if folder is None else folder
    make_folder(folder / "forecast")
    table = folder / "forecast.ecsv"
    write_bytes(table, to_ecsv(make_table("forecast", rows, FORECAST_COLUMNS)))
    grounds = Grounds(output, frames)
    charts, no_chart = [], {}
    for arc, row in zip(chosen, rows, strict=True):
        try:
            ground = grounds.under(arc)
        except ProductError as error:
            no_chart[arc.id] = str(error)
            continue
        chart = draw_finder(ground, grounds.shape(arc), row, arc)
        charts.append(folder / "forecast" / f"{arc.id}.png")
        write_bytes(charts[-1], png_bytes(chart))
    left_out = {} if ids else night.left_out
    return ForecastResult(rows, left_out, table, tuple(charts), no_chart)


def forecast_row(
    followed: FollowedArc,
    mjd: float,
    *,
    frames: Mapping[str, KnownFrame],
    slit_width: float,
    slit_length: float,
) -> ForecastRow:
    """Return the row of one arc at a date.

    Parameters
    ----------
    followed : FollowedArc
        The arc.
    mjd : float
        The date, MJD.
    frames : mapping of str to KnownFrame
        Frames whose corners are known, by name.
    slit_width, slit_length : float
        Arcsec.
    """
    arc = followed.arc
    there = predict(arc, mjd)
    last = predict(arc, followed.mjd_last)
    brightness, brightness_err = _brightness(followed, there)
    moved = [
        followed.seeing
        and date_moved(arc, widths * followed.seeing, since_mjd=followed.mjd_last)
        for widths in (1.0, 3.0)
    ]
    known = frames.get(followed.frame)
    corners = None if known is None else known.corners
    in_field = "unknown"
    if corners is not None:
        in_field = "yes" if inside(corners, there.ra, there.dec) else "no"
    chance = 1.0
    if there.offset_err > 0.0:
        chance = math.erf(0.5 * slit_width / there.offset_err / math.sqrt(2.0))
    return ForecastRow(
        id=followed.id,
        kind=followed.kind,
        field=followed.field,
        filter=followed.filter,
        mjd=mjd,
        mjd_last=followed.mjd_last,
        ra=there.ra,
        dec=there.dec,
        offset=there.offset - last.offset,
        offset_err=there.offset_err,
        across_err=there.across_err,
        motion_pa=there.pa,
        motion_pa_err=there.pa_err,
        slit_pa_along=(there.pa + 90.0) % 180.0,
        slit_pa_motion=there.pa % 180.0,
        slit_width=slit_width,
        slit_length=slit_length,
        slit_chance=chance,
        speed=there.speed,
        speed_err=there.speed_err,
        length=arc.length,
        width=followed.width,
        surface_brightness=brightness,
        surface_brightness_err=brightness_err,
        seeing=followed.seeing,
        mjd_moved_1=moved[0],
        mjd_moved_3=moved[1],
        in_field=in_field,
        source=followed.source,
        remark="; ".join(_remarks(followed, there, corners, in_field)),
    )


def _chosen(
    output: Path, night: NightArcs, ids: Sequence[str]
) -> tuple[FollowedArc, ...]:
    if not ids:
        return night.arcs
    by_id = {arc.id: arc for arc in night.arcs}
    for name in ids:
        if name in by_id:
            continue
        if name in night.left_out:
            raise ProductError(
                output, f"no forecast for {name!r}: {night.left_out[name]}"
            )
        near = difflib.get_close_matches(name, by_id, n=1)
        hint = f"did you mean {near[0]!r}?" if near else "see the column id"
        reason = f"tracks.ecsv and candidates.ecsv hold no arc {name!r}; {hint}"
        raise ProductError(output, reason)
    return tuple(by_id[name] for name in dict.fromkeys(ids))


def _brightness(
    followed: FollowedArc, there: Forecast
) -> tuple[float, float] | tuple[None, None]:
    reach = math.hypot(followed.width or 0.0, followed.seeing or 0.0)
    if not followed.brightness or reach == 0.0:
        return None, None
    epochs, magnitudes, errors = zip(*followed.brightness, strict=True)
    offsets = [predict(followed.arc, epoch).offset for epoch in epochs]
    return predict_brightness(offsets, magnitudes, errors, at=there.offset, reach=reach)


def _remarks(
    followed: FollowedArc,
    there: Forecast,
    corners: FloatArray | None,
    in_field: str,
) -> list[str]:
    """Return what to mind, the gravest first."""
    found = []
    if corners is not None and there.offset_err > _diagonal(corners):
        found.append("too far away in time: the error exceeds the field")
    elif there.offset_err > followed.arc.length:
        found.append("too far away in time: the error exceeds the arc's length")
    if in_field == "no":
        found.append("leaves the known field")
    if there.mjd < followed.mjd_last:
        found.append("hindcast: the date is before the last epoch")
    if there.speed <= 0.0:
        found.append("the fitted change of speed turns the arc round before")
    if followed.sense_odds is not None and followed.sense_odds < _SURE:
        found.append(
            f"sense of the motion unsure (odds {10.0**followed.sense_odds:.1f} to 1)"
        )
    return found


def _diagonal(corners: FloatArray) -> float:
    """Return the distance between two opposite corners, arcsec."""
    return float(separation_deg(*corners[0], *corners[2])) * 3600.0
