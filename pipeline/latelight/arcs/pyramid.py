"""The difference at coarser and coarser pixels, weighted by its variance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.records import Difference, PixelArray

__all__ = ["Level", "base_bin", "build_pyramid"]


@dataclass(frozen=True, slots=True)
class Level:
    """One level: sums over blocks of pixels.

    Attributes
    ----------
    bin_px : int
        Side of a block, pixels.
    signal : float32 array, shape (my, mx)
        Sum of D/V over the unmasked pixels of each block.
    weight : float32 array, shape (my, mx)
        Sum of 1/V over the same.
    """

    bin_px: int
    signal: PixelArray
    weight: PixelArray


def base_bin(fwhm_px: float) -> int:
    """Return the side of the finest blocks, pixels.

    The narrowest ridge of the bank has a sigma of one block, about 1.4 times the
    PSF's: the narrowest echo, a PSF smeared by the motion, loses under 3 %.
    """
    return max(1, round(fwhm_px / 1.65))


def build_pyramid(difference: Difference, *, widest_px: float) -> tuple[Level, ...]:
    """Return levels of doubling block size, finest first.

    Parameters
    ----------
    difference : Difference
        Shape (ny, nx).
    widest_px : float
        Full width at half maximum of the widest ridge wanted, pixels.
    """
    size = base_bin(difference.fwhm_px)
    good = difference.mask == 0
    weight = np.where(good, np.float32(1.0) / difference.variance, np.float32(0.0))
    signal = _binned(difference.pixels * weight, size)
    weight = _binned(weight, size)
    levels = [Level(size, signal, weight)]
    # A ridge of sigma one block serves widths up to sqrt(2) times its own.
    while 2.3548 * np.sqrt(2.0) * levels[-1].bin_px < widest_px:
        last = levels[-1]
        levels.append(
            Level(2 * last.bin_px, _binned(last.signal, 2), _binned(last.weight, 2))
        )
    return tuple(levels)


def _binned(image: PixelArray, size: int) -> PixelArray:
    """Sum blocks; those that overhang the frame hold what is there."""
    ny, nx = image.shape
    full = np.pad(image, ((0, -ny % size), (0, -nx % size)))
    rows, cols = full.shape[0] // size, full.shape[1] // size
    return full.reshape(rows, size, cols, size).sum(axis=(1, 3))
