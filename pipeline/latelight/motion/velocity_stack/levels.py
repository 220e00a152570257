"""All epochs without their static sky, at coarser and coarser pixels.

The static sky is free in every pixel, so its best value, the weighted mean over
the epochs, is taken out of each: ``R_i = y_i - sum_j w_j y_j / sum_j w_j`` with
``w = 1 / V``.  Of the weight of epoch i in that pixel ``w_i (1 - w_i / sum_j
w_j)`` is left; a pixel with one good epoch holds nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.velocity_stack._kernels import block_sums, residual_sums
from latelight.records import EpochSeries, FloatArray, PixelArray
from latelight.threads import over_rows
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["Level", "base_bin", "build_levels", "epoch_shares"]

_WIDTHS_A_LEVEL = np.sqrt(2.0)
"""Filters of sigma s serve widths up to this many times s; levels double s."""
_LATTICE = 11
"""One pixel in so many, each way, tells the weights of the epochs."""


@dataclass(frozen=True, slots=True)
class Level:
    """One level: sums over blocks of pixels, epoch by epoch.

    Attributes
    ----------
    bin_px : int
        Side of a block, pixels.
    signal : float32 array, shape (n, my, mx)
        Sum of ``w_i R_i`` over the good pixels of each block.
    weight : float32 array, shape (n, my, mx)
        Sum of ``w_i (1 - w_i / sum_j w_j)`` over the same.
    """

    bin_px: int
    signal: PixelArray
    weight: PixelArray


def base_bin(fwhm_px: float) -> int:
    """Return the side of the finest blocks, pixels.

    The narrowest filter has a sigma of one block, about 1.4 times the PSF's: the
    narrowest echo, a PSF smeared by the motion, loses under 3 %.
    """
    return max(1, round(fwhm_px / 1.65))


def build_levels(series: EpochSeries, *, widest_px: float) -> tuple[Level, ...]:
    """Return levels of doubling block size, finest first.

    Parameters
    ----------
    series : EpochSeries
        Shape (n, ny, nx).
    widest_px : float
        Full width at half maximum of the widest ridge wanted, pixels.
    """
    size = base_bin(float(np.median(series.fwhm_px)))
    levels = [_finest(series, size)]
    while FWHM_PER_SIGMA * _WIDTHS_A_LEVEL * levels[-1].bin_px < widest_px:
        last = levels[-1]
        levels.append(
            Level(2 * last.bin_px, _binned(last.signal), _binned(last.weight))
        )
    return tuple(levels)


def epoch_shares(series: EpochSeries) -> FloatArray:
    """Return each epoch's typical share of the weight, shape (n,); the sum is 1."""
    lattice = np.s_[:, ::_LATTICE, ::_LATTICE]
    good = series.mask[lattice] == 0
    variance = series.variance[lattice]
    typical = np.array(
        [
            1.0 / np.median(v[g]) if g.any() else 0.0
            for v, g in zip(variance, good, strict=True)
        ]
    )
    return typical / max(typical.sum(), 1e-300)


def _finest(series: EpochSeries, size: int) -> Level:
    n, ny, nx = series.pixels.shape
    shape = (n, -(-ny // size), -(-nx // size))
    signal, weight = np.zeros(shape, np.float32), np.zeros(shape, np.float32)
    pixels, variance, mask = series.pixels, series.variance, series.mask

    def add(first: int, last: int) -> None:
        residual_sums(pixels, variance, mask, size, signal, weight, first, last)

    over_rows(add, shape[1])
    return Level(size, signal, weight)


def _binned(images: PixelArray) -> PixelArray:
    """Sum blocks of 2 x 2; those that overhang the frame hold what is there."""
    n, ny, nx = images.shape
    total = np.zeros((n, -(-ny // 2), -(-nx // 2)), np.float32)
    block_sums(images, total)
    return total
