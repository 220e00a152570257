"""The point of the delay ellipsoid in one direction: what its formulas share."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import checked_age, checked_angle, checked_distance
from latelight.echo.constants import LIGHT_PC_PER_YEAR

__all__ = ["Ellipsoid"]


class Ellipsoid:
    """The point of the ellipsoid in one direction, lengths in pc.

    With ``tau = c t`` and ``B = D (1 - cos(theta)) + tau``::

        l = tau (2 D + tau) / (2 B)
        r = (2 D (D + tau) (1 - cos(theta)) + tau**2) / (2 B)
        z = (2 D (D + tau) (1 - cos(theta)) - tau**2 cos(theta)) / (2 B)

    from ``l = D + tau - r``, the law of cosines and ``z = D - l cos(theta)``.
    Symbols as in :mod:`latelight.echo.geometry`.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc : array_like of float
        Angle between source and dust, 0 <= theta < 90 degrees; delay, Julian years,
        and distance, pc, both positive.

    Raises
    ------
    ValueError
        If an argument is out of its range.
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
