"""Turn what the stages found, in pixels and counts, into rows of the tables."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from typing import TypeVar

from latelight.night.calibration import Calibration, known, magnitude_error, scaled
from latelight.night.pairing import AnyPair
from latelight.origin.interpret import interpret
from latelight.products.meaning_columns import MEANING_COLUMNS
from latelight.products.rows import ArcRow, CandidateRow, ResidualRow
from latelight.products.track_rows import TrackRow
from latelight.records import (
    Arc,
    CompactResidual,
    Interpretation,
    Motion,
    OriginScore,
    Source,
)

__all__ = [
    "arc_row",
    "candidate_row",
    "meaning_of",
    "residual_row",
    "speed_of",
    "with_meaning",
]

_Moving = TypeVar("_Moving", CandidateRow, TrackRow)

DAYS_PER_YEAR = 365.25

# An arc that leaves its chord by less than this (L^2 / 8R) is straight.
_STRAIGHT_PX = 0.1


def speed_of(
    motion: Motion, pair: AnyPair, calibration: Calibration
) -> tuple[float, float] | tuple[None, None]:
    """Return the speed of an arc along its motion and 1 sigma, arcsec/yr.

    None against a stack: such a motion has no shift.
    """
    _, scale = calibration.direction(motion.x, motion.y, motion.direction_angle)
    shift, shift_err = known(motion.shift_px), known(motion.shift_err_px)
    if scale is None or shift is None or shift_err is None:
        return None, None
    years = abs(pair.science.mjd - pair.template.mjd) / DAYS_PER_YEAR
    return shift * scale / years, shift_err * scale / years


def candidate_row(
    arc: Arc,
    motion: Motion,
    score: OriginScore | None,
    *,
    pair: AnyPair,
    calibration: Calibration,
    sources: Iterable[Source] = (),
) -> CandidateRow:
    """Return the row of a candidate; its id is given once the night is complete.

    With the list of ``sources`` it says what the arc means for the best of them.
    """
    x, y = motion.x, motion.y
    ra, dec = calibration.place(x, y)
    normal_pa, across = calibration.direction(x, y, motion.direction_angle)
    _, along = calibration.direction(arc.x, arc.y, arc.normal_angle + 90.0)
    speed, speed_err = speed_of(motion, pair, calibration)
    counts = motion.surface_brightness_counts
    counts_err = motion.surface_brightness_err_counts
    brightness = calibration.surface_brightness(counts, x, y)
    row = CandidateRow(
        id="",
        field=pair.science.field,
        filter=pair.science.filter,
        template=pair.template.name,
        science=pair.science.name,
        mjd_template=pair.template.mjd,
        mjd_science=pair.science.mjd,
        ra=ra,
        dec=dec,
        snr=arc.snr,
        length=scaled(arc.length_px, along),
        width=scaled(motion.width_px, across),
        surface_brightness=brightness,
        normal_pa=normal_pa,
        normal_pa_err=None if normal_pa is None else known(motion.direction_angle_err),
        speed=speed,
        speed_err=speed_err,
        source=score.source if score else "",
        away_angle=known(score.away_angle) if score else None,
        score=known(score.score) if score else None,
        dust_depth=known(score.dust_depth_pc) if score else None,
        dust_depth_err=known(score.dust_depth_err_pc) if score else None,
        verdict=arc.verdict,
        pair=pair.name,
        x=x,
        y=y,
        normal_angle=motion.direction_angle,
        normal_angle_err=motion.direction_angle_err,
        shift_px=known(motion.shift_px),
        shift_err_px=known(motion.shift_err_px),
        length_px=arc.length_px,
        width_px=motion.width_px,
        width_err=scaled(motion.width_err_px, across),
        width_err_px=known(motion.width_err_px),
        surface_brightness_err=(
            None if brightness is None else magnitude_error(counts, counts_err)
        ),
        surface_brightness_counts=counts,
        surface_brightness_err_counts=known(counts_err),
        sense_odds=known(motion.sense_odds),
        lobes=motion.lobes,
        profile_chi2=known(motion.chi2),
        curvature_radius=_radius(arc, calibration),
        source_separation=known(score.separation_deg) if score else None,
    )
    return with_meaning(row, sources)


def with_meaning(row: _Moving, sources: Iterable[Source]) -> _Moving:
    """Return the row of an arc with what it means if its best source lit it.

    Parameters
    ----------
    row : CandidateRow or TrackRow
        Its ``source`` names the best one, or is empty.
    sources : iterable of Source
        All that are listed.
    """
    best = next((s for s in sources if row.source and s.name == row.source), None)
    meaning = None if best is None else meaning_of(row, best)
    if meaning is None:
        return row
    names = [column.name for column in MEANING_COLUMNS]
    return replace(row, **{name: getattr(meaning, name) for name in names})


def meaning_of(row: CandidateRow | TrackRow, source: Source) -> Interpretation | None:
    """Return what an arc means if a source lit it; None where its place is unknown."""
    if row.ra is None or row.dec is None:
        return None
    return interpret(
        source,
        ra=row.ra,
        dec=row.dec,
        normal_pa=row.normal_pa,
        normal_pa_err=row.normal_pa_err,
        speed_arcsec_yr=row.speed,
        speed_err_arcsec_yr=row.speed_err,
        mjd=row.mjd if isinstance(row, TrackRow) else row.mjd_science,
    )


def arc_row(arc: Arc, *, pair: AnyPair, calibration: Calibration) -> ArcRow:
    """Return the row of a ridge, kept or set aside."""
    ra, dec = calibration.place(arc.x, arc.y)
    normal_pa, across = calibration.direction(arc.x, arc.y, arc.normal_angle)
    _, along = calibration.direction(arc.x, arc.y, arc.normal_angle + 90.0)
    counts = arc.surface_brightness_counts
    return ArcRow(
        pair=pair.name,
        verdict=arc.verdict,
        candidate="",
        sign=arc.sign,
        snr=arc.snr,
        x=arc.x,
        y=arc.y,
        ra=ra,
        dec=dec,
        length=scaled(arc.length_px, along),
        width=scaled(arc.width_px, across),
        normal_pa=None if normal_pa is None else normal_pa % 180.0,
        length_px=arc.length_px,
        width_px=arc.width_px,
        normal_angle=arc.normal_angle,
        normal_angle_err=arc.normal_angle_err,
        shift_px=known(arc.shift_px),
        surface_brightness=calibration.surface_brightness(counts, arc.x, arc.y),
        surface_brightness_counts=counts,
        curvature_radius=_radius(arc, calibration),
    )


def residual_row(
    residual: CompactResidual, *, pair: AnyPair, calibration: Calibration
) -> ResidualRow:
    """Return the row of a compact residual."""
    ra, dec = calibration.place(residual.x, residual.y)
    return ResidualRow(
        pair=pair.name,
        kind=residual.kind,
        ra=ra,
        dec=dec,
        x=residual.x,
        y=residual.y,
        flux=residual.flux,
        flux_err=residual.flux_err,
        magnitude=calibration.magnitude(abs(residual.flux)),
        snr=residual.snr,
        fwhm_px=residual.fwhm_px,
    )


def _radius(arc: Arc, calibration: Calibration) -> float | None:
    """Return the radius of the circle through an arc, arcsec."""
    scale = calibration.scale(arc.x, arc.y)
    curvature = abs(arc.curvature)
    if scale is None or curvature * arc.length_px**2 / 8.0 < _STRAIGHT_PX:
        return None
    return scale / curvature
