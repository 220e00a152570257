"""Polarisation of single-scattered light, and the distance that it gives.

Small grains polarise like Rayleigh scatterers: most where they turn the light by a
right angle, with the electric vector square to the direction of the source.  Where on
the sky that happens is set by the delay alone, so the ring of most polarisation gives
the distance (Sparks 1994, ApJ 433, 19).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_age,
    checked_error,
    checked_separation,
    require,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.records import FloatArray

__all__ = [
    "polarisation_degree",
    "polarisation_distance_error_pc",
    "polarisation_distance_pc",
    "scattering_angles_of_polarisation_deg",
]


def polarisation_degree(
    scattering_deg: ArrayLike, *, maximum: ArrayLike = 1.0
) -> FloatArray:
    """Return the polarised part of light turned by an angle.

    Parameters
    ----------
    scattering_deg : array_like of float
        Angle by which the light turns, degrees: 0 forward, 180 straight back.
    maximum : array_like of float
        Polarised part at a right angle, above 0 and at most 1.

    Returns
    -------
    float64
        ``maximum (1 - mu**2) / (1 + mu**2)``, ``mu`` the cosine of the angle.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    angle = as_floats(scattering_deg)
    require((angle >= 0.0) & (angle <= 180.0), "scattering_deg", "in [0, 180]", angle)
    mu = np.cos(np.radians(angle))
    return _checked_maximum(maximum) * np.sin(np.radians(angle)) ** 2 / (1.0 + mu**2)


def scattering_angles_of_polarisation_deg(
    polarisation: ArrayLike, *, maximum: ArrayLike = 1.0
) -> tuple[FloatArray, FloatArray]:
    """Return the two scattering angles of a degree of polarisation.

    Parameters
    ----------
    polarisation : array_like of float
        Polarised part, 0 to ``maximum``.
    maximum : array_like of float
        As for :func:`polarisation_degree`.

    Returns
    -------
    forward, backward : float64
        Degrees, up to 90 and from 90 on: in front of the source's plane of 90 degrees
        and behind it.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    part, most = as_floats(polarisation), _checked_maximum(maximum)
    require(
        (part >= 0.0) & (part <= most),
        "polarisation",
        "between 0 and maximum",
        part,
        cure="single scattering does not polarise more",
    )
    # cos**2 = (most - part) / (most + part); the tangent keeps digits at both ends.
    forward = np.degrees(np.arctan2(np.sqrt(2.0 * part), np.sqrt(most - part)))
    return forward, 180.0 - forward


def polarisation_distance_pc(theta_deg: ArrayLike, age_yr: ArrayLike) -> FloatArray:
    """Return the distance of a source from its ring of most polarisation.

    Parameters
    ----------
    theta_deg : array_like of float
        Radius of the ring of most polarisation, degrees, 0 < theta < 90.
    age_yr : array_like of float
        Delay after the direct light, Julian years, positive.

    Returns
    -------
    float64
        ``c t / (sin(theta) + cos(theta) - 1)``, pc; ``c t / theta`` for small angles.

    Raises
    ------
    ValueError
        If an argument is out of its range.

    Notes
    -----
    Exact: with a right angle at the dust ``r = D sin(theta)`` and
    ``l = D cos(theta)``.
    """
    path = checked_age(age_yr) * LIGHT_PC_PER_YEAR
    return path / _excess(checked_separation(theta_deg))


def polarisation_distance_error_pc(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    *,
    theta_err_deg: ArrayLike = 0.0,
    age_err_yr: ArrayLike = 0.0,
) -> FloatArray:
    """Return the error of :func:`polarisation_distance_pc`, pc, to first order.

    ``theta_err_deg`` and ``age_err_yr`` are independent 1-sigma errors; other
    arguments and errors as there.
    """
    distance = polarisation_distance_pc(theta_deg, age_yr)
    theta = checked_separation(theta_deg)
    by_angle = (np.cos(theta) - np.sin(theta)) / _excess(theta)
    return distance * np.hypot(
        by_angle * np.radians(checked_error(theta_err_deg, "theta_err_deg")),
        checked_error(age_err_yr, "age_err_yr") / checked_age(age_yr),
    )


def _excess(theta: FloatArray) -> FloatArray:
    """Return sin + cos - 1 without its cancellation."""
    return np.sin(theta) - 2.0 * np.sin(theta / 2.0) ** 2


def _checked_maximum(maximum: ArrayLike) -> FloatArray:
    most = as_floats(maximum)
    require((most > 0.0) & (most <= 1.0), "maximum", "above 0 and at most 1", most)
    return most
