"""What is known of an echo's way before it is seen, and what follows from places.

The place at epoch i is ``u + v t_i + d(v t_i) + g_i``: even motion; hills of the
dust sheet, which carry the front ahead or behind, a Gaussian process along the way
with a squared-exponential covariance; and patchy dust, which pulls each epoch's
ridge by a part of its width, independently once the echo has moved by a width.
Start and speed are free.  Predictions are those of universal kriging (Matheron
1963, Econ. Geol. 58, 1246; Rasmussen & Williams 2006, eq. 2.41-2.42, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.records import FloatArray

__all__ = ["PathLaw"]

# Hundredths of a pixel: keeps matrices regular where nothing else is uncertain.
_LEAST_PULL_PX = 0.005


@dataclass(frozen=True, slots=True)
class PathLaw:
    """How the places of a ridge at the epochs hang together.

    Attributes
    ----------
    times : float64 array, shape (n,)
        Julian years.
    speed : float
        Rough speed, pixels per year, which turns times into distances.
    pull : float
        1 sigma by which patchy dust pulls a ridge, pixels.
    width : float
        Full width of the ridge, pixels: over such a distance the pull changes.
    roll, roll_length : float
        1 sigma of the hills, and over which distance they change, pixels.
    """

    times: FloatArray
    speed: float
    pull: float
    width: float
    roll: float
    roll_length: float

    def _between(self, one: FloatArray, other: FloatArray, length: float) -> FloatArray:
        distance = self.speed * np.subtract.outer(one, other)
        return np.exp(-0.5 * (distance / length) ** 2)

    def _rolls(self, one: FloatArray, other: FloatArray) -> FloatArray:
        return self.roll**2 * self._between(one, other, self.roll_length)

    def covariance(self) -> FloatArray:
        """Return the covariance of the places about even motion, shape (n, n)."""
        pulls = self.pull**2 * self._between(self.times, self.times, self.width)
        ground = _LEAST_PULL_PX**2 * np.eye(self.times.size)
        return self._rolls(self.times, self.times) + pulls + ground

    def precision(self, noise: FloatArray | float = 0.0) -> FloatArray:
        """Return the inverse covariance, start and speed left free, shape (n, n).

        Parameters
        ----------
        noise : float64 array, shape (n,)
            Variance of measured places that comes on top, pixels squared.
        """
        inverse = np.linalg.inv(self.covariance() + np.diag(noise + 0.0 * self.times))
        even = _even(self.times)
        taken = inverse @ even
        out = inverse - taken @ np.linalg.solve(even.T @ taken, taken.T)
        return 0.5 * (out + out.T)

    def predict(self, times: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return how the undisturbed way follows from the places.

        Parameters
        ----------
        times : float64 array, shape (k,)
            When, Julian years.

        Returns
        -------
        weights : float64 array, shape (k, n)
            The way at ``times`` is ``weights @ places``.
        covariance : float64 array, shape (k, k)
            What it is uncertain by when the places are exactly known.
        """
        inverse = np.linalg.inv(self.covariance())
        even, there = _even(self.times), _even(times)
        link = self._rolls(times, self.times) @ inverse
        taken = inverse @ even
        normal = np.linalg.inv(even.T @ taken)
        rest = there - link @ even
        weights = link + rest @ normal @ taken.T
        covariance = (
            self._rolls(times, times)
            - link @ self._rolls(self.times, times)
            + rest @ normal @ rest.T
        )
        return weights, covariance


def _even(times: FloatArray) -> FloatArray:
    """Return the design of even motion, shape (n, 2)."""
    return np.column_stack([np.ones_like(times), times])
