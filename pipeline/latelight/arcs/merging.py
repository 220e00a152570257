"""Which fits are one and the same ridge."""

from __future__ import annotations

import numpy as np

from latelight.arcs.fit import Fit
from latelight.arcs.search import Seed

__all__ = ["covers", "distinct", "explains"]

_MARGIN_PX = 6.0
_SAME_ANGLE = np.radians(25.0)
"""Ridges that cross at more than this are two; seeds are right to 15 degrees."""


def covers(fit: Fit, x: float, y: float) -> bool:
    """Tell whether a place lies on a fitted ridge, its lobes or their flanks.

    Parameters
    ----------
    fit : Fit
        The fitted ridge.
    x, y : float
        The place, pixels.
    """
    s, u = fit.circle.coordinates(x, y)
    if abs(s) > fit.half_length + _MARGIN_PX:
        return False
    low, high = fit.pair.reach
    flank = 2.0 * np.hypot(fit.pair.sigma_px, fit.pair.tail_px) + _MARGIN_PX
    return bool(low - flank <= u <= high + flank)


def explains(fit: Fit, seed: Seed) -> bool:
    """Tell whether a seed is a piece of a fitted ridge: on it, and along it."""
    if not covers(fit, seed.x, seed.y):
        return False
    s, _ = fit.circle.coordinates(seed.x, seed.y)
    turn = seed.angle - (fit.circle.angle - fit.circle.curvature * float(s))
    return bool(abs(np.sin(turn)) < np.sin(_SAME_ANGLE))


def distinct(fits: list[Fit]) -> list[Fit]:
    """Keep the fits that share less than half their length with a better one.

    Parameters
    ----------
    fits : list of Fit
        Best first.
    """
    kept: list[Fit] = []
    for fit in fits:
        if not any(_share(fit, better) or _share(better, fit) for better in kept):
            kept.append(fit)
    return kept


def _share(fit: Fit, other: Fit) -> bool:
    """Tell whether half of a ridge lies on another."""
    along = np.linspace(-0.8, 0.8, 9) * fit.half_length
    x, y = fit.circle.point(along, np.zeros(along.size))
    on = sum(
        covers(other, *place) for place in zip(x.tolist(), y.tolist(), strict=True)
    )
    return on > 0.5 * along.size
