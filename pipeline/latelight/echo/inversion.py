"""Age, depth and tilt of a dust sheet from the place and motion of its echo.

Symbols as in :mod:`latelight.echo.geometry`, all forms exact.  With ``x = c t / D``,
the speed ``m`` in units of ``c / D``, a sheet of slope ``s = dz/drho``,
``V = 1 - cos(theta)``, ``K = cos(theta) + s sin(theta)``, ``A = sin(theta) + s V``
and ``B = sin(theta) - s cos(theta)``, the speed of
:func:`latelight.echo.geometry.speed_arcsec_yr` becomes a cubic for the age::

    m x (2 + x) (A + B x) = K (x**2 + 2 V x + 2 V)

For a distant source and a sheet across the view it is the quadratic with the ages
``rho (beta -+ sqrt(beta**2 - 1)) / c``: the idea behind the ages of the echoes in
the Large Magellanic Cloud (Rest et al. 2005, Nature 438, 1132).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_distance,
    checked_finite,
    checked_separation,
    require,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.ellipsoid import Ellipsoid
from latelight.echo.geometry import (
    delay_gradient,
    depth_partials,
    light_speed_arcsec_yr,
)
from latelight.records import BoolArray, FloatArray

__all__ = [
    "AgeDepth",
    "age_and_depth",
    "age_and_depth_covariance",
    "checked_speed",
    "sheet_slope",
]

POLISHES = 3
# Rounding of the cubic's discriminant, relative: dust level with the source has a
# double root, which must not be lost to the last digit.
ROUNDING = 1e-12


@dataclass(frozen=True, slots=True)
class AgeDepth:
    """One of the two sheets that fit a place and a motion.

    Parameters
    ----------
    age_yr : float64
        Delay after the direct light, Julian years; 0 where not possible.
    depth_pc : float64
        Depth of the dust, pc from the source, positive towards the observer; 0
        where not possible.
    possible : bool
        Whether there is such a sheet.
    """

    age_yr: FloatArray
    depth_pc: FloatArray
    possible: BoolArray


def age_and_depth(
    theta_deg: ArrayLike,
    speed_arcsec_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    slope: ArrayLike = 0.0,
) -> tuple[AgeDepth, AgeDepth]:
    """Return the ages and depths at which a sheet's echo moves as measured.

    Parameters
    ----------
    theta_deg : array_like of float
        Angle between source and echo, degrees, 0 < theta < 90.
    speed_arcsec_yr : array_like of float
        Motion away from the source, arcsec per Julian year, negative towards it;
        finite and not zero.
    distance_pc : array_like of float
        Distance of the source, pc, positive.
    slope : array_like of float
        Slope ``dz/drho`` of the sheet: 0 across the line source-observer, positive
        when it comes nearer to the observer away from the source.

    Returns
    -------
    front, behind : AgeDepth
        The younger solution, whose dust lies nearer to the observer, and the older.
        Across the view the younger is dust in front of the source and the older
        dust behind it; at large angles, and for steep or inward moving sheets,
        there is only the younger one.

    Raises
    ------
    ValueError
        If an argument is out of its range, or if a single place has no solution: a
        sheet across the view is never slower than light.  Places of an array without
        one have ``possible`` False in both instead.

    Notes
    -----
    Light paths up to the distance of the source are searched, ``c t <= D``.  The
    cubic's third root is an echo older than that, from dust so far behind the source
    that parallax slows it down.
    """
    problem = _Cubic(theta_deg, speed_arcsec_yr, distance_pc, slope)
    young, old = problem.roots()
    roots = []
    for x in (young, old):
        possible = np.isfinite(x)
        share = np.where(possible, x, 1.0)
        age = share * problem.distance / LIGHT_PC_PER_YEAR
        depth = Ellipsoid(theta_deg, age, distance_pc).depth
        roots.append(
            AgeDepth(
                age_yr=np.where(possible, age, 0.0),
                depth_pc=np.where(possible, depth, 0.0),
                possible=possible,
            )
        )
    if np.ndim(young) == 0 and not roots[0].possible:
        raise ValueError(problem.refusal())
    return roots[0], roots[1]


def age_and_depth_covariance(
    theta_deg: ArrayLike,
    speed_arcsec_yr: ArrayLike,
    distance_pc: ArrayLike,
    covariance: ArrayLike,
    *,
    slope: ArrayLike = 0.0,
) -> tuple[FloatArray, FloatArray]:
    """Return the covariances of the ages and depths of :func:`age_and_depth`.

    To first order.  They grow without bound towards dust level with the source,
    where the front and the behind solution meet: there ask for intervals instead.

    Parameters
    ----------
    theta_deg, speed_arcsec_yr, distance_pc, slope : array_like of float
        As for :func:`age_and_depth`.
    covariance : array_like of float, shape (4, 4, ...)
        Covariance of angle (degrees), speed (arcsec/yr), distance (pc) and slope;
        :func:`latelight.echo.propagation.independent` makes one from errors.

    Returns
    -------
    front, behind : float64, shape (2, 2, ...)
        Covariance of age (years) and depth (pc); 0 where not possible, infinite on
        the diagonal where both solutions meet.

    Raises
    ------
    ValueError
        As :func:`age_and_depth`, or if the covariance has another shape.
    """
    cov = as_floats(covariance)
    if cov.shape[:2] != (4, 4):
        msg = (
            "covariance must have the shape (4, 4, ...) of angle, speed, distance and "
            f"slope, got {cov.shape}; give zeros for what is known exactly"
        )
        raise ValueError(msg)
    problem = _Cubic(theta_deg, speed_arcsec_yr, distance_pc, slope)
    found = []
    for root in age_and_depth(theta_deg, speed_arcsec_yr, distance_pc, slope=slope):
        any_age = problem.distance / LIGHT_PC_PER_YEAR
        age = np.where(root.possible, root.age_yr, any_age)
        by_age = problem.age_partials(age / any_age)
        of_angle, of_age, of_distance = depth_partials(theta_deg, age, distance_pc)
        zero = np.zeros_like(of_age)
        by_depth = of_age * by_age + np.array([of_angle, zero, of_distance, zero])
        jacobian = np.array([by_age, by_depth])
        with np.errstate(invalid="ignore"):
            spread = np.einsum("ki...,ij...,lj...->kl...", jacobian, cov, jacobian)
        meets = ~np.isfinite(jacobian).all(axis=(0, 1))
        endless = np.where(np.eye(2).reshape(2, 2, *[1] * meets.ndim) > 0, np.inf, 0.0)
        spread = np.where(meets, endless, spread)
        found.append(np.where(root.possible, spread, 0.0))
    return found[0], found[1]


def sheet_slope(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    speed_arcsec_yr: ArrayLike,
    turn_deg: ArrayLike = 0.0,
) -> tuple[FloatArray, FloatArray]:
    """Return the slopes of the sheet whose echo moves as measured.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc : array_like of float
        As for :func:`latelight.echo.geometry.depth_pc`.
    speed_arcsec_yr : array_like of float
        Motion along the normal of the arc, arcsec per Julian year, not zero.
    turn_deg : array_like of float
        Its direction minus that away from the source, degrees, positive in the
        sense of position angles; 180 with a positive speed, or 0 with a negative
        one, is towards the source.

    Returns
    -------
    radial : float64
        ``dz/drho``, as in :func:`latelight.echo.geometry.speed_arcsec_yr`: positive
        when the sheet comes nearer to the observer away from the source.
    sideways : float64
        ``dz`` per length square to that, positive when it comes nearer in the sense
        of growing position angles.

    Raises
    ------
    ValueError
        If an argument is out of its range.

    Notes
    -----
    The motion gives the gradient of the delay, and that, by
    :func:`latelight.echo.geometry.delay_gradient`, the tilt ``a, b`` against the
    plane across the sight line.  Turned to the line source-observer it is
    ``tan(theta + arctan(a))`` and ``b (cos(theta) + radial sin(theta))``.
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    speed = checked_speed(speed_arcsec_yr)
    across, per_tilt = delay_gradient(theta_deg, age_yr, distance_pc)
    gradient = light_speed_arcsec_yr(e.to_observer) / speed
    turned = np.radians(checked_finite(turn_deg, "turn_deg"))
    away = (across - gradient * np.cos(turned)) / per_tilt
    aside = -gradient * np.sin(turned) / per_tilt
    radial = (away * e.cos + e.sin) / (e.cos - away * e.sin)
    return radial, aside * (e.cos + radial * e.sin)


