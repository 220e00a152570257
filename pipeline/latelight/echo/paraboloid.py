"""The paraboloid: the limit of the ellipsoid for a distant source.

It holds for ``D >> c t`` and small angles only, and is wrong by 4-60 % at angles of
a few degrees: :mod:`latelight.echo.geometry` has the exact forms, and explains the
symbols.  Couderc 1939, Ann. Astrophys. 2, 271 (from memory).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    checked_age,
    checked_angle,
    checked_distance,
    require,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import light_speed_arcsec_yr
from latelight.records import FloatArray

__all__ = [
    "paraboloid_delay_yr",
    "paraboloid_depth_pc",
    "paraboloid_speed_arcsec_yr",
]


def paraboloid_depth_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return the depth in the paraboloid form: rho**2 / (2 c t) - c t / 2, pc.

    ``rho`` is the distance times the angle.  Arguments and errors as for
    :func:`latelight.echo.geometry.depth_pc`.
    """
    rho, path = _small_angle(theta_deg, age_yr, distance_pc)
    return rho**2 / (2.0 * path) - path / 2.0


def paraboloid_delay_yr(
    theta_deg: ArrayLike, depth_pc: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return the delay in the paraboloid form: (sqrt(rho**2 + z**2) - z) / c.

    Arguments and errors as for :func:`latelight.echo.geometry.delay_yr`.
    """
    distance = checked_distance(distance_pc)
    rho = distance * checked_angle(theta_deg)
    depth = np.asarray(depth_pc, dtype=float)
    require(depth < distance, "depth_pc", "less than distance_pc", depth)
    r = np.hypot(rho, depth)
    away = np.where(depth > 0.0, rho**2 / (r + np.abs(depth)), r - depth)
    return away / LIGHT_PC_PER_YEAR


def paraboloid_speed_arcsec_yr(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    slope: ArrayLike = 0.0,
) -> FloatArray:
    """Return the speed in the paraboloid form: c (z + c t) / (rho - s c t).

    Arguments, sign and errors as for :func:`latelight.echo.geometry.speed_arcsec_yr`.
    """
    rho, path = _small_angle(theta_deg, age_yr, distance_pc)
    to_source = rho**2 / (2.0 * path) + path / 2.0
    s = np.asarray(slope, dtype=float)
    with np.errstate(divide="ignore"):
        beta = to_source / (rho - s * path)
    return beta * light_speed_arcsec_yr(distance_pc)


def _small_angle(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Return rho = D theta and the light path c t, pc."""
    rho = checked_distance(distance_pc) * checked_angle(theta_deg)
    return rho, checked_age(age_yr) * LIGHT_PC_PER_YEAR
