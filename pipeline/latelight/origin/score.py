"""Score the listed sources as the origin of one moving arc.

An echo moves along the gradient of the delay over the sky.  For a dust sheet
across the view that points straight away from the source; a tilt adds a vector
to it (:func:`latelight.echo.geometry.delay_gradient`), so tilted sheets turn
the motion and change its speed together.  Sheets of unknown tilt thus give a
probability of direction and speed, and the score compares it with that of a
random arc.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr, ndtri

from latelight.echo.geometry import (
    delay_gradient,
    depth_error_pc,
    depth_pc,
    light_speed_arcsec_yr,
    observer_distance_pc,
)
from latelight.origin.settings import OriginSettings
from latelight.origin.sources import age_yr
from latelight.records import FloatArray, OriginScore, Source
from latelight.sky import position_angle, separation_deg, wrap_180

__all__ = ["best_origin", "direction_density", "motion_density", "score_origins"]

ANGLE_NODES = 33
SPEED_NODES = 17
GEOMETRY_NODES = 5
AGE_NODES = 24
AGE_RANGE_YR = (1.0, 3e4)
"""Ages of an outburst of unknown age: every decade between is equally likely."""

# The middle of an arc is known to about an arcsec.
_PLACE_DEG = 1.0 / 3600.0
# Normal errors wider than this leave a direction all but even over the circle.
_ANY_DIRECTION_DEG = 60.0
_NO_BLUR_DEG = 0.1


@dataclass(frozen=True, slots=True)
class _Observed:
    """The measured motion; angles in degrees, speeds in arcsec/yr."""

    ra: float
    dec: float
    normal_pa: float
    normal_pa_err: float
    speed: float
    speed_err: float
    wrong_sense: float
    mjd: float


def score_origins(
    sources: Iterable[Source],
    *,
    ra: float,
    dec: float,
    normal_pa: float,
    normal_pa_err: float,
    speed_arcsec_yr: float,
    speed_err_arcsec_yr: float,
    mjd: float,
    settings: OriginSettings,
    sense_odds: float = np.inf,
) -> tuple[OriginScore, ...]:
    """Score every source as the origin of one arc.

    Parameters
    ----------
    sources : iterable of Source
        Candidate origins.
    ra, dec : float
        The arc, degrees, ICRS.
    normal_pa, normal_pa_err : float
        Position angle of its motion and 1 sigma, degrees; NaN when unknown.
    speed_arcsec_yr, speed_err_arcsec_yr : float
        Speed along it and 1 sigma, arcsec/yr; NaN when unknown.
    mjd : float
        Epoch of the arc's place, MJD.
    settings : OriginSettings
        The priors.
    sense_odds : float
        log10 of the odds that the sense of the motion is right, >= 0: infinite
        when it is certain, 0 when only the line is known.

    Returns
    -------
    tuple of OriginScore
        Best first; equal scores by separation, then by name.  Empty when the
        arc's place is not known (NaN).

    Notes
    -----
    ``score = log10[ (1 - f) P(motion | source) / P(motion | random) + f ]`` with f
    the share of arcs that may move in any direction.  Random arcs are even in
    direction and in the logarithm of the speed.  Measurement errors, and those of
    age and distance, are averaged over; so is the age of a source of known distance
    whose age is not known.  A source in the arc itself has no direction away from it:
    its away angle is NaN and it scores 0 like a random arc.  One 90 degrees away or
    farther cannot be the origin, for the dust would lie behind the observer.
    """
    if not (np.isfinite(ra) and np.isfinite(dec)):
        return ()
    observed = _Observed(
        ra=ra,
        dec=dec,
        normal_pa=normal_pa,
        normal_pa_err=normal_pa_err,
        speed=speed_arcsec_yr,
        speed_err=speed_err_arcsec_yr,
        wrong_sense=1.0 / (1.0 + 10.0 ** min(max(sense_odds, 0.0), 300.0)),
        mjd=mjd,
    )
    scores = [_score(source, observed, settings) for source in sources]
    return tuple(sorted(scores, key=lambda s: (-s.score, s.separation_deg, s.source)))


def best_origin(
    scores: Sequence[OriginScore], *, settings: OriginSettings
) -> OriginScore | None:
    """Return the source to be named, best of all; None when none explains the arc.

    Parameters
    ----------
    scores : sequence of OriginScore
        Best first.
    settings : OriginSettings
        ``min_score`` is used.
    """
    if scores and scores[0].score >= settings.min_score:
        return scores[0]
    return None


def direction_density(
    away_deg: ArrayLike, *, across: ArrayLike, tilt: ArrayLike
) -> FloatArray:
    """Return how probable a direction of motion is, whatever the speed.

    Parameters
    ----------
    away_deg : array_like of float
        Motion minus the direction away from the source, degrees.
    across : array_like of float
        Gradient of the delay for a sheet across the view, >= 0.
    tilt : array_like of float
        Typical change of it by the tilt, positive.

    Returns
    -------
    float64
        Probability a radian; even over the circle for ``across`` = 0.

    Notes
    -----
    :func:`motion_density` integrated over the speed, which is a wrapped Cauchy
    law: ``(tilt / 2 pi) / (hypot(across, tilt) - across cos(away))``.
    """
    cos = np.cos(np.radians(np.asarray(away_deg, dtype=float)))
    a, w = np.asarray(across, dtype=float), np.asarray(tilt, dtype=float)
    return w / (2.0 * np.pi) / (np.hypot(a, w) - a * cos)


def motion_density(
    away_deg: ArrayLike, slowness: ArrayLike, *, across: ArrayLike, tilt: ArrayLike
) -> FloatArray:
    """Return how probable a direction and speed of motion are together.

    Parameters
    ----------
    away_deg : array_like of float
        Motion minus the direction away from the source, degrees.
    slowness : array_like of float
        Speed of light over the speed across the sky, positive.
    across, tilt : array_like of float
        As for :func:`direction_density`.

    Returns
    -------
    float64
        Probability a radian and a unit of the natural logarithm of the speed.

    Notes
    -----
    The gradient of the delay is ``q = slowness * (cos(away), sin(away))``.  Sheets
    whose slopes (a, b) have the probability ``h / (2 pi) (h**2 + a**2 + b**2)
    **-1.5`` - random orientation for h = 1, flatter ones below - spread it about
    (across, 0) with the scale ``tilt = h * per_tilt``; the area element is
    ``slowness**2 d(away) d(ln slowness)``.
    """
    cos = np.cos(np.radians(np.asarray(away_deg, dtype=float)))
    q = np.asarray(slowness, dtype=float)
    a, w = np.asarray(across, dtype=float), np.asarray(tilt, dtype=float)
    square = w**2 + q**2 - 2.0 * a * q * cos + a**2
    return w / (2.0 * np.pi) * q**2 * square**-1.5


def _score(source: Source, seen: _Observed, settings: OriginSettings) -> OriginScore:
    separation = float(separation_deg(source.ra, source.dec, seen.ra, seen.dec))
    away_pa = position_angle(seen.ra, seen.dec, source.ra, source.dec) + 180.0
    away = float(wrap_180(seen.normal_pa - away_pa))
    # How well the place of the arc gives the direction away from a source near it.
    blur = float(np.degrees(np.arctan2(_PLACE_DEG, separation)))
    if blur > _ANY_DIRECTION_DEG:
        away = np.nan
    elif blur < _NO_BLUR_DEG:
        blur = 0.0  # far sources in one direction score alike, to the last digit
    age = age_yr(source, seen.mjd)
    impossible = (age is not None and age <= 0.0) or separation >= 90.0
    known = _geometry(source, separation, age)
    ratio = 0.0 if impossible else _likelihood_ratio(away, blur, known, seen, settings)
    floor = settings.outlier_fraction
    score = float(np.log10((1.0 - floor) * ratio + floor))
    if known is None or known.age is None:
        return OriginScore(source.name, score, away, separation)
    return OriginScore(
        source=source.name,
        score=score,
        away_angle=away,
        separation_deg=separation,
        dust_depth_pc=float(depth_pc(separation, known.age, known.distance)),
        dust_depth_err_pc=float(
            depth_error_pc(
                separation,
                known.age,
                known.distance,
                age_err_yr=known.age_err,
                distance_err_pc=known.distance_err,
            )
        ),
    )


@dataclass(frozen=True, slots=True)
class _Geometry:
    """What is needed to place the dust: degrees, years (None: any age), pc."""

    theta: float
    age: float | None
    age_err: float
    distance: float
    distance_err: float


def _geometry(source: Source, theta: float, age: float | None) -> _Geometry | None:
    """Return the geometry, or None where it is unknown or impossible."""
    unborn = age is not None and age <= 0.0
    if unborn or source.distance_pc is None or theta >= 90.0:
        return None
    return _Geometry(
        theta=theta,
        age=age,
        age_err=source.age_err_yr or 0.0,
        distance=source.distance_pc,
        distance_err=source.distance_err_pc or 0.0,
    )


def _likelihood_ratio(
    away: float,
    blur: float,
    known: _Geometry | None,
    seen: _Observed,
    settings: OriginSettings,
) -> float:
    """Return P(motion | source) / P(motion | random), errors averaged over."""
    if not np.isfinite(away):
        return 1.0
    error = seen.normal_pa_err if np.isfinite(seen.normal_pa_err) else 0.0
    angles = away + np.hypot(error, blur) * ndtri(_midpoints(ANGLE_NODES))
    right = _density_ratio(angles, known, seen, settings)
    wrong = _density_ratio(angles + 180.0, known, seen, settings)
    return (1.0 - seen.wrong_sense) * right + seen.wrong_sense * wrong


def _density_ratio(
    angles: FloatArray,
    known: _Geometry | None,
    seen: _Observed,
    settings: OriginSettings,
) -> float:
    """Return the mean of the likelihood ratio over equally likely directions."""
    even = 1.0 / (2.0 * np.pi)
    if known is None:
        # Half of this law lies within arctan(tilt / across).
        across = 1.0 / np.tan(np.radians(settings.direction_scatter_deg))
        density = direction_density(angles, across=across, tilt=1.0)
        return float(density.mean() / even)
    across, tilt, light = _gradients(known, settings.tilt_scale)
    density = direction_density(angles[:, None], across=across, tilt=tilt)
    direction_alone = float(density.mean() / even)
    if not (np.isfinite(seen.speed) and seen.speed > 0.0):
        return direction_alone
    slowness = light / _positive_nodes(seen.speed, seen.speed_err)[:, None]
    density = motion_density(angles[:, None, None], slowness, across=across, tilt=tilt)
    even /= np.log(10.0) * settings.speed_decades
    wrong = settings.wrong_speed_fraction
    return float((1.0 - wrong) * density.mean() / even + wrong * direction_alone)


def _gradients(
    known: _Geometry, tilt_scale: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the delay's gradient, its spread by tilts, and light's speed, arcsec/yr.

    One value for each combination of ages and distances within their errors.
    """
    if known.age is None:
        low, high = np.log(AGE_RANGE_YR)
        age = np.exp(low + (high - low) * _midpoints(AGE_NODES))
    else:
        age = _positive_nodes(known.age, known.age_err, count=GEOMETRY_NODES)
    distance = _positive_nodes(known.distance, known.distance_err, count=GEOMETRY_NODES)
    ages, distances = (grid.ravel() for grid in np.meshgrid(age, distance))
    across, per_tilt = delay_gradient(known.theta, ages, distances)
    light = light_speed_arcsec_yr(observer_distance_pc(known.theta, ages, distances))
    return across, tilt_scale * per_tilt, light


def _midpoints(count: int) -> FloatArray:
    return (np.arange(count) + 0.5) / count


def _positive_nodes(value: float, err: float, count: int = SPEED_NODES) -> FloatArray:
    """Return equally likely values of a normal law cut off at zero."""
    if not (np.isfinite(err) and err > 0.0):
        return np.array([value])
    below = ndtr(-value / err)
    return value + err * ndtri(below + (1.0 - below) * _midpoints(count))
