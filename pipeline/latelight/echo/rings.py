"""Expanding rings of X-rays scattered by thin layers of dust in front of a source.

The small-angle form of the ellipsoid for light paths much shorter than all distances::

    theta**2 = 2 c t (D - d) / (d D)

with ``D`` the distance of the source and ``d`` that of the dust, BOTH FROM THE
OBSERVER (Trümper & Schönfelder 1973, A&A 25, 445, from memory; Vaughan et al. 2004,
ApJ 603, L5).  A source at infinity has ``theta = sqrt(2 c t / d)``.  Rings are wide by
minutes of arc and days old: the exact form differs by about ``c t / d``, 1e-4 and less.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_error,
    checked_positive,
    require,
)
from latelight.echo.constants import (
    ARCSEC_PER_RADIAN,
    METRES_PER_PARSEC,
    METRES_PER_SECOND,
)
from latelight.records import FloatArray

__all__ = [
    "ring_angle_arcsec",
    "ring_apparent_speed",
    "ring_delay_s",
    "ring_dust_distance_error_pc",
    "ring_dust_distance_pc",
    "ring_growth_arcsec_s",
]

LIGHT_PC_PER_SECOND = METRES_PER_SECOND / METRES_PER_PARSEC


def ring_angle_arcsec(
    dust_distance_pc: ArrayLike,
    delay_s: ArrayLike,
    *,
    source_distance_pc: ArrayLike = np.inf,
) -> FloatArray:
    """Return the radius of the ring of a layer of dust.

    Parameters
    ----------
    dust_distance_pc : array_like of float
        Distance of the dust from the observer, pc, positive and less than that of
        the source.
    delay_s : array_like of float
        Time since the direct light arrived, seconds, positive.
    source_distance_pc : array_like of float
        Distance of the source, pc; infinite for one far behind all dust.

    Returns
    -------
    float64
        Arcsec.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    delay = _checked_delay(delay_s)
    per_length = _per_length(dust_distance_pc, source_distance_pc)
    return ARCSEC_PER_RADIAN * np.sqrt(2.0 * LIGHT_PC_PER_SECOND * delay * per_length)


