"""The age of an outburst at a known distance, from the arcs it lit.

An arc's place and speed give an age for a sheet across the view (Rest et al. 2005,
Nature 438, 1132); tilted sheets scatter it.  Averaged over tilts and over several arcs
the probability of each age follows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.echo.geometry import (
    delay_gradient,
    light_speed_arcsec_yr,
    observer_distance_pc,
)
from latelight.origin.score import AGE_RANGE_YR, motion_density
from latelight.origin.settings import OriginSettings
from latelight.records import FloatArray, Source
from latelight.sky import position_angle, separation_deg

__all__ = ["AgeEstimate", "estimate_age"]

_AGES = np.geomspace(*AGE_RANGE_YR, 1201)
_DISTANCE_NODES = np.array([-1.2816, -0.5244, 0.0, 0.5244, 1.2816])
_SPEED_NODES = np.array([-1.2816, -0.5244, 0.0, 0.5244, 1.2816])


@dataclass(frozen=True, slots=True)
class AgeEstimate:
    """An age with its error.

    Attributes
    ----------
    age_yr : float
        Median, Julian years.
    low_yr, high_yr : float
        Ends of the 68 % interval.
    n_arcs : int
        Arcs with a speed that were used.
    """

    age_yr: float
    low_yr: float
    high_yr: float
    n_arcs: int


def estimate_age(
    source: Source,
    *,
    ra: FloatArray,
    dec: FloatArray,
    pa: FloatArray,
    speed: FloatArray,
    speed_err: FloatArray,
    years: FloatArray,
    weight: FloatArray,
    settings: OriginSettings,
) -> AgeEstimate | None:
    """Estimate the age of a source from its arcs.

    Parameters
    ----------
    source : Source
        With a distance.
    ra, dec, pa : float64 array, shape (n,)
        Places and directions of motion, degrees.
    speed, speed_err : float64 array, shape (n,)
        arcsec per Julian year; arcs whose speed is not known (NaN) are left out.
    years : float64 array, shape (n,)
        Epochs of the arcs, Julian years after the one at which the age is wanted.
    weight : float64 array, shape (n,)
        How much each arc counts, 0-1: the probability that it belongs, times the share
        of an independent arc it is worth.
    settings : OriginSettings
        The prior of the tilts.

    Returns
    -------
    AgeEstimate or None
        None without a distance or an arc with a speed.

    Notes
    -----
    Beforehand every decade from 1 to 30 000 years is equally likely.  Errors of the
    distance and of the speeds are averaged over at five equally likely values each; an
    error of the distance is shared by all arcs.
    """
    fit = np.isfinite(speed) & (speed > 0.0) & (weight > 0.0)
    gap = separation_deg(source.ra, source.dec, ra, dec)
    fit &= (gap > 0.0) & (gap < 90.0)
    if source.distance_pc is None or not fit.any():
        return None
    away = position_angle(ra, dec, source.ra, source.dec) + 180.0
    turn = (pa - away)[fit]
    error = np.where(np.isfinite(speed_err), speed_err, 0.0)[fit]
    speeds = np.maximum(speed[fit] + _SPEED_NODES[:, None] * error, 0.05 * speed[fit])
    distances = source.distance_pc + _DISTANCE_NODES * (source.distance_err_pc or 0.0)
    distances = np.maximum(distances, 0.05 * source.distance_pc)
    posterior = np.zeros(_AGES.size)
    logs = [
        _log_posterior(d, gap[fit], turn, speeds, years[fit], weight[fit], settings)
        for d in distances
    ]
    top = max(log.max() for log in logs)
    for log in logs:
        posterior += np.exp(log - top)
    summed = np.cumsum(posterior) / posterior.sum()
    low, middle, high = np.interp([0.16, 0.5, 0.84], summed, _AGES)
    return AgeEstimate(float(middle), float(low), float(high), int(fit.sum()))


def _log_posterior(
    distance: float,
    theta: FloatArray,
    turn: FloatArray,
    speeds: FloatArray,
    years: FloatArray,
    weight: FloatArray,
    settings: OriginSettings,
) -> FloatArray:
    """Return the log likelihood of each age at one distance."""
    log = np.zeros(_AGES.size)
    wrong = settings.wrong_speed_fraction
    even = 1.0 / (np.log(10.0) * settings.speed_decades * 2.0 * np.pi)
    for arc in range(theta.size):
        ages = np.maximum(_AGES + years[arc], 1e-3)
        across, per_tilt = delay_gradient(theta[arc], ages, distance)
        light = light_speed_arcsec_yr(observer_distance_pc(theta[arc], ages, distance))
        density = motion_density(
            turn[arc],
            light / speeds[:, arc, None],
            across=across,
            tilt=settings.tilt_scale * per_tilt,
        ).mean(axis=0)
        log += weight[arc] * np.log((1.0 - wrong) * density + wrong * even)
    return log
