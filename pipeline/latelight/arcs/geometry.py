"""The circle an arc lies on, and coordinates along and across it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.records import ArcTrace, FloatArray

__all__ = ["Circle"]


@dataclass(frozen=True, slots=True)
class Circle:
    """A circle (or line) through a point, with a normal.

    Coordinates: ``s`` pixels along, 90 degrees ahead of the normal; ``u`` pixels
    across, along the normal; both zero at the point.

    Attributes
    ----------
    x, y : float
        The point, pixels.
    angle : float
        Pixel angle of the normal, radians.
    curvature : float
        1 / radius, 1/pixel; positive when the centre lies on the normal's side.
    """

    x: float
    y: float
    angle: float
    curvature: float

    def point(self, s: ArrayLike, u: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Return pixel coordinates of places along and across."""
        s, u = np.asarray(s, dtype=float), np.asarray(u, dtype=float)
        turn = self.curvature * s
        left = 1.0 - self.curvature * u
        # sin(cs)/c and (1 - cos(cs))/c without dividing by a vanishing c
        forward = left * s * np.sinc(turn / np.pi)
        inward = u + left * 0.5 * self.curvature * s**2 * (
            np.sinc(0.5 * turn / np.pi) ** 2
        )
        cosine, sine = np.cos(self.angle), np.sin(self.angle)
        return (
            self.x + inward * cosine - forward * sine,
            self.y + inward * sine + forward * cosine,
        )

    def coordinates(self, x: ArrayLike, y: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Return (s, u) of pixel coordinates; the inverse of :meth:`point`."""
        dx = np.asarray(x, dtype=float) - self.x
        dy = np.asarray(y, dtype=float) - self.y
        cosine, sine = np.cos(self.angle), np.sin(self.angle)
        across, along = dx * cosine + dy * sine, dy * cosine - dx * sine
        c = self.curvature
        left = 1.0 - c * across
        root = np.hypot(left, c * along)
        u = (2.0 * across - c * (across**2 + along**2)) / (1.0 + root)
        if abs(c) < 1e-9:
            return along, u
        return np.arctan2(c * along, left) / c, u

    def moved(self, s: float, u: float) -> Circle:
        """Return the concentric circle through the place (s, u)."""
        x, y = self.point(s, u)
        return Circle(
            float(x),
            float(y),
            self.angle - self.curvature * s,
            self.curvature / (1.0 - self.curvature * u),
        )

    def bent(self, slope: float, bend: float) -> Circle:
        """Return the circle along ``u = slope s + bend s^2 / 2``."""
        return Circle(
            self.x, self.y, self.angle - np.arctan(slope), self.curvature + bend
        )

    def flipped(self) -> Circle:
        """Return the same circle with the opposite normal."""
        return Circle(self.x, self.y, self.angle + np.pi, -self.curvature)

    def normalised(self) -> Circle:
        """Return the same circle with its angle between 0 and 2 pi."""
        return Circle(self.x, self.y, float(self.angle % (2.0 * np.pi)), self.curvature)

    def trace(self, first: float, last: float) -> ArcTrace:
        """Return the line from ``s = first`` to ``last`` in steps of a pixel."""
        n = max(round(last - first) + 1, 2)
        s = np.linspace(first, last, n)
        x, y = self.point(s, np.zeros(n))
        return ArcTrace(x, y, np.degrees(self.angle - self.curvature * s))
