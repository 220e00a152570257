"""Echoes of a periodic source: the lag of a knot, and what it leaves open.

A knot of dust repeats the source's light curve later.  Its lag is known but for
whole periods, so each number of cycles gives another depth, or another distance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_positive,
    checked_separation,
    require,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.ellipsoid import Ellipsoid
from latelight.echo.geometry import delay_yr
from latelight.records import FloatArray, IntArray

__all__ = ["KnotPlaces", "knot_distances_pc", "knot_phase", "knot_places"]


@dataclass(frozen=True, slots=True)
class KnotPlaces:
    """Where a knot may lie, one place for each number of whole cycles.

    Parameters
    ----------
    cycles : int64, shape (n,)
        Whole periods in the lag.
    delay_yr : float64, shape (n,)
        The lag, Julian years.
    depth_pc : float64, shape (n,)
        Depth, pc from the source, positive towards the observer.
    observer_distance_pc : float64, shape (n,)
        Distance of the knot from the observer, pc.
    """

    cycles: IntArray
    delay_yr: FloatArray
    depth_pc: FloatArray
    observer_distance_pc: FloatArray


def knot_phase(
    theta_deg: ArrayLike,
    depth_pc: ArrayLike,
    distance_pc: ArrayLike,
    *,
    period_yr: ArrayLike,
) -> FloatArray:
    """Return by how much of a period a knot lags behind the source, 0 to 1.

    Parameters
    ----------
    theta_deg, depth_pc, distance_pc : array_like of float
        As for :func:`latelight.echo.geometry.delay_yr`.
    period_yr : array_like of float
        Period of the source, Julian years, positive.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    period = checked_positive(period_yr, "period_yr")
    return (delay_yr(theta_deg, depth_pc, distance_pc) / period) % 1.0


def knot_places(
    theta_deg: float,
    distance_pc: float,
    *,
    phase: float,
    period_yr: float,
    cycles: ArrayLike,
) -> KnotPlaces:
    """Return the depths a knot may have, for each number of whole cycles.

    Parameters
    ----------
    theta_deg : float
        Angle between source and knot, degrees, 0 < theta < 90.
    distance_pc : float
        Distance of the source, pc, positive.
    phase : float
        Lag in periods, 0 <= phase < 1.
    period_yr : float
        Period of the source, Julian years, positive.
    cycles : array_like of int, shape (n,)
        Whole cycles to list, zero or more; with phase 0 from 1 on.

    Returns
    -------
    KnotPlaces
        Exact.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    whole, lag = _lags(phase, period_yr, cycles)
    checked_separation(theta_deg)
    e = Ellipsoid(theta_deg, lag, distance_pc)
    return KnotPlaces(whole, lag, e.depth, e.to_observer)


def knot_distances_pc(
    theta_deg: float, *, phase: float, period_yr: float, cycles: ArrayLike
) -> FloatArray:
    """Return the distances of a source whose knot lies beside it (depth 0).

    ``c (n + phase) P / (tan(theta) + 1 / cos(theta) - 1)``, pc, shape (n,);
    arguments and errors as for :func:`knot_places`.
    """
    _, lag = _lags(phase, period_yr, cycles)
    theta = checked_separation(theta_deg)
    excess = np.tan(theta) + 2.0 * np.sin(theta / 2.0) ** 2 / np.cos(theta)
    return LIGHT_PC_PER_YEAR * lag / excess


def _lags(
    phase: float, period_yr: float, cycles: ArrayLike
) -> tuple[IntArray, FloatArray]:
    """Return the whole cycles and the lags, years."""
    part = as_floats(phase)
    require((part >= 0.0) & (part < 1.0), "phase", "in [0, 1)", part)
    whole = np.atleast_1d(np.asarray(cycles, dtype=np.int64))
    require(
        whole + part > 0.0,
        "cycles",
        "zero or more, and from 1 on at phase 0",
        whole,
        cure="an echo cannot arrive before the direct light",
    )
    return whole, (whole + part) * checked_positive(period_yr, "period_yr")
