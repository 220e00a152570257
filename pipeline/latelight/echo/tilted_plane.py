"""The echo of a flat sheet of any tilt: where it lies on the sky.

The plane is ``z = z0 + x tan(tilt)``: it crosses the line source-observer at the
depth ``z0`` and comes nearer to the observer along ``x``.  Symbols as in
:mod:`latelight.echo.geometry`.

On the ellipsoid ``r = p + e z`` with ``e = D / (D + c t)`` and ``p = c t (2 D + c t) /
(2 (D + c t))``, so the lit curve, projected along the line source-observer, is exactly
an ellipse in ``x`` and ``y``.  Seen from the observer nearer parts look larger.  For a
distant source it is a circle that drifts at ``c tan(tilt)`` (Tylenda 2004, A&A 414,
223, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_age,
    checked_depth,
    checked_distance,
    checked_finite,
    require,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.paraboloid import TOLERANCE, warn_beyond
from latelight.records import FloatArray

__all__ = [
    "EchoCircle",
    "EchoEllipse",
    "paraboloid_circle",
    "tilted_plane_angle_deg",
    "tilted_plane_curve",
    "tilted_plane_ellipse",
]


@dataclass(frozen=True, slots=True)
class EchoCircle:
    """The echo of a tilted plane around a distant source.

    Parameters
    ----------
    centre_pc : float64
        Its centre from the source, pc, in the direction in which the plane comes
        nearer.
    radius_pc : float64
        Its radius, pc.
    drift : float64
        Speed of the centre in that direction, in units of the speed of light.
    """

    centre_pc: FloatArray
    radius_pc: FloatArray
    drift: FloatArray


@dataclass(frozen=True, slots=True)
class EchoEllipse:
    """The echo of a tilted plane, projected along the line source-observer.

    Parameters
    ----------
    centre_pc : float64
        Its centre from the source, pc, in the direction in which the plane comes
        nearer.
    along_pc, across_pc : float64
        Its half axes along that direction and across, pc.
    """

    centre_pc: FloatArray
    along_pc: FloatArray
    across_pc: FloatArray


def paraboloid_circle(
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    depth_pc: ArrayLike,
    tilt_deg: ArrayLike,
    error_pc: ArrayLike | None = None,
) -> EchoCircle:
    """Return the circle of a tilted plane in the paraboloid form.

    Parameters
    ----------
    age_yr, distance_pc, depth_pc, tilt_deg : array_like of float
        As for :func:`tilted_plane_ellipse`.
    error_pc : array_like of float, optional
        Stated error of the circle's edges, pc; by default 1 % of its radius.

    Returns
    -------
    EchoCircle
        Centre ``c t tan(tilt)``, radius ``sqrt(2 z0 c t + (c t / cos(tilt))**2)``.

    Raises
    ------
    ValueError
        As :func:`tilted_plane_ellipse`.

    Warns
    -----
    ParaboloidWarning
        Where an edge of the exact ellipse lies farther off than that.
    """
    exact = tilted_plane_ellipse(
        age_yr, distance_pc, depth_pc=depth_pc, tilt_deg=tilt_deg
    )
    path = checked_age(age_yr) * LIGHT_PC_PER_YEAR
    tilt = np.tan(np.radians(as_floats(tilt_deg)))
    square = 2.0 * as_floats(depth_pc) * path + path**2 * (1.0 + tilt**2)
    centre, radius = np.broadcast_arrays(path * tilt, np.sqrt(np.maximum(square, 0.0)))
    for sign in (1.0, -1.0):
        warn_beyond(
            "edge of the circle, pc",
            centre + sign * radius,
            exact.centre_pc + sign * exact.along_pc,
            TOLERANCE * exact.along_pc if error_pc is None else error_pc,
        )
    return EchoCircle(centre, radius, np.broadcast_to(tilt, centre.shape))


def tilted_plane_ellipse(
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    depth_pc: ArrayLike,
    tilt_deg: ArrayLike,
) -> EchoEllipse:
    """Return the lit curve of a tilted plane, projected beside the source.

    Parameters
    ----------
    age_yr : array_like of float
        Delay after the direct light, Julian years, positive.
    distance_pc : array_like of float
        Distance of the source, pc, positive.
    depth_pc : array_like of float
        Depth at which the plane crosses the line source-observer, pc, less than the
        distance.
    tilt_deg : array_like of float
        Tilt, degrees, between -90 and 90: 0 across that line.

    Returns
    -------
    EchoEllipse
        Exact.

    Raises
    ------
    ValueError
        If an argument is out of its range, or the light has not reached the plane
        and come back yet.
    """
    plane = _Plane(age_yr, distance_pc, depth_pc, tilt_deg)
    return EchoEllipse(plane.centre, plane.along, plane.across)


def tilted_plane_curve(
    phase_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    depth_pc: ArrayLike,
    tilt_deg: ArrayLike,
    tilt_pa_deg: ArrayLike,
) -> tuple[FloatArray, FloatArray]:
    """Return points of the lit curve of a tilted plane on the sky.

    Parameters
    ----------
    phase_deg : array_like of float
        Where on the curve, degrees around the centre of its ellipse, from the point
        farthest along the tilt in the sense of position angles.
    age_yr, distance_pc, depth_pc, tilt_deg : array_like of float
        As for :func:`tilted_plane_ellipse`.
    tilt_pa_deg : array_like of float
        Position angle in which the plane comes nearer, degrees east of north.

    Returns
    -------
    theta_deg, position_angle_deg : float64
        Place of the points as seen from the source: angle and position angle.

    Raises
    ------
    ValueError
        As :func:`tilted_plane_ellipse`, or if a point lies at or behind the observer.
    """
    plane = _Plane(age_yr, distance_pc, depth_pc, tilt_deg)
    phase = np.radians(checked_finite(phase_deg, "phase_deg"))
    x = plane.centre + plane.along * np.cos(phase)
    y = plane.across * np.sin(phase)
    theta = plane.angle_deg(np.hypot(x, y), x)
    turned = np.degrees(np.arctan2(y, x)) + checked_finite(tilt_pa_deg, "tilt_pa_deg")
    theta, turned = np.broadcast_arrays(theta, turned % 360.0)
    return theta, turned


def tilted_plane_angle_deg(
    position_angle_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    depth_pc: ArrayLike,
    tilt_deg: ArrayLike,
    tilt_pa_deg: ArrayLike,
) -> FloatArray:
    """Return how far from the source a tilted plane echoes at a position angle.

    Parameters
    ----------
    position_angle_deg : array_like of float
        Direction as seen from the source, degrees east of north.
    age_yr, distance_pc, depth_pc, tilt_deg, tilt_pa_deg : array_like of float
        As for :func:`tilted_plane_curve`.

    Returns
    -------
    float64
        Angle from the source, degrees.

    Raises
    ------
    ValueError
        As :func:`tilted_plane_curve`, or if the curve does not enclose the source:
        then it has two points in some directions and none in others.
    """
    plane = _Plane(age_yr, distance_pc, depth_pc, tilt_deg)
    require(
        plane.inside > 0.0,
        "depth_pc",
        "more than -c t / 2 for a curve around the source",
        as_floats(depth_pc),
        cure="ask tilted_plane_curve for the points of a curve beside it",
    )
    direction = checked_finite(position_angle_deg, "position_angle_deg")
    along = np.cos(np.radians(direction - checked_finite(tilt_pa_deg, "tilt_pa_deg")))
    rise = plane.tilt * along
    # The positive root of w rho**2 + 2 h rho - inside = 0, without cancellation.
    w, h = 1.0 + rise**2 * plane.flat, rise * plane.lean
    root = np.sqrt(h**2 + w * plane.inside)
    rho = np.where(h > 0.0, plane.inside / (root + np.abs(h)), (root - h) / w)
    return plane.angle_deg(rho, rho * along)


class _Plane:
    """A plane and the ellipsoid: ``x**2 w + 2 x tan(tilt) lean + y**2 = inside``.

    ``flat = 1 - e**2``, ``lean = z0 flat - p e``, ``w = 1 + tan(tilt)**2 flat`` and
    ``inside = (p + e z0)**2 - z0**2``.
    """

    def __init__(
        self,
        age_yr: ArrayLike,
        distance_pc: ArrayLike,
        depth_pc: ArrayLike,
        tilt_deg: ArrayLike,
    ) -> None:
        self.distance = checked_distance(distance_pc)
        self.depth = checked_depth(depth_pc, self.distance)
        path = checked_age(age_yr) * LIGHT_PC_PER_YEAR
        tilt = as_floats(tilt_deg)
        require(np.abs(tilt) < 90.0, "tilt_deg", "between -90 and 90", tilt)
        self.tilt = np.tan(np.radians(tilt))
        total, longer = self.distance + path, 2.0 * self.distance + path
        self.flat = path * longer / total**2
        self.lean = self.flat * (self.depth - self.distance / 2.0)
        front = path * (2.0 * (self.distance - self.depth) + path)
        self.inside = front * longer * (2.0 * self.depth + path) / (2.0 * total) ** 2
        w = 1.0 + self.tilt**2 * self.flat
        square = (self.tilt * self.lean) ** 2 / w + self.inside
        require(
            square > 0.0,
            "depth_pc",
            "that of a plane the light has reached",
            self.depth,
            cure="light from a plane farther behind the source is still on its way",
        )
        centre = -self.tilt * self.lean / w
        self.centre, self.along, self.across = np.broadcast_arrays(
            centre, np.sqrt(square / w), np.sqrt(square)
        )

    def angle_deg(self, rho: FloatArray, x: FloatArray) -> FloatArray:
        """Return the angle from the source of points at rho, x along the tilt."""
        depth = checked_depth(self.depth + self.tilt * x, self.distance)
        return np.degrees(np.arctan2(rho, self.distance - depth))
