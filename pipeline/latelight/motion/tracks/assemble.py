"""From a followed ridge to the record of a track."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.motion.tracks.crest import find_crest
from latelight.motion.tracks.follow import DAYS_PER_YEAR, Followed
from latelight.motion.tracks.joint import JointFit
from latelight.motion.tracks.lines import flipped, shifted
from latelight.motion.tracks.path import PathLaw
from latelight.motion.tracks.points import (
    position_time,
    reduced_chi2,
    single_places,
)
from latelight.motion.tracks.settings import TrackSettings
from latelight.records import (
    BoolArray,
    EpochSeries,
    FloatArray,
    Track,
    TrackPoint,
    TrackSeed,
)

__all__ = ["Drift", "assemble", "drift_of", "unfollowed", "usable_epochs"]

_WORSE = 5.0
_LEAST_FOR_CHANGE = 4
_SHAPE_STEP = 0.05


@dataclass(frozen=True, slots=True)
class Drift:
    """The motion of a ridge along its normal.

    Attributes
    ----------
    time : float
        Reference, Julian years since the seed's epoch: half-way between the first
        and the last usable epoch.
    place : float
        Offset there, pixels.
    speed : float
        Mean from the first to the last usable epoch, pixels per year; signed.
    change : float
        Of the speed, pixels per year squared; NaN when not fitted.
    covariance : float64 array, shape (3, 3)
        Of (place, speed, change).
    """

    time: float
    place: float
    speed: float
    change: float
    covariance: FloatArray


def usable_epochs(followed: Followed) -> BoolArray:
    """Return which epochs have data where the ridge should be."""
    errs = followed.light.errs
    finite = np.isfinite(errs) & (errs > 0.0)
    if not finite.any():
        return finite
    return finite & (errs <= _WORSE * np.median(errs[finite]))


def drift_of(fit: JointFit, law: PathLaw, usable: BoolArray) -> Drift:
    """Return place, speed and change of a fitted ridge.

    Parameters
    ----------
    fit : JointFit
        The ridge.
    law : PathLaw
        How its places hang together.
    usable : bool array, shape (n,)
        Epochs with data.

    Notes
    -----
    Place and speed are those half-way and between the first and the last epoch; the
    change is the one with which the quadratic meets the way predicted for one mean
    interval after the last epoch, hills of the dust included, so that a forecast by
    it has the right place and error there.
    """
    times = law.times[usable]
    first, last = float(times[0]), float(times[-1])
    span = last - first
    middle, ahead = 0.5 * (first + last), last + span / max(times.size - 1, 1)
    weights, rest = law.predict(np.array([middle, first, last, ahead]))
    n = law.times.size
    way = weights @ fit.ridge.places
    covariance = weights @ fit.covariance[:n, :n] @ weights.T + rest
    lead = ahead - middle
    to_motion = np.array(
        [[1.0, 0.0, 0.0, 0.0], [0.0, -1.0, 1.0, 0.0], [0.0, 0.0, 0.0, 0.0]]
    )
    to_motion[1] /= span
    fitted = times.size >= _LEAST_FOR_CHANGE
    if fitted:
        to_motion[2] = (
            2.0 / lead**2 * (np.array([-1.0, 0, 0, 1.0]) - lead * to_motion[1])
        )
    place, speed, change = (float(v) for v in to_motion @ way)
    covariance = to_motion @ covariance @ to_motion.T
    # Without hills the change is none; rounding must not make it less.
    np.fill_diagonal(covariance, np.maximum(np.diag(covariance), 0.0))
    return Drift(middle, place, speed, change if fitted else np.nan, covariance)


def assemble(
    series: EpochSeries,
    seeds: tuple[TrackSeed, ...],
    followed: Followed,
    *,
    settings: TrackSettings,
) -> Track:
    """Put a followed ridge into the record; its verdict is still ``"track"``.

    Parameters
    ----------
    series : EpochSeries
        The epochs.
    seeds : tuple of TrackSeed
        What it was found from, that with which it was followed first.
    followed : Followed
        The ridge.
    settings : TrackSettings
        What dust does to direction and place.
    """
    fit = followed.fit
    drift = drift_of(fit, followed.law, usable_epochs(followed))
    crest, crest_err = find_crest(followed.sums, fit, drift.place)
    crest_err = float(np.hypot(crest_err, settings.crest * fit.ridge.lobe.full_width))
    sense = 1.0 if drift.speed >= 0.0 else -1.0

    ridge = drift.place + crest
    trace = shifted(followed.trace, ridge, _slope_at(followed, drift.place))
    if sense < 0.0:
        trace = flipped(trace)
    middle = trace.x.size // 2
    covariance = drift.covariance.copy()
    # The crest of an unknown light curve lies off the front at all times alike.
    covariance[0, 0] += crest_err**2
    n = followed.times.size
    slope_err = np.degrees(np.sqrt(fit.covariance[n + 2, n + 2]))
    width, width_err = _width(fit)
    change_err = (
        float(np.sqrt(covariance[2, 2])) if np.isfinite(drift.change) else np.nan
    )
    order = slice(None) if sense > 0.0 else slice(None, None, -1)
    return Track(
        trace=trace,
        x=float(trace.x[middle]),
        y=float(trace.y[middle]),
        mjd=float(seeds[0].mjd + DAYS_PER_YEAR * drift.time),
        direction_angle=float(trace.normal_angle[middle] % 360.0),
        direction_angle_err=float(np.hypot(slope_err, settings.turn_deg)),
        speed_px_yr=abs(drift.speed),
        speed_err_px_yr=float(np.sqrt(covariance[1, 1])),
        change_px_yr2=sense * drift.change,
        change_err_px_yr2=change_err,
        place_err_px=float(np.sqrt(covariance[0, 0])),
        covariance=covariance,
        snr=float(np.sqrt(max(fit.gain - fit.freedom, 0.0))),
        length_px=followed.light.length,
        width_px=width,
        width_err_px=width_err,
        # A fit that turned round has left what the odds were of.
        sense_odds=followed.sense_odds if sense > 0.0 else 0.0,
        chi2=reduced_chi2(followed.sums, fit),
        points=_points(series, followed, drift.place, sense),
        profile_offsets=sense * (followed.sums.offsets[order] - ridge),
        profiles=position_time(followed.sums, fit)[:, order].copy(),
        seeds=seeds,
        verdict="track",
    )


def unfollowed(seeds: tuple[TrackSeed, ...], verdict: str) -> Track:
    """Return a track that holds no more than its first seed says."""
    nan, seed = float("nan"), seeds[0]
    middle = seed.trace.x.size // 2
    x, y = (float(v[middle]) if v.size else nan for v in (seed.trace.x, seed.trace.y))
    return Track(
        trace=seed.trace,
        x=x,
        y=y,
        mjd=seed.mjd,
        direction_angle=seed.direction_angle % 360.0,
        direction_angle_err=nan,
        speed_px_yr=seed.speed_px_yr,
        speed_err_px_yr=nan,
        change_px_yr2=nan,
        change_err_px_yr2=nan,
        place_err_px=nan,
        covariance=np.full((3, 3), nan),
        snr=seed.snr,
        length_px=float(seed.trace.x.size),
        width_px=nan,
        width_err_px=nan,
        sense_odds=0.0,
        chi2=nan,
        points=(),
        profile_offsets=np.empty(0),
        profiles=np.empty((0, 0)),
        seeds=seeds,
        verdict=verdict,
    )


def _slope_at(followed: Followed, place: float) -> float:
    """Return the slope of the ridge against the trace when it is at a place."""
    slope, _, fan = (float(v) for v in followed.fit.ridge.turn)
    mean = float(followed.fit.ridge.places.mean())
    return slope + fan * (place - mean) + followed.fan * place


def _width(fit: JointFit) -> tuple[float, float]:
    """Return the full width, PSF taken out, and 1 sigma, pixels."""
    lobe, n = fit.ridge.lobe, fit.ridge.places.size
    low = max(lobe.skew - _SHAPE_STEP, 0.0)
    high = low + 2.0 * _SHAPE_STEP
    by_skew = replace(lobe, skew=high).own_width - replace(lobe, skew=low).own_width
    slopes = np.array([lobe.own_width, by_skew / (high - low)])
    covariance = fit.covariance[n : n + 2, n : n + 2]
    return lobe.own_width, float(np.sqrt(slopes @ covariance @ slopes))


def _points(
    series: EpochSeries, followed: Followed, place: float, sense: float
) -> tuple[TrackPoint, ...]:
    places, errs = single_places(followed.sums, followed.fit)
    light = followed.light
    seen = np.isfinite(light.errs)
    return tuple(
        TrackPoint(
            epoch=i,
            mjd=float(series.mjd[i]),
            offset_px=float(sense * (places[i] - place)),
            offset_err_px=float(errs[i]),
            height_counts=float(light.heights[i]) if seen[i] else float("nan"),
            height_err_counts=float(light.errs[i]) if seen[i] else float("nan"),
        )
        for i in range(len(series))
    )