def checked_speed(speed_arcsec_yr: ArrayLike) -> FloatArray:
    """Return speeds; ValueError unless finite and not zero."""
    speed = as_floats(speed_arcsec_yr)
    require(
        np.isfinite(speed) & (speed != 0.0),
        "speed_arcsec_yr",
        "finite and not zero",
        speed,
        cure="leave out arcs without a measured motion",
    )
    return speed


class _Cubic:
    """The equation for the age, in the symbols of this module's docstring."""

    def __init__(
        self,
        theta_deg: ArrayLike,
        speed_arcsec_yr: ArrayLike,
        distance_pc: ArrayLike,
        slope: ArrayLike,
    ) -> None:
        self.theta = checked_separation(theta_deg)
        self.distance = checked_distance(distance_pc)
        self.speed = checked_speed(speed_arcsec_yr)
        self.slope = checked_finite(slope, "slope")
        self.m = self.speed / light_speed_arcsec_yr(self.distance)
        self.sin, self.cos = np.sin(self.theta), np.cos(self.theta)
        self.half = 2.0 * np.sin(self.theta / 2.0)  # 2 V = half**2
        self.k = self.cos + self.slope * self.sin
        self.b = self.sin - self.slope * self.cos
        self.a = self.sin + self.slope * self.half**2 / 2.0

    def roots(self) -> tuple[FloatArray, FloatArray]:
        """Return the two smallest ``x`` in (0, 1]; NaN where there is none.

        In ``v = half / x``, of order one, the cubic is
        ``K v**3 - q1 v**2 + q2 v + q3 = 0``, its largest roots are wanted, and the
        one that is not is small for all but near sources.
        """
        q1 = 2.0 * self.m * self.a / self.half - self.k * self.half
        q2 = self.k - self.m * (self.a + 2.0 * self.b)
        q3 = -self.m * self.b * self.half
        with np.errstate(divide="ignore", invalid="ignore"):
            b, c, d = np.broadcast_arrays(-q1 / self.k, q2 / self.k, q3 / self.k)
            first, second = _largest_roots(b, c, d)
            edge = self.half * (1.0 - ROUNDING)
            young = np.where(first >= edge, self.half / first, np.nan)
            old = np.where(second >= edge, self.half / second, np.nan)
        return young, old

    def age_partials(self, x: FloatArray) -> FloatArray:
        """Return d(age)/d(angle in deg, speed, distance, slope), shape (4, ...)."""
        versine = self.half**2 / 2.0
        length = x * (2.0 + x)
        arm = self.a + self.b * x
        square = x**2 + 2.0 * versine * (x + 1.0)
        by_x = self.m * (2.0 * (1.0 + x) * arm + length * self.b)
        by_x = by_x - 2.0 * self.k * (x + versine)
        by_m = length * arm
        # A' = B' = K and K' = -B.
        by_theta = self.k * (1.0 + x) * (self.m * length - 2.0 * self.sin)
        by_theta = by_theta + self.b * square
        by_slope = self.m * length * (versine - x * self.cos) - self.sin * square
        with np.errstate(divide="ignore"):
            dx_dm, dx_dtheta, dx_dslope = (
                -part / by_x for part in (by_m, by_theta, by_slope)
            )
        with np.errstate(invalid="ignore"):
            # m = speed D / c and c t = x D.
            partials = (
                np.radians(dx_dtheta) * self.distance,
                dx_dm * self.m / self.speed * self.distance,
                dx_dm * self.m + x,
                dx_dslope * self.distance,
            )
        return np.array(np.broadcast_arrays(*partials)) / LIGHT_PC_PER_YEAR

    def refusal(self) -> str:
        """Return why no sheet of this slope moves as measured."""
        theta, speed, distance, slope = (
            float(value)
            for value in (np.degrees(self.theta), self.speed, self.distance, self.slope)
        )
        light = float(light_speed_arcsec_yr(distance))
        rule = (
            "a sheet across the line of sight is never slower than light"
            if slope == 0.0
            else f"no sheet of slope {slope:g} moves like that"
        )
        return (
            f"speed_arcsec_yr {speed:g} at theta_deg {theta:g} and distance_pc "
            f"{distance:g} ({speed / light:.4g} of light's {light:.6g} arcsec/yr) fits "
            f"no age: {rule}; the sheet must be tilted (another slope), or the source "
            "is not the origin"
        )


