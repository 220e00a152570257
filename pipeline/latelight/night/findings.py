"""From a difference to rows and cutouts: arcs, motion, origin."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.arcs.find import find_arcs
from latelight.config import NightConfig
from latelight.motion.measure import measure_motion
from latelight.night.calibration import Calibration
from latelight.night.journal import Journal
from latelight.night.pairing import AnyPair, StackPair
from latelight.night.rows import arc_row, candidate_row, residual_row, speed_of
from latelight.night.track_rows import interpretation_rows
from latelight.origin.score import best_origin, score_origins
from latelight.products.cutouts import Cutout, cut_out
from latelight.products.rows import ArcRow, ResidualRow
from latelight.products.track_rows import InterpretationRow
from latelight.records import (
    Arc,
    Difference,
    MatchedPair,
    Motion,
    OriginScore,
    Source,
    StarList,
)

__all__ = ["Finding", "Findings", "MovingArc", "find_all"]


@dataclass(frozen=True, slots=True)
class Finding:
    """One candidate.

    Attributes
    ----------
    arc : int
        Its ridge, an index of ``Findings.arcs``.
    cutout : Cutout
        Its pixels, and its row without the id, which only the whole night can give.
    interpretations : tuple of InterpretationRow
        One a source, without the id.
    """

    arc: int
    cutout: Cutout
    interpretations: tuple[InterpretationRow, ...] = ()


@dataclass(frozen=True, slots=True)
class MovingArc:
    """An arc worth a look, with its motion.

    Attributes
    ----------
    index : int
        Its ridge, an index of ``Findings.arcs``.
    arc, motion : Arc, Motion
        What was measured, in pixels.
    """

    index: int
    arc: Arc
    motion: Motion


@dataclass(frozen=True, slots=True)
class Findings:
    """All that a difference showed.

    Attributes
    ----------
    arcs : tuple of ArcRow
        Every ridge, most significant first.
    residuals : tuple of ResidualRow
        Compact residuals.
    candidates : tuple of Finding
        The ridges worth a look.
    moving : tuple of MovingArc
        The same, in pixels.
    """

    arcs: tuple[ArcRow, ...] = ()
    residuals: tuple[ResidualRow, ...] = ()
    candidates: tuple[Finding, ...] = ()
    moving: tuple[MovingArc, ...] = ()


def find_all(
    difference: Difference,
    matched: MatchedPair,
    *,
    stars: StarList,
    pair: AnyPair,
    calibration: Calibration,
    sources: tuple[Source, ...],
    config: NightConfig,
    journal: Journal,
) -> Findings:
    """Find the arcs of a difference, measure them, and score their origins.

    Parameters
    ----------
    difference, matched : Difference, MatchedPair
        The pair subtracted, and the planes it was made from.
    stars : StarList
        Stars of the science frame.
    pair : Pair or StackPair
        The two frames.
    calibration : Calibration
        Scales of the science frame.
    sources : tuple of Source
        Candidate origins.
    config : NightConfig
        Settings of the stages.
    journal : Journal
        Takes times and counts.
    """
    with journal.stage("arcs"):
        arcs = find_arcs(difference, stars=stars, settings=config.arcs)
    with journal.stage("motion"):
        arcs, moving = _motions(difference, arcs, pair, config)
    with journal.stage("origin"):
        origins = {
            index: _scores(motion, pair, calibration, sources, config)
            for index, motion in moving.items()
        }
    with journal.stage("products"):
        candidates = []
        for index, motion in moving.items():
            row = candidate_row(
                arcs[index],
                motion,
                best_origin(origins[index], settings=config.origin),
                pair=pair,
                calibration=calibration,
                sources=sources,
            )
            cutout = cut_out(
                row,
                science=matched.science,
                template=matched.template,
                difference=difference,
                wcs=calibration.wcs,
                trace=arcs[index].trace,
                settings=config.products,
            )
            meanings = interpretation_rows(row, origins[index], sources=sources)
            candidates.append(Finding(index, cutout, meanings))
    journal.add(n_arcs=len(arcs), n_candidates=len(candidates))
    return Findings(
        tuple(arc_row(arc, pair=pair, calibration=calibration) for arc in arcs),
        tuple(
            residual_row(r, pair=pair, calibration=calibration)
            for r in difference.compact
        ),
        tuple(candidates),
        tuple(MovingArc(i, arcs[i], motion) for i, motion in moving.items()),
    )


def _motions(
    difference: Difference, arcs: tuple[Arc, ...], pair: AnyPair, config: NightConfig
) -> tuple[tuple[Arc, ...], dict[int, Motion]]:
    """Measure every arc that is worth a look.

    Returns the arcs, those that cannot be measured set aside with the reason, and
    the motions by the index of their arc.
    """
    judged: list[Arc] = []
    moving: dict[int, Motion] = {}
    for index, arc in enumerate(arcs):
        verdict = arc.verdict
        if verdict == "arc":
            try:
                moving[index] = _motion(difference, arc, pair, config)
            except ValueError as error:
                verdict = f"not measurable: {error}"
        judged.append(replace(arc, verdict=verdict))
    return tuple(judged), moving


def _motion(
    difference: Difference, arc: Arc, pair: AnyPair, config: NightConfig
) -> Motion:
    """Measure one arc.

    A stack is not of one moment: what it has of the arc tells no shift, and nothing
    of the sense when it was taken before as well as after.

    Raises
    ------
    ValueError
        If it cannot be measured, or the stack alone shows it.
    """
    motion = measure_motion(
        difference, arc, later=pair.later or "science", settings=config.motion
    )
    if isinstance(pair, StackPair):
        if arc.sign < 0 and motion.lobes == 1:
            msg = "only the stack shows it, in other epochs"
            raise ValueError(msg)
        motion = replace(motion, shift_px=np.nan, shift_err_px=np.nan, lobes=1)
    return motion if pair.later else replace(motion, sense_odds=0.0)


def _scores(
    motion: Motion,
    pair: AnyPair,
    calibration: Calibration,
    sources: tuple[Source, ...],
    config: NightConfig,
) -> tuple[OriginScore, ...]:
    """Return how well each source explains a moving arc, best first."""
    ra, dec = calibration.place(motion.x, motion.y)
    pa, _ = calibration.direction(motion.x, motion.y, motion.direction_angle)
    if ra is None or dec is None or pa is None:
        return ()
    speed, speed_err = speed_of(motion, pair, calibration)
    return score_origins(
        sources,
        ra=ra,
        dec=dec,
        normal_pa=pa,
        normal_pa_err=motion.direction_angle_err,
        speed_arcsec_yr=np.nan if speed is None else speed,
        speed_err_arcsec_yr=np.nan if speed_err is None else speed_err,
        mjd=pair.science.mjd,
        settings=config.origin,
        sense_odds=motion.sense_odds,
    )
