"""Turn tracks, in pixels and counts, into rows of the tables."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict
from typing import Literal

import numpy as np

from latelight.night.calibration import Calibration, known, magnitude_error, scaled
from latelight.night.rows import meaning_of, with_meaning
from latelight.products.rows import CandidateRow
from latelight.products.track_rows import InterpretationRow, TrackPointRow, TrackRow
from latelight.records import (
    EpochSeries,
    OriginScore,
    Source,
    Track,
    TrackPoint,
    TrackSeed,
)

__all__ = ["interpretation_rows", "track_point_rows", "track_row"]

# An epoch shows an arc whose height is so many sigmas.
_SHOWN_SIGMAS = 3.0


def track_row(
    track: Track,
    score: OriginScore | None,
    *,
    series: EpochSeries,
    field: str,
    filter: str,  # noqa: A002 - the name of the column
    grid: str,
    calibration: Calibration,
    sources: Iterable[Source] = (),
) -> TrackRow:
    """Return the row of a track; id and candidates are told once all is complete.

    Parameters
    ----------
    track : Track
        In pixels of the grid.
    score : OriginScore or None
        Its best source, when one explains it well enough.
    series : EpochSeries
        What it was found in.
    field, filter : str
        Words of the frames.
    grid : str
        Name of the frame whose pixels count.
    calibration : Calibration
        Scales of that frame.
    sources : iterable of Source
        All that are listed: the row says what the track means for the best.
    """
    x, y = track.x, track.y
    ra, dec = calibration.place(x, y)
    normal_pa, scale = calibration.direction(x, y, track.direction_angle)
    _, along = calibration.direction(x, y, track.direction_angle + 90.0)
    pixel = calibration.scale(x, y)
    brightness, brightness_err = _brightness(_last_shown(track), track, calibration)
    row = TrackRow(
        id="",
        field=field,
        filter=filter,
        grid=grid,
        mjd=track.mjd,
        mjd_first=float(series.mjd[0]),
        mjd_last=float(series.mjd[-1]),
        n_epochs=sum(np.isfinite(point.height_counts) for point in track.points),
        ra=ra,
        dec=dec,
        place_err=scaled(track.place_err_px, scale),
        snr=track.snr,
        length=scaled(track.length_px, along),
        width=scaled(track.width_px, scale),
        width_err=scaled(track.width_err_px, scale),
        surface_brightness=brightness,
        surface_brightness_err=brightness_err,
        normal_pa=normal_pa,
        normal_pa_err=None if normal_pa is None else known(track.direction_angle_err),
        speed=scaled(track.speed_px_yr, scale),
        speed_err=scaled(track.speed_err_px_yr, scale),
        speed_change=scaled(track.change_px_yr2, scale),
        speed_change_err=scaled(track.change_err_px_yr2, scale),
        **_covariances(track, scale),
        source=score.source if score else "",
        away_angle=known(score.away_angle) if score else None,
        score=known(score.score) if score else None,
        dust_depth=known(score.dust_depth_pc) if score else None,
        dust_depth_err=known(score.dust_depth_err_pc) if score else None,
        found_in=_found_in(track.seeds),
        candidates="",
        verdict=track.verdict,
        x=x,
        y=y,
        normal_angle=track.direction_angle,
        normal_angle_err=track.direction_angle_err,
        length_px=track.length_px,
        width_px=track.width_px,
        sense_odds=known(track.sense_odds),
        chi2=known(track.chi2),
        seeing=scaled(float(np.median(series.fwhm_px)), pixel),
        speed_px=known(track.speed_px_yr),
        speed_err_px=known(track.speed_err_px_yr),
        source_separation=known(score.separation_deg) if score else None,
    )
    return with_meaning(row, sources)


def track_point_rows(
    track: Track, *, series: EpochSeries, calibration: Calibration
) -> tuple[TrackPointRow, ...]:
    """Return the rows of a track's epochs; the track's id is given later.

    Parameters
    ----------
    track : Track
        In pixels of the grid.
    series : EpochSeries
        What it was found in.
    calibration : Calibration
        Scales of the grid's frame.
    """
    _, scale = calibration.direction(track.x, track.y, track.direction_angle)
    rows = []
    for point in track.points:
        brightness, brightness_err = _brightness(point, track, calibration)
        rows.append(
            TrackPointRow(
                track="",
                frame=series.names[point.epoch],
                mjd=point.mjd,
                offset=scaled(point.offset_px, scale),
                offset_err=scaled(point.offset_err_px, scale),
                surface_brightness=brightness,
                surface_brightness_err=brightness_err,
                height_counts=known(point.height_counts),
                height_err_counts=known(point.height_err_counts),
            )
        )
    return tuple(rows)


def interpretation_rows(
    row: CandidateRow | TrackRow,
    scores: Iterable[OriginScore],
    *,
    sources: Iterable[Source],
) -> tuple[InterpretationRow, ...]:
    """Return what an arc means for every source that was scored.

    Parameters
    ----------
    row : CandidateRow or TrackRow
        The arc; its id is taken over.
    scores : iterable of OriginScore
        How well each source explains it.
    sources : iterable of Source
        All that are listed.

    Returns
    -------
    tuple of InterpretationRow
        In the order of the scores; empty where the arc's place is not known.
    """
    by_name = {source.name: source for source in sources}
    kind: Literal["track", "candidate"] = (
        "track" if isinstance(row, TrackRow) else "candidate"
    )
    rows = []
    for score in scores:
        meaning = meaning_of(row, by_name[score.source])
        if meaning is not None:
            rows.append(
                InterpretationRow(
                    id=row.id, kind=kind, score=known(score.score), **asdict(meaning)
                )
            )
    return tuple(rows)


def _covariances(track: Track, scale: float | None) -> dict[str, float | None]:
    """Return the covariances of the motion in arcsec and years."""
    fitted = np.isfinite(track.change_px_yr2)
    square = None if scale is None else scale**2
    of_change = square if fitted else None
    covariance = track.covariance
    return {
        "place_speed_cov": scaled(float(covariance[0, 1]), square),
        "place_change_cov": scaled(float(covariance[0, 2]), of_change),
        "speed_change_cov": scaled(float(covariance[1, 2]), of_change),
    }


def _last_shown(track: Track) -> TrackPoint | None:
    """Return the last epoch at which the arc shows."""
    shown = [
        point
        for point in track.points
        if point.height_counts >= _SHOWN_SIGMAS * point.height_err_counts
    ]
    return shown[-1] if shown else None


def _brightness(
    point: TrackPoint | None, track: Track, calibration: Calibration
) -> tuple[float, float | None] | tuple[None, None]:
    """Return mag/arcsec^2 of a track at an epoch, and 1 sigma."""
    if point is None:
        return None, None
    counts = point.height_counts
    brightness = calibration.surface_brightness(counts, track.x, track.y)
    if brightness is None:
        return None, None
    return brightness, magnitude_error(counts, point.height_err_counts)


def _found_in(seeds: tuple[TrackSeed, ...]) -> str:
    origins = {seed.origin == "stack" for seed in seeds}
    return "both" if len(origins) == 2 else "stack" if True in origins else "pairs"
