"""Where the dust of an echo lies, with the covariance of all that is said of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import as_floats
from latelight.echo.ellipsoid import Ellipsoid
from latelight.echo.geometry import scattering_angle_deg
from latelight.echo.propagation import propagate
from latelight.records import FloatArray

__all__ = ["Place", "echo_place"]


@dataclass(frozen=True, slots=True)
class Place:
    """The dust of an echo; symbols as in :mod:`latelight.echo.geometry`.

    Parameters
    ----------
    depth_pc, source_distance_pc, observer_distance_pc : float64
        ``z``, ``r`` and ``l``, pc.
    scattering_deg : float64
        Angle by which the light was turned, degrees.
    covariance : float64, shape (4, 4, ...)
        Of these four, in this order.
    """

    depth_pc: FloatArray
    source_distance_pc: FloatArray
    observer_distance_pc: FloatArray
    scattering_deg: FloatArray
    covariance: FloatArray


def echo_place(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    covariance: ArrayLike,
) -> Place:
    """Return where the dust lies, and how the errors of that hang together.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc : array_like of float
        As for :func:`latelight.echo.geometry.depth_pc`.
    covariance : array_like of float, shape (3, 3, ...) or (3, 3)
        Of angle (degrees), age (years) and distance (pc);
        :func:`latelight.echo.propagation.independent` makes one from errors.

    Returns
    -------
    Place
        With errors to first order.

    Raises
    ------
    ValueError
        If an argument is out of its range, or less than a hundredth of its error
        within it.
    """
    given = np.array(
        np.broadcast_arrays(*(as_floats(v) for v in (theta_deg, age_yr, distance_pc)))
    )
    values, spread = propagate(_lengths_and_angle, given, covariance)
    depth, to_source, to_observer, turned = values
    return Place(depth, to_source, to_observer, turned, spread)


def _lengths_and_angle(given: FloatArray) -> tuple[FloatArray, ...]:
    e = Ellipsoid(*given)
    return e.depth, e.to_source, e.to_observer, scattering_angle_deg(*given)
