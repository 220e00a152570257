"""The model of a moving ridge: a front of light that sweeps over patchy dust.

At epoch i, offset u and distance s along the arc the brightness is

    rho(u, s) h_i(u - c_i(s)),  c_i(s) = x_i + slope s + bend s**2 / 2 + fan (x_i - x) s

with the lobe h_i of one shape (the outburst's light laid out in space, blurred by
the epoch's seeing) and dust rho that stays where it is.  Dust that is denser on one
side pulls the brightest line there; as all epochs light the same dust where they
overlap, and neighbouring dust elsewhere, the fit knows by how much.  Seeing blurs
after the dust has been lit: what is seen at u comes on average from
``c + f (u - c)``, f being the share of the PSF-free variance (exact for Gaussians).

The fan is a speed that changes along the arc, so that the ridge turns as it moves.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from latelight.motion.tracks._kernels import lit_knots, lit_ridge
from latelight.motion.tracks.lobe import Lobe
from latelight.motion.tracks.strips import StripSums
from latelight.records import FloatArray

__all__ = ["Dust", "Ridge", "Templates"]

# Their first arguments come as one tuple, which their own types cannot say.
_lit_knots: Callable[..., FloatArray] = lit_knots
_lit_ridge: Callable[..., FloatArray] = lit_ridge

_STEP_PX = 0.2
_SHAPE_STEP = 0.02
_MOST_SKEW = 1.5
_LEAST_SHARE = 0.05


@dataclass(frozen=True, slots=True)
class Ridge:
    """Place, shape and course of a ridge.

    Attributes
    ----------
    places : float64 array, shape (n,)
        x_i, pixels along the motion, on the middle of the trace.
    lobe : Lobe
        h_i.
    turn : float64 array, shape (3,)
        Slope, bend (1/pixel) and fan (1/pixel).
    """

    places: FloatArray
    lobe: Lobe
    turn: FloatArray

    def moved(self, step: FloatArray) -> Ridge:
        """Return the ridge changed by a step in all its n + 5 numbers."""
        n = self.places.size
        size, skew = step[n : n + 2]
        lobe = replace(
            self.lobe,
            log_size=self.lobe.log_size + float(size),
            skew=float(np.clip(self.lobe.skew + skew, 0.0, _MOST_SKEW)),
        )
        return Ridge(self.places + step[:n], lobe, self.turn + step[n + 2 :])

    def levers(self, along: FloatArray) -> FloatArray:
        """Return d(c_i)/d(turn), shape (b, 3, n)."""
        s = along[:, None]
        apart = self.places - self.places.mean()
        one = np.ones_like(apart)
        return np.stack([s * one, 0.5 * s**2 * one, s * apart], axis=1)

    def centres(self, along: FloatArray) -> FloatArray:
        """Return c_i, shape (b, n)."""
        return self.places + np.einsum("bkn,k->bn", self.levers(along), self.turn)


@dataclass(frozen=True, slots=True)
class Dust:
    """Knots of the dust along the motion, and what is known of it beforehand.

    Attributes
    ----------
    knots : float64 array, shape (k,)
        Evenly spaced offsets, pixels; linear in between.
    precision : float64 array, shape (k, k)
        Inverse covariance of the dust at the knots of one bin, of mean density 1.
    """

    knots: FloatArray
    precision: FloatArray

    @classmethod
    def between(
        cls, lowest: float, highest: float, *, contrast: float, length: float
    ) -> Dust:
        """Return knots between two offsets.

        Parameters
        ----------
        lowest, highest : float
            Pixels along the motion.
        contrast : float
            Scatter of the density along the motion, over its mean.
        length : float
            Distance over which it changes, pixels.
        """
        spacing = 0.5 * length
        knots = np.arange(lowest, highest + spacing, spacing)
        apart = np.subtract.outer(knots, knots) / length
        alike = np.exp(-0.5 * apart**2)
        # The bin's own level is free: some have light, others none.
        covariance = 1.0 + contrast**2 * (alike + 1e-3 * np.eye(knots.size))
        return cls(knots, np.linalg.inv(covariance))


class Templates:
    """A ridge on the samples of strips, and its derivatives."""

    def __init__(self, sums: StripSums, ridge: Ridge, dust: Dust) -> None:
        self._sums, self._ridge, self._dust = sums, ridge, dust
        self._centres = ridge.centres(sums.along)

    def of_knots(self) -> FloatArray:
        """Return the ridge on dust of density 1 at one knot, shape (b, m, n, k)."""
        knots = self._dust.knots
        return _lit_knots(
            *self._swept(self._ridge.lobe, 0.0),
            float(knots[0]),
            float(knots[1] - knots[0]),
            knots.size,
        )

    def _lit(self, density: FloatArray, lobe: Lobe, shift: float = 0.0) -> FloatArray:
        """Return the brightness, shape (b, m, n)."""
        knots = self._dust.knots
        spacing = float(knots[1] - knots[0])
        return _lit_ridge(*self._swept(lobe, shift), float(knots[0]), spacing, density)

    def _swept(self, lobe: Lobe, shift: float) -> tuple[Any, ...]:
        """Return what the kernels want to know of a ridge."""
        share = np.maximum(1.0 - (lobe.psf / lobe.spread) ** 2, _LEAST_SHARE)
        centres = self._centres + shift
        blurred = lobe.blurred
        offsets = self._sums.offsets
        return offsets, centres, blurred, share, lobe.tail, lobe.front, lobe.scale

    def brightness(self, density: FloatArray, shift: float = 0.0) -> FloatArray:
        """Return the model, moved on by some pixels, shape (b, m, n).

        Parameters
        ----------
        density : float64 array, shape (b, k)
            Dust at the knots.
        """
        return self._lit(density, self._ridge.lobe, shift)

    def derivatives(self, density: FloatArray) -> FloatArray:
        """Return the model's derivatives by the n + 5 numbers of the ridge.

        Returns
        -------
        float64 array, shape (b, m, n, n + 5)
        """
        lobe, n = self._ridge.lobe, self._ridge.places.size
        steep = self._lit(density, lobe, _STEP_PX) - self._lit(density, lobe, -_STEP_PX)
        steep /= 2.0 * _STEP_PX
        out = np.zeros((*steep.shape, n + 5))
        out[..., np.arange(n), np.arange(n)] = steep
        low = max(lobe.skew - _SHAPE_STEP, 0.0)
        high = low + 2.0 * _SHAPE_STEP
        pairs = (
            (
                replace(lobe, log_size=lobe.log_size + _SHAPE_STEP),
                replace(lobe, log_size=lobe.log_size - _SHAPE_STEP),
            ),
            (replace(lobe, skew=high), replace(lobe, skew=low)),
        )
        for column, (more, less) in enumerate(pairs):
            change = self._lit(density, more) - self._lit(density, less)
            out[..., n + column] = change / (2.0 * _SHAPE_STEP)
        levers = self._ridge.levers(self._sums.along)
        out[..., n + 2 :] = steep[..., None] * levers.transpose(0, 2, 1)[:, None]
        return out
