"""The difference at coarser and coarser pixels, weighted by its variance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.arcs._binning_kernels import block_sums, weighted_block_sums
from latelight.records import Difference, PixelArray
from latelight.threads import over_rows

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
    levels = [_finest(difference, size)]
    # A ridge of sigma one block serves widths up to sqrt(2) times its own.
    while 2.3548 * np.sqrt(2.0) * levels[-1].bin_px < widest_px:
        last = levels[-1]
        levels.append(
            Level(2 * last.bin_px, _binned(last.signal, 2), _binned(last.weight, 2))
        )
    return tuple(levels)


def _finest(difference: Difference, size: int) -> Level:
    shape = _blocks(difference.pixels.shape, size)
    signal, weight = np.empty(shape, np.float32), np.empty(shape, np.float32)
    pixels, variance, mask = difference.pixels, difference.variance, difference.mask

    def add(first: int, last: int) -> None:
        weighted_block_sums(pixels, variance, mask, size, signal, weight, first, last)

    over_rows(add, shape[0])
    return Level(size, signal, weight)


def _binned(image: PixelArray, size: int) -> PixelArray:
    """Sum blocks; those that overhang the frame hold what is there."""
    total = np.empty(_blocks(image.shape, size), np.float32)
    block_sums(image, size, total)
    return total


def _blocks(shape: tuple[int, ...], size: int) -> tuple[int, int]:
    return -(-shape[0] // size), -(-shape[1] // size)
