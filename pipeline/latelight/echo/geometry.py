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
    checked_distance,
    require,
)
from latelight.echo.constants import ARCSEC_PER_RADIAN, LIGHT_PC_PER_YEAR
from latelight.records import FloatArray

__all__ = [
    "delay_gradient",
    "delay_yr",
    "depth_error_pc",
    "depth_pc",
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
    depth = np.asarray(depth_pc, dtype=float)
    to_observer = distance - depth
    require(to_observer > 0.0, "depth_pc", "less than distance_pc", depth)
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
    ellipsoid = _Ellipsoid(theta_deg, age_yr, distance_pc)
    return ellipsoid.depth


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
    e = _Ellipsoid(theta_deg, age_yr, distance_pc)
    # z = N / (2 B), so dz = (dN - 2 z dB) / (2 B).
    by_angle = (
        e.sin * (2.0 * e.distance * (e.distance + e.path) + e.path**2)
        - 2.0 * e.depth * e.distance * e.sin
    )
    by_path = 2.0 * (e.distance * e.versine - e.path * e.cos) - 2.0 * e.depth
    by_distance = e.versine * (4.0 * e.distance + 2.0 * e.path - 2.0 * e.depth)
    terms = (
        by_angle * np.radians(np.asarray(theta_err_deg, dtype=float)),
        by_path * LIGHT_PC_PER_YEAR * np.asarray(age_err_yr, dtype=float),
        by_distance * np.asarray(distance_err_pc, dtype=float),
    )
    return np.sqrt(sum(term**2 for term in terms)) / (2.0 * e.breadth)


def projected_distance_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return rho, the dust's distance from the line source-observer, pc.

    Arguments and errors as for :func:`depth_pc`.
    """
    e = _Ellipsoid(theta_deg, age_yr, distance_pc)
    return e.to_observer * e.sin


def source_distance_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return r, the distance from dust to source, pc.

    Arguments and errors as for :func:`depth_pc`.
    """
    return _Ellipsoid(theta_deg, age_yr, distance_pc).to_source


def observer_distance_pc(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return l, the distance from dust to observer, pc.

    Arguments and errors as for :func:`depth_pc`.
    """
    return _Ellipsoid(theta_deg, age_yr, distance_pc).to_observer


def scattering_angle_deg(
    theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
) -> FloatArray:
    """Return the angle by which the dust turns the light, degrees.

    0 is forward, 180 straight back: the sum of the angles of the triangle at
    the source and at the observer.  Arguments and errors as for
    :func:`depth_pc`.
    """
    e = _Ellipsoid(theta_deg, age_yr, distance_pc)
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
    e = _Ellipsoid(theta_deg, age_yr, distance_pc)
    s = np.asarray(slope, dtype=float)
    rho = e.to_observer * e.sin
    # z/r - cos(theta), without the cancellation far from the observer.
    per_depth = e.versine - e.overshoot / e.to_source
    per_length = rho / e.to_source + e.sin + s * per_depth
    angle = (e.to_observer * e.cos + s * rho) / e.to_observer**2
    with np.errstate(divide="ignore"):
        return ARCSEC_PER_RADIAN * LIGHT_PC_PER_YEAR * angle / per_length


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
    e = _Ellipsoid(theta_deg, age_yr, distance_pc)
    across = e.distance * e.sin / e.to_source
    per_tilt = (e.path + e.distance * e.versine) / e.to_source
    return across, per_tilt


class _Ellipsoid:
    """The point of the ellipsoid in one direction, lengths in pc.

    With ``tau = c t`` and ``B = D (1 - cos(theta)) + tau``::

        l = tau (2 D + tau) / (2 B)
        r = (2 D (D + tau) (1 - cos(theta)) + tau**2) / (2 B)
        z = (2 D (D + tau) (1 - cos(theta)) - tau**2 cos(theta)) / (2 B)

    from ``l = D + tau - r``, the law of cosines and ``z = D - l cos(theta)``.
    """

    def __init__(
        self, theta_deg: ArrayLike, age_yr: ArrayLike, distance_pc: ArrayLike
    ) -> None:
        self.theta = checked_angle(theta_deg)
        self.distance = checked_distance(distance_pc)
        self.path = checked_age(age_yr) * LIGHT_PC_PER_YEAR
        self.sin = np.sin(self.theta)
        self.cos = np.cos(self.theta)
        self.versine = 2.0 * np.sin(self.theta / 2.0) ** 2
        self.breadth = self.distance * self.versine + self.path
        reach = 2.0 * self.distance * (self.distance + self.path) * self.versine
        twice = 2.0 * self.breadth
        self.to_observer = self.path * (2.0 * self.distance + self.path) / twice
        self.to_source = (reach + self.path**2) / twice
        self.depth = (reach - self.path**2 * self.cos) / twice
        self.overshoot = self.path**2 * (1.0 + self.cos) / twice  # r - z
