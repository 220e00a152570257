"""All epochs without their static sky, at coarser and coarser pixels.

The static sky is free in every pixel, so its best value, the weighted mean over
the epochs, is taken out of each: ``R_i = y_i - sum_j w_j y_j / sum_j w_j`` with
``w = 1 / V``.  Of the weight of epoch i in that pixel ``w_i (1 - w_i / sum_j
w_j)`` is left; a pixel with one good epoch holds nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.velocity_stack._kernels import (
    block_rows,
    block_sums,
    project_rows,
)
from latelight.motion.velocity_stack.background import without_background
from latelight.records import EpochSeries, FloatArray, PixelArray
from latelight.threads import over_rows
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["Level", "Moving", "base_bin", "build_levels", "take_out_static"]

_WIDTHS_A_LEVEL = np.sqrt(2.0)
"""Filters of sigma s serve widths up to this many times s; levels double s."""
_LATTICE = 11
"""One pixel in so many, each way, tells the weights of the epochs."""


@dataclass(frozen=True, slots=True)
class Moving:
    """What is not static: every epoch's residuals, weighted.

    Attributes
    ----------
    pixels : float32 array, shape (n, ny, nx)
        ``y_i``.
    weight : float32 array, shape (n, ny, nx)
        ``w_i``; 0 where masked.
    signal : float32 array, shape (n, ny, nx)
        ``w_i R_i``.
    total : float32 array, shape (ny, nx)
        ``sum_i w_i``.
    """

    pixels: PixelArray
    weight: PixelArray
    signal: PixelArray
    total: PixelArray

    def shares(self) -> FloatArray:
        """Return each epoch's typical share of the weight, shape (n,); sum 1."""
        lattice = self.weight[:, ::_LATTICE, ::_LATTICE]
        typical = np.array(
            [np.median(w[w > 0.0]) if (w > 0.0).any() else 0.0 for w in lattice]
        )
        return typical / max(float(typical.sum()), 1e-300)


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


def take_out_static(series: EpochSeries, *, smooth_px: float) -> Moving:
    """Take the weighted mean over the epochs out of every pixel.

    Parameters
    ----------
    series : EpochSeries
        Shape (n, ny, nx).
    smooth_px : float
        Sigma over which the background is smooth, pixels; it goes first.
    """
    variance, mask = series.variance, series.mask
    pixels = without_background(series, sigma_px=smooth_px)
    weight, signal = np.empty_like(pixels), np.empty_like(pixels)
    total = np.empty(pixels.shape[1:], np.float32)

    def project(first: int, last: int) -> None:
        project_rows(pixels, variance, mask, weight, signal, total, first, last)

    over_rows(project, pixels.shape[1])
    return Moving(pixels, weight, signal, total)


def build_levels(
    moving: Moving, *, fwhm_px: float, widest_px: float
) -> tuple[Level, ...]:
    """Return levels of doubling block size, finest first.

    Parameters
    ----------
    moving : Moving
        Shape (n, ny, nx).
    fwhm_px : float
        PSF width, pixels.
    widest_px : float
        Full width at half maximum of the widest ridge wanted, pixels.
    """
    levels = [_finest(moving, base_bin(fwhm_px))]
    while FWHM_PER_SIGMA * _WIDTHS_A_LEVEL * levels[-1].bin_px < widest_px:
        last = levels[-1]
        levels.append(
            Level(2 * last.bin_px, _binned(last.signal), _binned(last.weight))
        )
    return tuple(levels)


def _finest(moving: Moving, size: int) -> Level:
    n, ny, nx = moving.weight.shape
    shape = (n, -(-ny // size), -(-nx // size))
    signal, weight = np.zeros(shape, np.float32), np.zeros(shape, np.float32)

    def add(first: int, last: int) -> None:
        block_rows(
            moving.weight,
            moving.signal,
            moving.total,
            size,
            signal,
            weight,
            first,
            last,
        )

    over_rows(add, shape[1])
    return Level(size, signal, weight)


def _binned(images: PixelArray) -> PixelArray:
    """Sum blocks of 2 x 2; those that overhang the frame hold what is there."""
    n, ny, nx = images.shape
    total = np.zeros((n, -(-ny // 2), -(-nx // 2)), np.float32)
    block_sums(images, total)
    return total
