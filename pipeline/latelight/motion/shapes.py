"""The profile of one lobe: a sharp front and a slow tail.

An echo's profile is the outburst's light curve laid out in space, fast rise in
front and slow decay behind, smeared by the PSF and the depth of the dust: an
exponentially modified Gaussian, a Gaussian of sigma s convolved with an
exponential of scale t (Grushka 1972, doi:10.1021/ac60319a011, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import erfcx

from latelight.records import FloatArray

__all__ = [
    "TABLE_START",
    "TABLE_STEP",
    "TAILS",
    "StandardShape",
    "modified_gaussian",
    "standard_shape",
    "tables",
]

TAILS = (0.0, 0.6, 1.2, 2.2, 4.0, 8.0)
"""Exponential scale over Gaussian sigma; neighbours overlap to 99 %."""

TABLE_STEP = 0.01
TABLE_START = -9.0
"""Grid of the standard shapes, in units of the full width at half maximum."""

_FRONT = 3.0
_NEGLIGIBLE = 1e-4


@dataclass(frozen=True, slots=True)
class StandardShape:
    """A lobe of full width 1 and peak 1 at 0 that moves towards +x.

    Attributes
    ----------
    x, height : float64 array, shape (n,)
        The profile, evenly sampled, zero outside.
    sigma : float
        Its Gaussian's sigma, in units of the full width at half maximum.
    """

    x: FloatArray
    height: FloatArray
    sigma: float

    def at(self, offset: FloatArray, width: ArrayLike, sense: int) -> FloatArray:
        """Return heights at offsets from the peak.

        Parameters
        ----------
        offset : float64 array
            Pixels.
        width : array_like of float
            Full width at half maximum, pixels; broadcasts with ``offset``.
        sense : {1, -1}
            Which way the lobe moves: its tail points the other way.
        """
        scaled = sense * offset / np.asarray(width)
        return np.interp(scaled, self.x, self.height, left=0.0, right=0.0)


def modified_gaussian(x: FloatArray, sigma: float, tail: float) -> FloatArray:
    """Return the unit-area exponentially modified Gaussian, tail towards -x.

    Parameters
    ----------
    x : float64 array
        Distance from the Gaussian's centre.
    sigma : float
        Sigma of the Gaussian, positive.
    tail : float
        Scale of the exponential, >= 0; 0 gives the Gaussian.

    Returns
    -------
    float64 array
        Its mean is ``-tail`` and its variance ``sigma**2 + tail**2``.
    """
    gauss = np.exp(-0.5 * (x / sigma) ** 2)
    if tail == 0.0:
        return gauss / (sigma * np.sqrt(2.0 * np.pi))
    # exp(...) erfc(z) with erfcx in front, where the plain product overflows.
    z = (sigma / tail + x / sigma) / np.sqrt(2.0)
    behind = 2.0 * np.exp(np.minimum(0.5 * (sigma / tail) ** 2 + x / tail, 0.0))
    front = gauss * erfcx(np.maximum(z, -5.0))
    return np.where(z < -5.0, behind, front) / (2.0 * tail)


@lru_cache(maxsize=32)
def standard_shape(ratio: float) -> StandardShape:
    """Return the lobe with an exponential of ``ratio`` times its sigma."""
    reach = np.hypot(2.3548, ratio) * -TABLE_START
    fine = np.arange(-reach, 6.0, 0.002)
    height = modified_gaussian(fine, 1.0, ratio)
    top = int(np.argmax(height))
    height /= height[top]
    half = np.flatnonzero(height >= 0.5)
    width = fine[half[-1]] - fine[half[0]]
    x = np.float64(TABLE_START) + TABLE_STEP * np.arange(
        round((_FRONT - TABLE_START) / TABLE_STEP)
    )
    table = np.interp(x * width + fine[top], fine, height, left=0.0, right=0.0)
    table[table < _NEGLIGIBLE] = 0.0
    for array in (x, table):
        array.setflags(write=False)
    return StandardShape(x=x, height=table, sigma=1.0 / width)


@lru_cache(maxsize=8)
def tables(ratios: tuple[float, ...]) -> FloatArray:
    """Return the heights of several standard shapes, shape (n_ratios, n)."""
    stacked = np.array([standard_shape(ratio).height for ratio in ratios])
    stacked.setflags(write=False)
    return stacked
