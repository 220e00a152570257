"""Age and depth from place and motion in the paraboloid form.

The exact form is :func:`latelight.echo.inversion.age_and_depth`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    checked_distance,
    checked_finite,
    checked_separation,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import light_speed_arcsec_yr
from latelight.echo.inversion import AgeDepth, age_and_depth, checked_speed
from latelight.echo.paraboloid import TOLERANCE, warn_beyond

__all__ = ["paraboloid_age_and_depth"]


def paraboloid_age_and_depth(
    theta_deg: ArrayLike,
    speed_arcsec_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    slope: ArrayLike = 0.0,
    error_yr: ArrayLike | None = None,
) -> tuple[AgeDepth, AgeDepth]:
    """Return both ages ``rho / (beta +- sqrt(beta**2 - 1 - 2 beta s)) / c``.

    ``beta`` is the speed in units of light's, ``s`` the slope.  Arguments, results
    and errors as for :func:`latelight.echo.inversion.age_and_depth`.

    Parameters
    ----------
    error_yr : array_like of float, optional
        Stated error of the age, Julian years; by default 1 % of it.

    Warns
    -----
    ParaboloidWarning
        Where an exact age differs by more than that.
    """
    distance = checked_distance(distance_pc)
    rho = checked_separation(theta_deg) * distance
    speed = checked_speed(speed_arcsec_yr)
    exact = age_and_depth(theta_deg, speed_arcsec_yr, distance_pc, slope=slope)
    beta = speed / light_speed_arcsec_yr(distance)
    square = beta**2 - 1.0 - 2.0 * beta * checked_finite(slope, "slope")
    spread = np.sqrt(np.maximum(square, 0.0))
    solutions = []
    for root, part in zip(exact, (beta + spread, beta - spread), strict=True):
        possible = (square >= 0.0) & (part > 0.0)
        path = rho / np.where(possible, part, 1.0)
        age = np.where(possible, path / LIGHT_PC_PER_YEAR, 0.0)
        depth = np.where(possible, rho**2 / (2.0 * path) - path / 2.0, 0.0)
        allowed = TOLERANCE * root.age_yr if error_yr is None else error_yr
        warn_beyond("age, years", age, root.age_yr, allowed)
        solutions.append(AgeDepth(age, depth, possible))
    return solutions[0], solutions[1]
