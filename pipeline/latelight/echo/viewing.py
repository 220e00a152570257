"""From which side the dust saw the outburst.

An outburst need not look alike from all sides, and each echo shows it as the dust saw
it: spectra of echoes in several directions are views of one event around it.

Directions are unit vectors at the source in the frame (east, north, towards the
observer): the way the light left the source for the dust.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import checked_finite
from latelight.echo.ellipsoid import Ellipsoid
from latelight.records import FloatArray

__all__ = ["ViewingDirection", "angle_between_deg", "viewing_direction"]


@dataclass(frozen=True, slots=True)
class ViewingDirection:
    """The direction from the source to the dust that saw it.

    Parameters
    ----------
    east, north, towards : float64
        Unit vector; ``towards`` the observer is 1 for a view like our own and -1
        for one from behind.
    position_angle_deg : float64
        Direction on the sky, degrees east of north, 0-360.
    inclination_deg : float64
        Angle from the line source-observer, 0 for a view like our own, 180 for one
        from behind.
    """

    east: FloatArray
    north: FloatArray
    towards: FloatArray
    position_angle_deg: FloatArray
    inclination_deg: FloatArray


def viewing_direction(
    theta_deg: ArrayLike,
    position_angle_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
) -> ViewingDirection:
    """Return from which side the dust of an echo saw the outburst.

    Parameters
    ----------
    theta_deg : array_like of float
        Angle between source and dust, degrees, 0 <= theta < 90.
    position_angle_deg : array_like of float
        Position angle of the dust as seen from the source, degrees east of north.
    age_yr : array_like of float
        Delay after the direct light, Julian years, positive.
    distance_pc : array_like of float
        Distance of the source, pc, positive.

    Returns
    -------
    ViewingDirection
        Exact; the arguments broadcast.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    angle = checked_finite(position_angle_deg, "position_angle_deg")
    inclination = np.arctan2(e.to_observer * e.sin, e.depth)
    inclination, turned = np.broadcast_arrays(inclination, np.radians(angle))
    across = np.sin(inclination)
    return ViewingDirection(
        east=across * np.sin(turned),
        north=across * np.cos(turned),
        towards=np.cos(inclination),
        position_angle_deg=np.degrees(turned) % 360.0,
        inclination_deg=np.degrees(inclination),
    )


def angle_between_deg(first: ViewingDirection, second: ViewingDirection) -> FloatArray:
    """Return the angle between the views of two echoes of one event, degrees.

    From the half-chords, so that neighbouring and opposite views keep their digits.
    """
    a, b = (np.array([v.east, v.north, v.towards]) for v in (first, second))
    apart = np.sqrt(((a.T - b.T) ** 2).sum(axis=-1)).T
    along = np.sqrt(((a.T + b.T) ** 2).sum(axis=-1)).T
    return np.degrees(2.0 * np.arctan2(apart, along))
