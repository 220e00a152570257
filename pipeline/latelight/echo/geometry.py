"""Where dust must lie to echo an outburst now, and how its echo moves.

Light that was scattered on its way arrives later than the direct light.  All
dust seen with one delay lies on an ellipsoid with the source and the observer
as foci (Couderc 1939, Ann. Astrophys. 2, 271)::

    r + l = D + c t

Symbols, everywhere in this package:

- ``D`` distance source-observer, ``r`` dust-source, ``l`` dust-observer, pc;
- ``t`` delay after the direct light, Julian years, ``c`` the speed of light;
- ``theta`` angle between source and dust seen by the observer;
- ``z`` depth of the dust along the line from source to observer, measured from
  the source, pc, POSITIVE TOWARDS THE OBSERVER; ``rho`` its distance from that
  line, pc, so ``tan(theta) = rho / (D - z)``.

Everything here is exact; the usual approximation is in
:mod:`latelight.echo.paraboloid`.  Arguments broadcast; numbers in give numbers out.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    checked_age,
    checked_angle,
    checked_depth,
    checked_distance,
    checked_error,
    checked_finite,
    require,
)
from latelight.echo.constants import ARCSEC_PER_RADIAN, LIGHT_PC_PER_YEAR
from latelight.echo.ellipsoid import Ellipsoid
from latelight.records import FloatArray

__all__ = [
    "angle_deg",
    "delay_gradient",
    "delay_yr",
    "depth_error_pc",
    "depth_partials",
    "depth_pc",
    "front_speed",
    "light_speed_arcsec_yr",
    "observer_distance_pc",
    "projected_distance_pc",
    "scattering_angle_deg",
    "source_distance_pc",
    "speed_arcsec_yr",
]


def light_speed_arcsec_yr(distance_pc: ArrayLike) -> FloatArray:
    """Return the angular rate of light crossing the sky at a distance.

    Parameters
    ----------
    distance_pc : array_like of float
        Distance, pc, positive.

    Returns
    -------
    float64
        Arcsec per Julian year: 63241.077 / ``distance_pc``.

    Raises
    ------
    ValueError
        If a distance is not positive and finite.
    """
    return ARCSEC_PER_RADIAN * LIGHT_PC_PER_YEAR / checked_distance(distance_pc)


def delay_yr(
    theta_deg: ArrayLike, depth_pc: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return the delay of light scattered at one place: (r + l - D) / c.

    Parameters
    ----------
    theta_deg : array_like of float
        Angle between source and dust, degrees, 0 <= theta < 90.
    depth_pc : array_like of float
        Depth of the dust, pc from the source, positive towards the observer;
        less than the distance.
    distance_pc : array_like of float
        Distance of the source, pc, positive.

    Returns
    -------
    float64
        Julian years after the direct light.

    Raises
    ------
    ValueError
        If the angle or the distance is out of range, or the dust lies at or
        behind the observer.
    """
    theta = checked_angle(theta_deg)
    distance = checked_distance(distance_pc)
    depth = checked_depth(depth_pc, distance)
    to_observer = distance - depth
    rho = to_observer * np.tan(theta)
    r = np.hypot(rho, depth)
    # r - z and l - (D - z) without the cancellation between large lengths.
    beyond = np.where(depth > 0.0, rho**2 / (r + np.abs(depth)), r - depth)
    slant = to_observer * 2.0 * np.sin(theta / 2.0) ** 2 / np.cos(theta)
    return (beyond + slant) / LIGHT_PC_PER_YEAR


def depth_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return the depth of the dust that echoes at an angle and age.

    Parameters
    ----------
    theta_deg : array_like of float
        Angle between source and dust, degrees, 0 <= theta < 90.
    age_yr : array_like of float
        Delay after the direct light, Julian years, positive.
    distance_pc : array_like of float
        Distance of the source, pc, positive.

    Returns
    -------
    float64
        Depth, pc from the source, positive towards the observer.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    return Ellipsoid(theta_deg, age_yr, distance_pc).depth