def _largest_roots(
    b: FloatArray, c: FloatArray, d: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the two largest real roots of v**3 + b v**2 + c v + d, NaN if none.

    Viete's and Cardano's forms, then Newton steps for the last digits.
    """
    shift = b / 3.0
    p = shift**2 - c / 3.0
    q = shift**3 - shift * c / 2.0 + d / 2.0
    # Three real roots where q**2 <= p**3.
    excess = q**2 - p**3
    scale = q**2 + np.abs(p) ** 3
    three = (excess <= ROUNDING * scale) & (p > 0.0)
    root_p = np.sqrt(np.maximum(p, 0.0))
    angle = np.arccos(np.clip(-q / np.where(p > 0.0, root_p**3, 1.0), -1.0, 1.0)) / 3.0
    single = np.cbrt(np.abs(q) + np.sqrt(np.maximum(excess, 0.0)))
    single = -np.sign(q) * (single + np.where(single > 0.0, p / single, 0.0))
    first = np.where(three, 2.0 * root_p * np.cos(angle), single) - shift
    second = 2.0 * root_p * np.cos(angle - 2.0 * np.pi / 3.0) - shift
    second = np.where(three, second, np.nan)
    return _polished(first, b, c, d), _polished(second, b, c, d)


def _polished(v: FloatArray, b: FloatArray, c: FloatArray, d: FloatArray) -> FloatArray:
    """Return roots after Newton steps; those next to a double root stay put."""
    for _ in range(POLISHES):
        slope = (3.0 * v + 2.0 * b) * v + c
        step = (((v + b) * v + c) * v + d) / slope
        v = np.where(np.abs(step) < 1e-4 * np.abs(v), v - step, v)
    return v