def ring_dust_distance_pc(
    theta_arcsec: ArrayLike,
    delay_s: ArrayLike,
    *,
    source_distance_pc: ArrayLike = np.inf,
) -> FloatArray:
    """Return the distance from the observer of the dust that makes a ring.

    The inverse of :func:`ring_angle_arcsec`: ``X D / (D + X)`` with ``X = 2 c t /
    theta**2`` the distance for a source at infinity.

    Parameters
    ----------
    theta_arcsec : array_like of float
        Radius of the ring, arcsec, positive.
    delay_s, source_distance_pc : array_like of float
        As for :func:`ring_angle_arcsec`.

    Returns
    -------
    float64
        pc.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    theta = _checked_radius(theta_arcsec)
    beyond = 2.0 * LIGHT_PC_PER_SECOND * _checked_delay(delay_s) / theta**2
    return beyond / (1.0 + beyond / _checked_source(source_distance_pc))


def ring_dust_distance_error_pc(
    theta_arcsec: ArrayLike,
    delay_s: ArrayLike,
    *,
    source_distance_pc: ArrayLike = np.inf,
    theta_err_arcsec: ArrayLike = 0.0,
    delay_err_s: ArrayLike = 0.0,
    source_distance_err_pc: ArrayLike = 0.0,
) -> FloatArray:
    """Return the error of :func:`ring_dust_distance_pc`, to first order.

    Parameters
    ----------
    theta_arcsec, delay_s, source_distance_pc : array_like of float
        As for :func:`ring_dust_distance_pc`.
    theta_err_arcsec, delay_err_s, source_distance_err_pc : array_like of float
        Their independent 1-sigma errors, in the same units.

    Returns
    -------
    float64
        1 sigma, pc.

    Raises
    ------
    ValueError
        If an argument is out of its range.

    Notes
    -----
    ``1/d = 1/X + 1/D``, so ``dd = d**2 (dX / X**2 + dD / D**2)`` and
    ``dX / X = dt / t - 2 dtheta / theta``.
    """
    distance = ring_dust_distance_pc(
        theta_arcsec, delay_s, source_distance_pc=source_distance_pc
    )
    of_theta = checked_error(theta_err_arcsec, "theta_err_arcsec")
    of_delay = checked_error(delay_err_s, "delay_err_s")
    of_source = checked_error(source_distance_err_pc, "source_distance_err_pc")
    source = _checked_source(source_distance_pc)
    share = distance / source  # d / D
    parts = (
        (1.0 - share) * 2.0 * of_theta / as_floats(theta_arcsec),
        (1.0 - share) * of_delay / as_floats(delay_s),
        share * of_source / source,
    )
    return distance * np.sqrt(sum(part**2 for part in parts))


def ring_growth_arcsec_s(theta_arcsec: ArrayLike, delay_s: ArrayLike) -> FloatArray:
    """Return how fast a ring grows: ``theta / (2 t)``, arcsec per second.

    Arguments and errors as for :func:`ring_dust_distance_pc`.
    """
    return (
        ARCSEC_PER_RADIAN
        * _checked_radius(theta_arcsec)
        / (2.0 * _checked_delay(delay_s))
    )


def ring_apparent_speed(
    dust_distance_pc: ArrayLike,
    delay_s: ArrayLike,
    *,
    source_distance_pc: ArrayLike = np.inf,
) -> FloatArray:
    """Return how fast a ring seems to sweep its dust, in units of light's speed.

    ``d theta / (2 c t)``; arguments and errors as for :func:`ring_angle_arcsec`.
    """
    per_length = _per_length(dust_distance_pc, source_distance_pc)
    path = LIGHT_PC_PER_SECOND * _checked_delay(delay_s)
    return as_floats(dust_distance_pc) * np.sqrt(per_length / (2.0 * path))


def ring_delay_s(
    theta_arcsec: ArrayLike,
    dust_distance_pc: ArrayLike,
    *,
    source_distance_pc: ArrayLike = np.inf,
) -> FloatArray:
    """Return the delay of one element of a halo, seconds.

    ``x D theta**2 / (2 c (1 - x))`` with ``x = d / D``; arguments and errors as for
    :func:`ring_angle_arcsec` and :func:`ring_dust_distance_pc`.
    """
    per_length = _per_length(dust_distance_pc, source_distance_pc)
    return _checked_radius(theta_arcsec) ** 2 / (2.0 * LIGHT_PC_PER_SECOND * per_length)


def _per_length(
    dust_distance_pc: ArrayLike, source_distance_pc: ArrayLike
) -> FloatArray:
    """Return (D - d) / (d D), per pc."""
    dust = checked_positive(dust_distance_pc, "dust_distance_pc")
    source = _checked_source(source_distance_pc)
    require(
        dust < source,
        "dust_distance_pc",
        "less than source_distance_pc",
        dust,
        cure="rings come from dust between source and observer",
    )
    return (1.0 - dust / source) / dust


def _checked_source(source_distance_pc: ArrayLike) -> FloatArray:
    source = as_floats(source_distance_pc)
    require(
        source > 0.0,
        "source_distance_pc",
        "positive",
        source,
        cure="leave it out for a source far behind the dust",
    )
    return source


def _checked_delay(delay_s: ArrayLike) -> FloatArray:
    return checked_positive(
        delay_s, "delay_s", cure="give the seconds since the direct light arrived"
    )


def _checked_radius(theta_arcsec: ArrayLike) -> FloatArray:
    """Return radii in radians."""
    radius = checked_positive(
        theta_arcsec, "theta_arcsec", cure="a ring of no radius has no dust distance"
    )
    return radius / ARCSEC_PER_RADIAN
