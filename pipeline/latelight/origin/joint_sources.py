"""Which listed source a common origin is."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from latelight.origin.joint import CHI2_99, JointOrigin
from latelight.origin.joint_arcs import unit_vectors
from latelight.origin.joint_likelihood import OriginLikelihood
from latelight.origin.joint_region import Ellipse
from latelight.origin.score import score_origins
from latelight.origin.settings import OriginSettings
from latelight.records import BoolArray, FloatArray, Source

__all__ = ["ArcMotions", "SourceMatch", "match_source"]

# So many arcs, those that most surely belong, tell sources apart.
_MOST_ARCS = 300


@dataclass(frozen=True, slots=True)
class ArcMotions:
    """Arcs with all that is known of their motion; arrays of shape (n,).

    Attributes
    ----------
    ra, dec, mjd : float64 array
        Place, degrees, and its epoch, MJD.
    pa, pa_err : float64 array
        Direction of the motion and 1 sigma, degrees.
    speed, speed_err : float64 array
        arcsec per Julian year; NaN when unknown.
    sense_odds : float64 array
        log10 of the odds that the sense is right.
    """

    ra: FloatArray
    dec: FloatArray
    mjd: FloatArray
    pa: FloatArray
    pa_err: FloatArray
    speed: FloatArray
    speed_err: FloatArray
    sense_odds: FloatArray


@dataclass(frozen=True, slots=True)
class SourceMatch:
    """A listed source that an origin may be.

    Attributes
    ----------
    source : Source
        The source.
    score : float
        Sum over the arcs of their scores for it, speeds included, each times the
        probability that the arc belongs to the origin.
    """

    source: Source
    score: float


def match_source(
    origin: JointOrigin,
    sources: Sequence[Source],
    motions: ArcMotions,
    *,
    likelihood: OriginLikelihood,
    settings: OriginSettings,
) -> SourceMatch | None:
    """Return the listed source that an origin is, if there is one.

    Parameters
    ----------
    origin : JointOrigin
        The origin.
    sources : sequence of Source
        Listed sources.
    motions : ArcMotions
        The arcs, in the order of the origin's memberships.
    likelihood : OriginLikelihood
        Of a single origin; tells which sources lie on a ridge.
    settings : OriginSettings
        The priors of the scores.

    Returns
    -------
    SourceMatch or None
        Of the sources within the 99 % region the one with the best score, if that is
        above 0: a source whose age and distance do not go with the speeds is none.
    """
    fit = [
        source
        for source, inside in zip(
            sources, _inside(origin, sources, likelihood), strict=True
        )
        if inside
    ]
    if not fit:
        return None
    totals = dict.fromkeys((source.name for source in fit), 0.0)
    strongest = np.argsort(-origin.membership, kind="stable")[:_MOST_ARCS]
    for arc in strongest:
        if origin.membership[arc] < 0.05:
            break
        for one in score_origins(
            fit,
            ra=motions.ra[arc],
            dec=motions.dec[arc],
            normal_pa=motions.pa[arc],
            normal_pa_err=motions.pa_err[arc],
            speed_arcsec_yr=motions.speed[arc],
            speed_err_arcsec_yr=motions.speed_err[arc],
            mjd=motions.mjd[arc],
            sense_odds=motions.sense_odds[arc],
            settings=settings,
        ):
            totals[one.source] += float(origin.membership[arc]) * one.score
    best = max(fit, key=lambda source: (totals[source.name], source.name))
    if totals[best.name] <= 0.0 and not origin.listed:
        return None
    return SourceMatch(best, totals[best.name])


def _inside(
    origin: JointOrigin, sources: Sequence[Source], likelihood: OriginLikelihood
) -> BoolArray:
    if origin.listed:
        return np.array([source.name == origin.listed for source in sources])
    if isinstance(origin.region, Ellipse):
        region = origin.region
        return np.array([region.chi2(s.ra, s.dec) < CHI2_99 for s in sources], bool)
    if not sources:
        return np.zeros(0, bool)
    places = unit_vectors([s.ra for s in sources], [s.dec for s in sources])
    peak = likelihood.marginal(origin.direction[None])[0]
    return likelihood.marginal(places) > peak - 0.5 * CHI2_99