def angle_deg(
    depth_pc: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return the angle from the source at which dust of one depth echoes now.

    The inverse of :func:`depth_pc`; the same on either side of the source.

    Parameters
    ----------
    depth_pc : array_like of float
        Depth of the dust, pc: from ``-c t / 2``, straight behind the source, to
        less than the distance.
    age_yr, distance_pc : array_like of float
        As for :func:`depth_pc`.

    Returns
    -------
    float64
        Degrees, 0 <= angle < 90.

    Raises
    ------
    ValueError
        If an argument is out of its range, the dust lies at or behind the observer,
        or so far behind the source that no light has returned from it.

    Notes
    -----
    With ``S = D + c t``, from ``r - l = D (2 z - D) / S``::

        rho**2 = c t (2 D + c t) (2 z + c t) (2 (D - z) + c t) / (2 S)**2
    """
    distance = checked_distance(distance_pc)
    path = checked_age(age_yr) * LIGHT_PC_PER_YEAR
    depth = checked_depth(depth_pc, distance)
    to_observer = distance - depth
    behind = 2.0 * depth + path
    require(
        behind >= -1e-12 * path,  # straight behind the source, as rounded
        "depth_pc",
        "at least -c t / 2",
        depth,
        cure="light from dust farther behind the source is still on its way",
    )
    square = path * (2.0 * distance + path) * np.maximum(behind, 0.0)
    square = square * (2.0 * to_observer + path)
    rho = np.sqrt(square) / (2.0 * (distance + path))
    return np.degrees(np.arctan2(rho, to_observer))


def depth_error_pc(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    theta_err_deg: ArrayLike = 0.0,
    age_err_yr: ArrayLike = 0.0,
    distance_err_pc: ArrayLike = 0.0,
) -> FloatArray:
    """Return the error of :func:`depth_pc`, to first order.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc : array_like of float
        As for :func:`depth_pc`.
    theta_err_deg, age_err_yr, distance_err_pc : array_like of float
        Their independent 1-sigma errors, in the same units.

    Returns
    -------
    float64
        1 sigma, pc.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    by_angle, by_age, by_distance = depth_partials(theta_deg, age_yr, distance_pc)
    terms = (
        by_angle * checked_error(theta_err_deg, "theta_err_deg"),
        by_age * checked_error(age_err_yr, "age_err_yr"),
        by_distance * checked_error(distance_err_pc, "distance_err_pc"),
    )
    return np.sqrt(sum(term**2 for term in terms))


def depth_partials(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the partial derivatives of :func:`depth_pc`.

    Arguments and errors as for :func:`depth_pc`.

    Returns
    -------
    by_angle, by_age, by_distance : float64
        pc per degree, pc per Julian year, pc per pc.
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    # z = N / (2 B), so dz = (dN - 2 z dB) / (2 B).
    twice = 2.0 * e.breadth
    by_angle = 2.0 * e.distance * (e.distance + e.path - e.depth) + e.path**2
    by_path = 2.0 * (e.distance * e.versine - e.path * e.cos) - 2.0 * e.depth
    by_distance = e.versine * (4.0 * e.distance + 2.0 * e.path - 2.0 * e.depth)
    return (
        np.radians(e.sin * by_angle / twice),
        LIGHT_PC_PER_YEAR * by_path / twice,
        by_distance / twice,
    )


def projected_distance_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return rho, the dust's distance from the line source-observer, pc.

    Arguments and errors as for :func:`depth_pc`.
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    return e.to_observer * e.sin


def source_distance_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return r, the distance from dust to source, pc.

    Arguments and errors as for :func:`depth_pc`.
    """
    return Ellipsoid(theta_deg, age_yr, distance_pc).to_source


def observer_distance_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return l, the distance from dust to observer, pc.

    Arguments and errors as for :func:`depth_pc`.
    """
    return Ellipsoid(theta_deg, age_yr, distance_pc).to_observer


def scattering_angle_deg(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return the angle by which the dust turns the light, degrees.

    0 is forward, 180 straight back: the sum of the angles of the triangle at
    the source and at the observer.  Arguments and errors as for
    :func:`depth_pc`.
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    at_source = np.arctan2(e.to_observer * e.sin, e.depth)
    return np.degrees(at_source + e.theta)


def speed_arcsec_yr(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    slope: ArrayLike = 0.0,
) -> FloatArray:
    """Return how fast the echo of a sheet moves away from the source.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc : array_like of float
        As for :func:`depth_pc`.
    slope : array_like of float
        Local slope ``dz/drho`` of the sheet: 0 across the line source-observer,
        positive when it comes nearer to the observer away from the source.

    Returns
    -------
    float64
        Arcsec per Julian year, positive away from the source, negative towards
        it; infinite where the sheet is tangent to the ellipsoid.

    Raises
    ------
    ValueError
        If an argument is out of its range.

    Notes
    -----
    From ``d(r + l) = c dt`` along the sheet::

        drho/d(ct)   = 1 / (rho/r + rho/l + s (z/r - (D - z)/l))
        dtheta/d(ct) = (D - z + s rho) / l**2 * drho/d(ct)
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    s = checked_finite(slope, "slope")
    rho = e.to_observer * e.sin
    # z/r - cos(theta), without the cancellation far from the observer.
    per_depth = e.versine - e.overshoot / e.to_source
    per_length = rho / e.to_source + e.sin + s * per_depth
    angle = (e.to_observer * e.cos + s * rho) / e.to_observer**2
    with np.errstate(divide="ignore"):
        return ARCSEC_PER_RADIAN * LIGHT_PC_PER_YEAR * angle / per_length


def front_speed(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return how fast the lit front recedes along one line of sight.

    Arguments and errors as for :func:`depth_pc`.

    Returns
    -------
    float64
        Speed away from the observer in units of the speed of light, at least a
        half: ``r / (r + l - D cos(theta))``, for a distant source ``r / (c t)``.
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    return e.to_source / (e.path + e.distance * e.versine)


def delay_gradient(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Return how the delay grows across the sky, and how a tilt changes that.

    For a sheet whose normal is tilted from the line of sight so that it comes
    nearer by ``a`` pc for a pc away from the source and by ``b`` pc for a pc
    sideways, the delay grows over the sky, in light travel per length at the
    dust, by ``(across - per_tilt * a, -per_tilt * b)`` away from the source and
    sideways.  An echo moves along that gradient, at the speed of light over its
    length: all possible motions follow from two numbers.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc : array_like of float
        As for :func:`depth_pc`.

    Returns
    -------
    across, per_tilt : float64
        ``D sin(theta) / r`` and ``(r + l - D cos(theta)) / r``; for a distant
        source ``rho / r`` and ``c t / r``.

    Raises
    ------
    ValueError
        If an argument is out of its range.

    Notes
    -----
    Partial derivatives of ``r + l`` with ``r**2 = l**2 + D**2 - 2 l D
    cos(theta)``: ``D sin(theta) / r`` along ``l dtheta``, ``1 + (l - D
    cos(theta)) / r`` along ``l``.
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    across = e.distance * e.sin / e.to_source
    per_tilt = (e.path + e.distance * e.versine) / e.to_source
    return across, per_tilt
