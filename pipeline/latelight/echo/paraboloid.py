"""The paraboloid: the limit of the ellipsoid for a distant source.

It holds for ``D >> c t`` and small angles only, and is wrong by 4-60 % at angles of
a few degrees: :mod:`latelight.echo.geometry` has the exact forms, and explains the
symbols.  Every function here compares its result with the exact one and warns where
they differ by more than the stated error of the measurement, by default 1 %.
Couderc 1939, Ann. Astrophys. 2, 271 (from memory).
"""

from __future__ import annotations

import warnings

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_age,
    checked_angle,
    checked_depth,
    checked_distance,
    checked_finite,
    require,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import (
    delay_yr,
    depth_pc,
    light_speed_arcsec_yr,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.records import FloatArray

__all__ = [
    "ParaboloidWarning",
    "paraboloid_delay_yr",
    "paraboloid_depth_pc",
    "paraboloid_speed_arcsec_yr",
    "warn_beyond",
]

TOLERANCE = 0.01


class ParaboloidWarning(UserWarning):
    """A paraboloid stands where only the ellipsoid is good enough."""


def paraboloid_depth_pc(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    error_pc: ArrayLike | None = None,
) -> FloatArray:
    """Return the depth in the paraboloid form: rho**2 / (2 c t) - c t / 2, pc.

    ``rho`` is the distance times the angle.  Arguments and errors as for
    :func:`latelight.echo.geometry.depth_pc`.

    Parameters
    ----------
    error_pc : array_like of float, optional
        Stated error of the depth, pc; by default 1 % of the distance from dust to
        source.

    Warns
    -----
    ParaboloidWarning
        Where the exact depth differs by more than that.
    """
    rho, path = _small_angle(theta_deg, age_yr, distance_pc)
    depth = rho**2 / (2.0 * path) - path / 2.0
    if error_pc is None:
        error_pc = TOLERANCE * source_distance_pc(theta_deg, age_yr, distance_pc)
    warn_beyond("depth, pc", depth, depth_pc(theta_deg, age_yr, distance_pc), error_pc)
    return depth


def paraboloid_delay_yr(
    theta_deg: ArrayLike,
    depth_pc: ArrayLike,
    distance_pc: ArrayLike,
    *,
    error_yr: ArrayLike | None = None,
) -> FloatArray:
    """Return the delay in the paraboloid form: (sqrt(rho**2 + z**2) - z) / c.

    Arguments and errors as for :func:`latelight.echo.geometry.delay_yr`.

    Parameters
    ----------
    error_yr : array_like of float, optional
        Stated error of the delay, Julian years; by default 1 % of it.

    Warns
    -----
    ParaboloidWarning
        Where the exact delay differs by more than that.
    """
    distance = checked_distance(distance_pc)
    rho = distance * checked_angle(theta_deg)
    depth = checked_depth(depth_pc, distance)
    r = np.hypot(rho, depth)
    away = np.where(depth > 0.0, rho**2 / (r + np.abs(depth)), r - depth)
    delay = away / LIGHT_PC_PER_YEAR
    exact = delay_yr(theta_deg, depth_pc, distance_pc)
    warn_beyond(
        "delay, years",
        delay,
        exact,
        TOLERANCE * exact if error_yr is None else error_yr,
    )
    return delay


def paraboloid_speed_arcsec_yr(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    slope: ArrayLike = 0.0,
    *,
    error_arcsec_yr: ArrayLike | None = None,
) -> FloatArray:
    """Return the speed in the paraboloid form: c (z + c t) / (rho - s c t).

    Arguments, sign and errors as for :func:`latelight.echo.geometry.speed_arcsec_yr`.

    Parameters
    ----------
    error_arcsec_yr : array_like of float, optional
        Stated error of the speed, arcsec per Julian year; by default 1 % of the
        smaller of both forms.

    Warns
    -----
    ParaboloidWarning
        Where the exact speed differs by more than that.
    """
    rho, path = _small_angle(theta_deg, age_yr, distance_pc)
    to_source = rho**2 / (2.0 * path) + path / 2.0
    s = checked_finite(slope, "slope")
    with np.errstate(divide="ignore"):
        beta = to_source / (rho - s * path)
    speed = beta * light_speed_arcsec_yr(distance_pc)
    exact = speed_arcsec_yr(theta_deg, age_yr, distance_pc, slope)
    if error_arcsec_yr is None:
        error_arcsec_yr = TOLERANCE * np.minimum(np.abs(speed), np.abs(exact))
    warn_beyond("speed, arcsec/yr", speed, exact, error_arcsec_yr)
    return speed


def warn_beyond(
    what: str, paraboloid: ArrayLike, exact: ArrayLike, error: ArrayLike
) -> None:
    """Warn, for the caller's caller, where two forms differ by more than an error.

    Parameters
    ----------
    what : str
        The quantity and its unit.
    paraboloid, exact, error : array_like of float
        Both forms and the stated error; they broadcast.

    Warns
    -----
    ParaboloidWarning
        With the worst difference and how many places differ.
    """
    allowed = as_floats(error)
    require(allowed >= 0.0, "the stated error", "zero or positive", allowed)
    forms = np.broadcast_arrays(as_floats(paraboloid), as_floats(exact))
    with np.errstate(invalid="ignore"):  # both infinite: no difference
        off = np.nan_to_num(np.abs(forms[0] - forms[1]), nan=0.0, posinf=np.inf)
        beyond = off > allowed
    if not beyond.any():
        return
    off = np.broadcast_to(off, beyond.shape)
    worst = np.argmax(np.where(beyond, off, 0.0))
    ours, theirs = (np.broadcast_to(form, beyond.shape).flat[worst] for form in forms)
    warnings.warn(
        f"paraboloid: {what}: {ours:g} where the ellipsoid has {theirs:g}, beyond the "
        f"stated error at {beyond.sum()} of {beyond.size} places; use the exact form",
        ParaboloidWarning,
        stacklevel=3,
    )


def _small_angle(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Return rho = D theta and the light path c t, pc."""
    rho = checked_distance(distance_pc) * checked_angle(theta_deg)
    return rho, checked_age(age_yr) * LIGHT_PC_PER_YEAR
