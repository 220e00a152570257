"""What is smooth in an epoch, taken off: no ridge, but noise to wide filters.

Residual sky and the wings of stars change slowly from place to place, and a filter
as large as a ridge collects them.  The weighted mean over a Gaussian neighbourhood
wider than any ridge is taken off; pixels that stand out are left out of it.
"""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.motion.velocity_stack._kernels import clipped_sums, subtract_smooth
from latelight.records import EpochSeries, FloatArray, PixelArray
from latelight.threads import over_rows

__all__ = ["without_background"]

_BLOCKS_A_SIGMA = 3.0
"""The background is worked out on blocks, so many to its sigma."""
_CLIP_SIGMA = 4.0


def without_background(series: EpochSeries, *, sigma_px: float) -> PixelArray:
    """Return the epochs without what is smooth.

    Parameters
    ----------
    series : EpochSeries
        Shape (n, ny, nx).
    sigma_px : float
        Sigma of the Gaussian neighbourhood, pixels.

    Returns
    -------
    float32 array, shape (n, ny, nx)
        Counts; zero where masked.
    """
    out = np.empty_like(series.pixels)
    for i in range(len(series)):
        _subtract(series, i, sigma_px, out[i])
    return out


def _subtract(series: EpochSeries, i: int, sigma_px: float, out: PixelArray) -> None:
    smooth, size = _smooth(series, i, sigma_px)

    def subtract(first: int, last: int) -> None:
        subtract_smooth(
            series.pixels[i], series.mask[i], smooth, size, out, first, last
        )

    over_rows(subtract, out.shape[0])


def _smooth(series: EpochSeries, i: int, sigma_px: float) -> tuple[FloatArray, int]:
    """Return the background of one epoch at the middles of blocks, and their side."""
    size = max(1, round(sigma_px / _BLOCKS_A_SIGMA))
    ny, nx = series.pixels.shape[1:]
    shape = (-(-ny // size), -(-nx // size))
    top, bottom = np.zeros(shape), np.zeros(shape)
    limit = _CLIP_SIGMA * max(float(series.noise_ratio[i]), 0.5)
    clipped_sums(
        series.pixels[i],
        series.variance[i],
        series.mask[i],
        limit,
        size,
        top,
        bottom,
    )
    blur = sigma_px / size
    weight = ndimage.gaussian_filter(bottom, blur, mode="constant")
    signal = ndimage.gaussian_filter(top, blur, mode="constant")
    least = 1e-6 * float(weight.max(initial=0.0)) + 1e-300
    return np.where(weight > least, signal / np.maximum(weight, least), 0.0), size
