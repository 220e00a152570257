"""What an echo looks like across: a sharp front and a slow tail.

Each lobe is the outburst's light curve laid out in space: fast rise, slow decay,
smeared by the PSF and by the dust's depth.  That is an exponentially modified
Gaussian: a Gaussian of sigma s convolved with an exponential of scale t (Grushka
1972, Anal. Chem. 44, 1733, doi:10.1021/ac60319a011).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import erfcx

from latelight.records import FloatArray, IntArray

__all__ = [
    "LobeShapes",
    "coarse_shapes",
    "fine_shapes",
    "lobe_profile",
    "lobe_width",
]

_SIGMA_STEP = 1.6
"""Ratio of neighbouring sigmas: two such Gaussians overlap to 97 %."""
_TAILS = (0.0, 1.2, 3.0)
"""Exponential scale in units of sigma; 0 is the plain Gaussian."""


@dataclass(frozen=True, slots=True)
class LobeShapes:
    """A bank of lobe profiles, peak 1 in the middle column.

    Attributes
    ----------
    profiles : float64 array, shape (n, m)
        One profile a row, m odd.
    half_width : int64 array, shape (n,)
        Pixels from the middle beyond which the profile is negligible.
    sigma_px, tail_px : float64 array, shape (n,)
        Gaussian sigma and signed exponential scale, pixels.
    overlap : float64 array, shape (n, n_shifts)
        Correlation of each profile with itself, by distance in pixels.
    least_shift : int64 array, shape (n,)
        Shortest distance between two lobes that is told from none, pixels.
    """

    profiles: FloatArray
    half_width: IntArray
    sigma_px: FloatArray
    tail_px: FloatArray
    overlap: FloatArray
    least_shift: IntArray


def lobe_profile(offset: FloatArray, sigma: float, tail: float) -> FloatArray:
    """Return an exponentially modified Gaussian with its peak at zero, height 1.

    Parameters
    ----------
    offset : float64 array
        Pixels.
    sigma : float
        Sigma of the Gaussian, pixels, positive.
    tail : float
        Scale of the exponential, pixels, 0.2 to 20 sigma; the tail points to
        positive offsets when it is positive; 0 gives the Gaussian.
    """
    if tail == 0.0:
        return np.exp(-0.5 * (offset / sigma) ** 2)
    ratio = abs(tail) / sigma
    ratios, modes, heights = _modes()
    mode = float(np.interp(ratio, ratios, modes))
    height = float(np.interp(ratio, ratios, heights))
    return _modified(np.sign(tail) * offset / sigma + mode, ratio) / height


def _modified(x: FloatArray, ratio: float) -> FloatArray:
    """Return a unit Gaussian convolved with exp(-x / ratio), up to a factor."""
    # erfcx keeps the product exp * erfc finite on both sides.
    z = (1.0 / ratio - x) / np.sqrt(2.0)
    right = z < -5.0
    near = np.exp(-0.5 * x**2) * erfcx(np.where(right, 0.0, z))
    far = 2.0 * np.exp(0.5 / ratio**2 - x / ratio)
    return np.where(right, far, near)


@lru_cache(maxsize=1)
def _modes() -> tuple[FloatArray, FloatArray, FloatArray]:
    """Tabulate place and height of the peak against the exponential's scale."""
    ratios = np.geomspace(0.2, 20.0, 400)
    x = np.linspace(-1.0, 3.0, 4001)
    curves = [_modified(x, float(ratio)) for ratio in ratios]
    modes = np.array([x[curve.argmax()] for curve in curves])
    return ratios, modes, np.array([curve.max() for curve in curves])


def lobe_width(sigma: float, tail: float) -> float:
    """Return the full width at half maximum of a lobe, pixels."""
    reach = 3.0 * (sigma + abs(tail))
    offset = np.linspace(-reach, reach, 2001)
    above = offset[lobe_profile(offset, sigma, tail) >= 0.5]
    return float(above[-1] - above[0])


def coarse_shapes(*, fwhm_px: float, widest_px: float, n_shifts: int) -> LobeShapes:
    """Return the bank that covers every lobe of one PSF.

    Parameters
    ----------
    fwhm_px : float
        Full width at half maximum of the PSF, pixels.
    widest_px : float
        Full width at half maximum of the widest lobe, pixels.
    n_shifts : int
        Distances 0, 1, ... n_shifts - 1 pixels between lobes are tabulated.
    """
    narrowest = 1.1 * fwhm_px / 2.3548
    widest = max(widest_px / 2.3548, narrowest)
    n_sigmas = 1 + int(np.ceil(np.log(widest / narrowest) / np.log(_SIGMA_STEP) - 0.3))
    shapes = [
        (sigma, sign * ratio * sigma)
        for sigma in narrowest * _SIGMA_STEP ** np.arange(n_sigmas)
        for ratio in _TAILS
        for sign in ((1.0, -1.0) if ratio else (1.0,))
        if np.hypot(1.0, ratio) * sigma < 1.2 * widest
    ]
    return _tabulated(shapes, n_shifts)


def fine_shapes(
    sigma: float, tail: float, *, fwhm_px: float, n_shifts: int
) -> LobeShapes:
    """Return the bank around one lobe, a quarter of the coarse steps apart.

    No lobe is narrower than the PSF by more than a tenth, the error of its width.
    """
    least = 0.9 * fwhm_px / 2.3548
    shapes = {
        (max(sigma * ratio, least), tail + change * sigma)
        for ratio in (0.71, 0.79, 0.89, 1.0, 1.12, 1.26, 1.41)
        for change in (-0.9, -0.6, -0.3, 0.0, 0.3, 0.6, 0.9)
    }
    return _tabulated(sorted(shapes), n_shifts)


def _tabulated(shapes: list[tuple[float, float]], n_shifts: int) -> LobeShapes:
    sigma = np.array([s for s, _ in shapes])
    # Below a third of sigma the exponential only shifts the Gaussian.
    tail = np.array([t if abs(t) > 0.3 * s else 0.0 for s, t in shapes])
    half = int(np.ceil(4.0 * np.max(sigma + np.abs(tail))))
    offset = np.arange(-half, half + 1, dtype=float)
    profiles = np.array(
        [lobe_profile(offset, s, t) for s, t in zip(sigma, tail, strict=True)]
    )
    widths = np.array(
        [int(np.abs(offset[row > 0.02]).max()) for row in profiles], dtype=np.int64
    )
    overlap = np.zeros((sigma.size, n_shifts))
    for i, row in enumerate(profiles):
        correlation = np.correlate(row, row, mode="full")[row.size - 1 :]
        size = min(n_shifts, row.size)
        overlap[i, :size] = correlation[:size] / correlation[0]
    # Closer lobes look the same, only fainter.
    least = np.maximum(1, np.round(np.hypot(sigma, 0.5 * tail)))
    return LobeShapes(profiles, widths, sigma, tail, overlap, least.astype(np.int64))
