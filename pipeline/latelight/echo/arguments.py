"""Arguments of the echo formulas, checked."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.records import FloatArray

__all__ = ["checked_age", "checked_angle", "checked_distance", "require"]


def checked_angle(theta_deg: ArrayLike) -> FloatArray:
    """Return angles in radians; ValueError unless 0 <= theta < 90 degrees."""
    theta = np.asarray(theta_deg, dtype=float)
    require((theta >= 0.0) & (theta < 90.0), "theta_deg", "in [0, 90)", theta)
    return np.radians(theta)


def checked_age(age_yr: ArrayLike) -> FloatArray:
    """Return ages, years; ValueError unless positive and finite."""
    age = np.asarray(age_yr, dtype=float)
    require((age > 0.0) & np.isfinite(age), "age_yr", "positive and finite", age)
    return age


def checked_distance(distance_pc: ArrayLike) -> FloatArray:
    """Return distances, pc; ValueError unless positive and finite."""
    distance = np.asarray(distance_pc, dtype=float)
    fit = (distance > 0.0) & np.isfinite(distance)
    require(fit, "distance_pc", "positive and finite", distance)
    return distance


def require(fit: ArrayLike, name: str, rule: str, value: FloatArray) -> None:
    """Raise ValueError with the first value that breaks the rule."""
    bad = ~np.asarray(fit)
    if bad.any():
        first = np.broadcast_to(value, bad.shape)[bad].flat[0]
        msg = f"{name} must be {rule}, got {first:g}"
        raise ValueError(msg)
