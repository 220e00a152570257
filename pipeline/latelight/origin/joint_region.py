"""How well a place is known: the error ellipse of an origin, or its ridge.

Arcs that move all but in parallel say from which side their light came but not from
how far: the likelihood is then a ridge along a great circle, and no point on it is a
place.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.origin.joint_arcs import sky_of, unit_vectors
from latelight.origin.joint_likelihood import OriginLikelihood
from latelight.records import FloatArray
from latelight.sky import offset_position, position_angle, separation_deg

__all__ = ["Ellipse", "Ridge", "error_region"]

# Chi-square of two degrees of freedom that holds 95 %, and the drop of the log
# likelihood that goes with it.
CHI2_95 = 5.991464547107979
_OPEN_DROP = 0.5 * CHI2_95
# So far away, degrees, arcs of any field are parallel.
_FAR_DEG = 75.0
# Points a side of the grid, for few and for many arcs, whose posterior is smooth.
_FINE, _COARSE, _MANY_ARCS = 41, 17, 400
_REACH_SIGMA = 4.0
_ROUNDS = 7
_RIDGE_DISTANCES = np.geomspace(0.02, _FAR_DEG, 60)
_RIDGE_ANGLES = np.arange(0.0, 360.0, 1.0)


@dataclass(frozen=True, slots=True)
class Ellipse:
    """Where an origin lies, as an ellipse on the sky.

    Attributes
    ----------
    ra, dec : float
        Centre, degrees.
    major, minor : float
        Semi-axes of 1 sigma, degrees; the ellipse that holds 95 % is 2.448 times as
        large.
    pa : float
        Position angle of the major axis, 0-180 degrees.
    """

    ra: float
    dec: float
    major: float
    minor: float
    pa: float

    def chi2(self, ra: float, dec: float) -> float:
        """Return the squared distance of a place in units of the ellipse."""
        gap = float(separation_deg(self.ra, self.dec, ra, dec))
        turn = np.radians(position_angle(self.ra, self.dec, ra, dec) - self.pa)
        return float(
            (gap * np.cos(turn) / self.major) ** 2
            + (gap * np.sin(turn) / self.minor) ** 2
        )


@dataclass(frozen=True, slots=True)
class Ridge:
    """The line on which an origin lies when its distance is not known.

    Attributes
    ----------
    ra, dec : float
        A place on the ridge, half-way between its ends in log distance, degrees.
    from_ra, from_dec : float
        Middle of the arcs, degrees, through which its great circle passes.
    pa : float
        Position angle from there towards the ridge, degrees.
    near, far : float
        Distances from there between which the origin lies, degrees.
    minor : float
        1 sigma across the ridge at (ra, dec), degrees.
    """

    ra: float
    dec: float
    from_ra: float
    from_dec: float
    pa: float
    near: float
    far: float
    minor: float


def error_region(
    likelihood: OriginLikelihood, origin: FloatArray, support: FloatArray
) -> Ellipse | Ridge:
    """Return where an origin may lie.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of this origin beside the others.
    origin : float64 array, shape (3,)
        Its likeliest place.
    support : float64 array, shape (n,)
        How much each arc is believed to come from it, 0-1.

    Returns
    -------
    Ellipse or Ridge
        A ridge when the likelihood 75 degrees from the arcs is within that of the 95 %
        region.

    Notes
    -----
    The ellipse has the mean and the axes of the posterior and is scaled to hold 95 %
    of it.  Beforehand every distance from the arcs is equally likely, so that far away,
    where there is more sky, is not favoured.
    """
    middle = _middle(likelihood, support)
    peak = float(likelihood.marginal(origin[None])[0])
    ridge = _ridge(likelihood, middle, peak)
    return ridge if ridge is not None else _ellipse(likelihood, origin, support)


def _middle(likelihood: OriginLikelihood, support: FloatArray) -> tuple[float, float]:
    places = likelihood.arcs.frames[:, 0]
    weight = support * likelihood.arcs.weight
    ra, dec = sky_of(weight @ places if weight.sum() > 0.0 else places.sum(axis=0))
    return float(ra), float(dec)


def _ridge(
    likelihood: OriginLikelihood, middle: tuple[float, float], peak: float
) -> Ridge | None:
    around = offset_position(*middle, _RIDGE_ANGLES, _FAR_DEG)
    far = likelihood.marginal(unit_vectors(*around))
    if far.max() < peak - _OPEN_DROP:
        return None
    pa = float(_RIDGE_ANGLES[np.argmax(far)])
    along = likelihood.marginal(
        unit_vectors(*offset_position(*middle, pa, _RIDGE_DISTANCES))
    )
    # From the far end inwards as long as the likelihood holds.
    low = along < along.max() - _OPEN_DROP
    start = int(np.flatnonzero(low)[-1]) + 1 if low.any() else 0
    near = float(_RIDGE_DISTANCES[min(start, len(_RIDGE_DISTANCES) - 1)])
    half_way = float(np.sqrt(near * _FAR_DEG))
    ra, dec = offset_position(*middle, pa, half_way)
    across = likelihood.marginal(
        unit_vectors(*offset_position(*middle, _RIDGE_ANGLES, half_way))
    )
    chance = np.exp(across - across.max())
    turn = np.radians(_RIDGE_ANGLES - pa)
    mean_cos = float((chance * np.cos(turn)).sum() / chance.sum())
    spread = np.sqrt(max(-2.0 * np.log(max(mean_cos, 1e-3)), 0.0))
    return Ridge(
        ra=float(ra),
        dec=float(dec),
        from_ra=middle[0],
        from_dec=middle[1],
        pa=pa,
        near=near,
        far=_FAR_DEG,
        minor=float(np.degrees(spread * np.sin(np.radians(half_way)))),
    )


def _ellipse(
    likelihood: OriginLikelihood, origin: FloatArray, support: FloatArray
) -> Ellipse:
    ra, dec = (float(v) for v in sky_of(origin))
    # Start with a circle of the distance to the nearest supporting arc, and follow the
    # posterior's mean and axes from there.
    places = likelihood.arcs.frames[support > 0.5, 0]
    gaps = np.degrees(np.arccos(np.clip(places @ origin, -1.0, 1.0)))
    axes = np.eye(2) * (0.15 * float(np.median(gaps)) if gaps.size else 1.0)
    side = _FINE if len(likelihood.arcs) <= _MANY_ARCS else _COARSE
    level = np.linspace(-_REACH_SIGMA, _REACH_SIGMA, side)
    unit = np.stack(np.meshgrid(level, level), axis=-1).reshape(-1, 2)
    cov, offset, chance = np.eye(2), np.zeros((len(unit), 2)), np.ones(len(unit))
    for _ in range(_ROUNDS):
        offset = unit @ axes.T
        distance = np.hypot(*offset.T)
        angle = np.degrees(np.arctan2(offset[:, 0], offset[:, 1]))
        points = unit_vectors(*offset_position(ra, dec, angle, distance))
        log = likelihood.marginal(points) - np.log(_distances(points, places))
        chance = np.exp(log - log.max())
        chance /= chance.sum()
        mean = chance @ offset
        cov = (chance[:, None] * (offset - mean)).T @ (offset - mean)
        ra, dec = (
            float(v)
            for v in offset_position(
                ra, dec, np.degrees(np.arctan2(*mean)), np.hypot(*mean)
            )
        )
        offset -= mean
        # A grid too coarse for a narrow posterior still says how wide it is at most.
        floor = (0.3 * (level[1] - level[0])) ** 2 * axes @ axes.T
        values, vectors = np.linalg.eigh(cov + floor)
        axes = vectors * np.sqrt(values)
    scale = np.sqrt(_quantile(offset, chance, cov) / CHI2_95)
    values, vectors = np.linalg.eigh(cov)
    minor, major = (float(v) * float(scale) for v in np.sqrt(values))
    pa = float(np.degrees(np.arctan2(vectors[0, 1], vectors[1, 1])) % 180.0)
    return Ellipse(ra=ra, dec=dec, major=major, minor=minor, pa=pa)


def _quantile(offset: FloatArray, chance: FloatArray, cov: FloatArray) -> float:
    """Return the squared distance within which 95 % of the posterior lies."""
    chi2 = np.einsum("ij,ij->i", offset @ np.linalg.inv(cov), offset)
    order = np.argsort(chi2, kind="stable")
    return float(np.interp(0.95, np.cumsum(chance[order]), chi2[order]))


def _distances(points: FloatArray, places: FloatArray) -> FloatArray:
    """Return typical distances of points from the arcs: the median, radians."""
    some = places[:: max(1, len(places) // 200)]
    gap = np.arccos(np.clip(points @ some.T, -1.0, 1.0))
    return np.median(gap, axis=1) + 1e-6 if some.size else np.ones(len(points))
