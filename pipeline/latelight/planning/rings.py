"""Where on the sky the echo of a layer of dust lies: exactly a circle.

A plane layer at depth ``z0`` on the line from source to observer, with a slope ``s``
towards a position angle, is ``z = z0 + s x`` with x the distance across the line
towards that angle.  A point of the ellipsoid in the direction theta from the source,
at the angle phi from that position angle, is ``l`` from the observer, with
``l = P / (2 (D + c t - D cos(theta)))``, ``P = c t (2 D + c t)``,
``z = D - l cos(theta)`` and ``x = l sin(theta) cos(phi)``.  Put into the plane::

    A cos(theta) + B sin(theta) cos(phi) = C
    A = P + 2 D (D - z0),  B = P s,  C = 2 (D - z0) (D + c t)

which is linear in the unit vector of the direction: a small circle of the sphere,
with its centre ``atan(B / A)`` from the source towards the slope and the radius
``acos(C / sqrt(A**2 + B**2))``.  So the echo of a plane is a circle whatever the angles
(derived here; the small-angle form, a circle about ``c t s`` from the source, is in
Tylenda 2004, A&A 414, 223, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.propagation import independent, propagate
from latelight.records import FloatArray
from latelight.sky import offset_position

__all__ = ["Layer", "Ring", "layer_depth_pc", "ring_of"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Layer:
    """A plane layer of dust.

    Attributes
    ----------
    name : str
        Its name.
    depth_pc : float or None
        On the line from source to observer, pc from the source, positive towards the
        observer.
    distance_pc : float or None
        From the observer instead, pc.
    thickness_pc : float
        FWHM along the line of sight, pc.
    slope : float
        Tangent of the tilt, >= 0.
    slope_pa : float
        Position angle towards which it comes nearer to the observer, degrees.
    """

    name: str
    depth_pc: float | None
    distance_pc: float | None
    thickness_pc: float
    slope: float = 0.0
    slope_pa: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Ring:
    """A circle on the sky.

    Attributes
    ----------
    ra, dec : float
        Its centre, degrees, ICRS.
    shift_deg : float
        From the source to the centre, degrees.
    radius_deg, radius_err_deg : float
        Radius, and 1 sigma from the errors of age and distance, degrees.
    inner_deg, outer_deg : float
        Radii of the far and near faces of the layer, half its thickness from the
        middle, degrees; 0 for a far face whose light is still on its way.
    """

    ra: float
    dec: float
    shift_deg: float
    radius_deg: float
    radius_err_deg: float
    inner_deg: float
    outer_deg: float


def layer_depth_pc(layer: Layer, distance_pc: float) -> float:
    """Return the depth of a layer for a source at a distance, pc."""
    if layer.depth_pc is not None:
        return layer.depth_pc
    assert layer.distance_pc is not None  # one of the two is always given
    return distance_pc - layer.distance_pc


def ring_of(
    layer: Layer,
    *,
    ra: float,
    dec: float,
    age_yr: float,
    distance_pc: float,
    age_err_yr: float = 0.0,
    distance_err_pc: float = 0.0,
) -> Ring:
    """Return the circle on which a layer echoes a source.

    Parameters
    ----------
    layer : Layer
        The dust.
    ra, dec : float
        Of the source, degrees, ICRS.
    age_yr, age_err_yr : float
        Julian years since its light arrived, positive, and 1 sigma.
    distance_pc, distance_err_pc : float
        Its distance, positive, and 1 sigma, pc.

    Raises
    ------
    ValueError
        If the age or distance is not positive, the dust lies at or behind the
        observer, or so far behind the source that no light has returned from it.
    """

    def shift_and_radius(values: FloatArray) -> tuple[float, float]:
        age, distance = (float(v) for v in values)
        return _circle(layer, layer_depth_pc(layer, distance), age, distance)

    errors = independent(age_err_yr, distance_err_pc)
    depth = layer_depth_pc(layer, distance_pc)
    half = 0.5 * layer.thickness_pc
    shift, radius = _circle(layer, depth, age_yr, distance_pc)
    faces = []
    for face in (depth - half, depth + half):
        try:
            faces.append(_circle(layer, face, age_yr, distance_pc)[1])
        except ValueError:
            faces.append(0.0 if face < depth else 90.0)
    _, covariance = propagate(shift_and_radius, np.array([age_yr, distance_pc]), errors)
    centre = offset_position(ra, dec, layer.slope_pa, shift)
    return Ring(
        ra=float(centre[0]),
        dec=float(centre[1]),
        shift_deg=shift,
        radius_deg=radius,
        radius_err_deg=float(np.sqrt(covariance[1, 1])),
        inner_deg=faces[0],
        outer_deg=faces[1],
    )


def _circle(
    layer: Layer, depth: float, age_yr: float, distance: float
) -> tuple[float, float]:
    """Return the shift of the centre and the radius, degrees."""
    if not (age_yr > 0.0 and distance > 0.0):
        msg = f"age and distance must be positive, got {age_yr:g} yr, {distance:g} pc"
        raise ValueError(msg)
    path = age_yr * LIGHT_PC_PER_YEAR
    to_observer = distance - depth
    if not to_observer > 0.0:
        msg = (
            f"layer {layer.name!r} must lie in front of the observer, got a depth of "
            f"{depth:g} pc for a source at {distance:g} pc; give a smaller depth_pc"
        )
        raise ValueError(msg)
    reach = path * (2.0 * distance + path)
    along = reach + 2.0 * distance * to_observer
    across = reach * layer.slope
    least = 2.0 * to_observer * (distance + path)
    # acos(C / H) as an arc tangent, without losing the digits of small circles:
    # A - C = (c t) (c t + 2 z0), and A + C is no difference.
    square = path * (path + 2.0 * depth) * (along + least) + across**2
    if square < 0.0:
        msg = (
            f"layer {layer.name!r} must lie at most {0.5 * path:.4g} pc behind the "
            f"source (half the light path of its age), got {-depth:.4g} pc; its echo "
            "is still on its way"
        )
        raise ValueError(msg)
    radius = np.arctan2(np.sqrt(square), least)
    return float(np.degrees(np.arctan2(across, along))), float(np.degrees(radius))
