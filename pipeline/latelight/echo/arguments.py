"""Arguments of the echo formulas, checked."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from latelight.records import FloatArray

__all__ = [
    "as_floats",
    "checked_age",
    "checked_angle",
    "checked_depth",
    "checked_distance",
    "checked_error",
    "checked_finite",
    "checked_positive",
    "checked_separation",
    "require",
]


def as_floats(value: Any) -> FloatArray:
    """Return numbers as float64; None and masked values become NaN.

    Every check of this module refuses NaN, so a missing value cannot pass as the
    filler that lies behind a mask.
    """
    if isinstance(value, np.ma.MaskedArray):
        return np.asarray(np.ma.filled(value.astype(float), np.nan))
    return np.asarray(value, dtype=float)


def checked_angle(theta_deg: ArrayLike) -> FloatArray:
    """Return angles in radians; ValueError unless 0 <= theta < 90 degrees."""
    theta = as_floats(theta_deg)
    require(
        (theta >= 0.0) & (theta < 90.0),
        "theta_deg",
        "in [0, 90)",
        theta,
        cure="give the angle between source and dust, at most a quarter circle",
    )
    return np.radians(theta)


def checked_separation(theta_deg: ArrayLike) -> FloatArray:
    """Return angles in radians; ValueError unless 0 < theta < 90 degrees.

    For formulas that say nothing when source and dust coincide on the sky.
    """
    theta = as_floats(theta_deg)
    require(
        (theta > 0.0) & (theta < 90.0),
        "theta_deg",
        "in (0, 90)",
        theta,
        cure="the source must not stand in the dust's own direction",
    )
    return np.radians(theta)


def checked_age(age_yr: ArrayLike) -> FloatArray:
    """Return ages, years; ValueError unless positive and finite."""
    age = as_floats(age_yr)
    require(
        (age > 0.0) & np.isfinite(age),
        "age_yr",
        "positive and finite",
        age,
        cure="give the years since the outburst's direct light arrived",
    )
    return age


def checked_distance(distance_pc: ArrayLike) -> FloatArray:
    """Return distances, pc; ValueError unless positive and finite."""
    distance = as_floats(distance_pc)
    require(
        (distance > 0.0) & np.isfinite(distance),
        "distance_pc",
        "positive and finite",
        distance,
        cure="give the distance of the source in pc",
    )
    return distance


def checked_depth(depth_pc: ArrayLike, distance_pc: ArrayLike) -> FloatArray:
    """Return depths, pc; ValueError unless less than the source's distance."""
    depth, distance = as_floats(depth_pc), checked_distance(distance_pc)
    require(
        depth < distance,
        "depth_pc",
        "less than distance_pc",
        depth,
        cure="dust at or behind the observer cannot be seen in the source's direction",
    )
    return depth


def checked_error(value: ArrayLike, name: str) -> FloatArray:
    """Return errors or widths; ValueError unless zero or positive and finite."""
    numbers = as_floats(value)
    fit = (numbers >= 0.0) & np.isfinite(numbers)
    require(fit, name, "zero or positive, and finite", numbers)
    return numbers


def checked_finite(value: ArrayLike, name: str) -> FloatArray:
    """Return numbers; ValueError with their name unless finite."""
    numbers = as_floats(value)
    require(np.isfinite(numbers), name, "finite", numbers)
    return numbers


def checked_positive(value: ArrayLike, name: str, *, cure: str = "") -> FloatArray:
    """Return numbers; ValueError with their name unless positive and finite."""
    numbers = as_floats(value)
    fit = (numbers > 0.0) & np.isfinite(numbers)
    require(fit, name, "positive and finite", numbers, cure=cure)
    return numbers


def require(
    fit: ArrayLike, name: str, rule: str, value: ArrayLike, *, cure: str = ""
) -> None:
    """Raise ValueError with the first value that breaks the rule, and the cure."""
    bad = ~np.asarray(fit)
    if bad.any():
        first = np.broadcast_to(np.asarray(value, dtype=float), bad.shape)[bad].flat[0]
        missing = " (missing)" if np.isnan(first) else ""
        advice = f"; {cure}" if cure else ""
        msg = f"{name} must be {rule}, got {first:g}{missing}{advice}"
        raise ValueError(msg)
