"""Tell the arcs of several origins apart by their speeds.

Where an origin lies is asked of directions alone, for its distance and age are not
known.  But two origins differ in both, and so do the speeds of their arcs: once there
are two, speeds help to say which arc is whose.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.origin.joint_arcs import MovingArcs
from latelight.records import FloatArray

__all__ = ["SpeedLaw", "draw_speeds", "fit_speeds", "speed_ratios"]

# Angles at which the speed of an origin's flat sheets may be least, radians.
_TURNING = np.radians(np.geomspace(0.03, 30.0, 25))
# Spread of the logarithm of the speed by tilts, and how many arcs that prior is worth.
_SPREAD, _SPREAD_ARCS = 0.3, 4.0
# The logarithms of all speeds spread at least so much, and a share is simply wrong.
_LEAST_OVERALL, _WRONG = 0.35, 0.1
_FEWEST_ARCS = 2.0


@dataclass(frozen=True, slots=True)
class SpeedLaw:
    """Speeds of the arcs of one origin against their distance from it.

    A flat sheet far from the observer moves at ``(c / 2 D) (x + 1 / x)`` with x the
    angle in units of ``c t / D``, where dust level with the source lies; tilts spread
    the logarithm.

    Attributes
    ----------
    scale : float64 array, shape (n_turning,)
        Natural log of ``c / D`` for each angle ``c t / D`` tried, arcsec/yr.
    weight : float64 array, shape (n_turning,)
        How probable each is; sums to one.
    spread : float
        1 sigma of the natural log of the speed.
    """

    scale: FloatArray
    weight: FloatArray
    spread: float


def fit_speeds(
    arcs: MovingArcs, direction: FloatArray, membership: FloatArray
) -> SpeedLaw | None:
    """Fit the speeds of the arcs of an origin.

    Parameters
    ----------
    arcs : MovingArcs
        The arcs.
    direction : float64 array, shape (3,)
        The origin, a unit vector.
    membership : float64 array, shape (n,)
        Probability that each arc comes from it.

    Returns
    -------
    SpeedLaw or None
        None when too few of its arcs have a speed.
    """
    known = np.isfinite(arcs.log_speed)
    weight = np.where(known, membership * arcs.weight, 0.0)
    total = float(weight.sum())
    if total < _FEWEST_ARCS:
        return None
    speed = np.where(known, arcs.log_speed, 0.0)
    rest = speed[:, None] - _flat(arcs, direction)
    scale = weight @ rest / total
    square = weight @ (rest - scale) ** 2
    spread = np.sqrt(
        (_SPREAD_ARCS * _SPREAD**2 + square.min()) / (_SPREAD_ARCS + total)
    )
    log = -0.5 * (square - square.min()) / spread**2
    chance = np.exp(log) / np.exp(log).sum()
    # The scale itself is known no better than its arcs allow.
    return SpeedLaw(scale, chance, float(spread * np.sqrt(1.0 + 1.0 / total)))


def speed_ratios(
    arcs: MovingArcs, direction: FloatArray, law: SpeedLaw | None
) -> FloatArray:
    """Return how much likelier each speed is for an origin than for any arc, (n,).

    1 where the speed is not known.
    """
    known = np.isfinite(arcs.log_speed)
    if law is None or not known.any():
        return np.ones(len(arcs))
    speed = np.where(known, arcs.log_speed, 0.0)
    middle = float(np.average(speed, weights=known * arcs.weight))
    width = np.sqrt(np.average((speed - middle) ** 2, weights=known * arcs.weight))
    overall = _normal(speed - middle, np.maximum(width, _LEAST_OVERALL))
    error = np.hypot(law.spread, np.where(known, arcs.log_speed_err, 0.0))
    gap = speed[:, None] - _flat(arcs, direction) - law.scale
    own = _normal(gap, error[:, None]) @ law.weight
    return np.where(known, (1.0 - _WRONG) * own / overall + _WRONG, 1.0)


def draw_speeds(
    arcs: MovingArcs,
    direction: FloatArray,
    law: SpeedLaw | None,
    rng: np.random.Generator,
) -> FloatArray:
    """Draw natural logs of speeds as the arcs of an origin have, shape (n,)."""
    noise = rng.normal(size=len(arcs))
    if law is None:
        return arcs.log_speed
    error = np.hypot(law.spread, arcs.log_speed_err)
    return (_flat(arcs, direction) + law.scale) @ law.weight + error * noise


def _flat(arcs: MovingArcs, direction: FloatArray) -> FloatArray:
    """Return the log speed of flat sheets in units of c / D, shape (n, n_turning)."""
    theta = np.arccos(np.clip(arcs.frames[:, 0] @ direction, -1.0, 1.0))
    x = np.maximum(theta, 1e-6)[:, None] / _TURNING
    return np.log(0.5 * (x + 1.0 / x))


def _normal(gap: FloatArray, sigma: FloatArray) -> FloatArray:
    return np.exp(-0.5 * (gap / sigma) ** 2) / (np.sqrt(2.0 * np.pi) * sigma)
