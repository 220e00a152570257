"""The mean profile of a difference along the motion of an arc."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.products.cutouts import Cutout, template_offset_px
from latelight.records import ArcTrace, FloatArray
from latelight.straighten import straighten

__all__ = ["NormalProfile", "measure_profile", "ridge_offset"]

# Fewest good points along the arc for a value of the profile.
_MIN_POINTS = 3


@dataclass(frozen=True, slots=True)
class NormalProfile:
    """Mean of the difference along the arc, against distance along the motion.

    Attributes
    ----------
    offset : float64 array, shape (m,)
        Pixels from the ridge at the science epoch, positive the way it moves.
    value, err : float64 array, shape (m,)
        Counts per pixel, and 1 sigma if the pixels' noise were independent; NaN
        where too much is masked.
    """

    offset: FloatArray
    value: FloatArray
    err: FloatArray


def ridge_offset(trace: ArcTrace, *, x: float, y: float, angle: float) -> float:
    """Return how far a place lies ahead of the trace, pixels along a direction.

    Parameters
    ----------
    trace : ArcTrace
        Centre line of an arc.
    x, y : float
        The place, pixels.
    angle : float
        Pixel angle of the direction, degrees.
    """
    along = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    dx, dy = x - trace.x, y - trace.y
    # The point of the trace straight behind or ahead of the place.
    nearest = int(np.argmin(np.abs(dx * along[1] - dy * along[0])))
    return float(dx[nearest] * along[0] + dy[nearest] * along[1])


def measure_profile(cutout: Cutout, *, reach_px: float) -> NormalProfile:
    """Average the difference along the arc, masked pixels left out.

    Parameters
    ----------
    cutout : Cutout
        The candidate; its row says which way the arc moves.
    reach_px : float
        How far to either side of the middle between both lobes, pixels.
    """
    row, trace = cutout.row, cutout.trace
    middle = trace.x.size // 2
    turn = np.radians(trace.normal_angle[middle] - row.normal_angle)
    sense = 1.0 if np.cos(turn) >= 0.0 else -1.0
    ahead = ridge_offset(
        trace, x=row.x - cutout.x0, y=row.y - cutout.y0, angle=row.normal_angle
    )
    centre = 0.5 * template_offset_px(row)
    offset = np.arange(np.floor(centre - reach_px), np.ceil(centre + reach_px) + 1.0)
    lines = sense * (offset + ahead)

    good = (cutout.mask == 0) & np.isfinite(cutout.difference)
    weight = straighten(good.astype(np.float32), trace, lines)
    total = straighten(np.where(good, cutout.difference, 0.0), trace, lines).sum(1)
    power = straighten(np.where(good, cutout.variance, 0.0), trace, lines).sum(1)
    count = weight.sum(axis=1)
    enough = count >= _MIN_POINTS
    safe = np.where(enough, count, 1.0)
    return NormalProfile(
        offset=offset,
        value=np.where(enough, total / safe, np.nan),
        err=np.where(enough, np.sqrt(power) / safe, np.nan),
    )
