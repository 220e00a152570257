"""The frame in squares, made ready for sums along lines."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.frames._kernels import bilinear_rows
from latelight.frames.trails._kernels import binned_rows
from latelight.records import BoolArray, MaskArray, PixelArray
from latelight.threads import over_rows

__all__ = ["binned", "halved", "pulled_in", "without_stars"]

# Squares higher than this, in sigma, are pulled in, or taken out as stars.
PULLED_IN = 3.0
TAKEN_OUT = 3.5
# The local mean is taken over tiles of this many squares a side.
LOCAL = 16


def binned(
    pixels: PixelArray, sky: PixelArray, mask: MaskArray, sigma: float, size: int
) -> PixelArray:
    """Bin the frame, in sigma of the binned noise; zero where little is good."""
    ny, nx = pixels.shape[0] // size, pixels.shape[1] // size
    image = np.empty((ny, nx), dtype=np.float32)
    over_rows(
        lambda first, last: binned_rows(
            pixels, sky, mask, sigma, size, image, first, last
        ),
        ny,
    )
    return image


def halved(image: PixelArray) -> PixelArray:
    """Bin an image in units of its noise 2 x 2 more, in units of the new noise."""
    ny, nx = image.shape[0] // 2, image.shape[1] // 2
    tiles = image[: 2 * ny, : 2 * nx].reshape(ny, 2, nx, 2)
    coarse: PixelArray = tiles.sum(axis=(1, 3), dtype=np.float32)
    coarse *= np.float32(0.5)
    return coarse


def pulled_in(image: PixelArray) -> PixelArray:
    """Pull bright squares in and take the local mean off; unit scatter."""
    work = np.clip(image, -PULLED_IN, PULLED_IN)
    work -= _local_mean(work, np.ones(work.shape, dtype=bool))
    unit: PixelArray = work / max(float(work.std()), 1e-6)
    return unit


def without_stars(image: PixelArray) -> PixelArray:
    """Set stars to zero, take the local mean off the rest; unit scatter."""
    low, middle = np.quantile(image[::2, ::2], [0.1587, 0.5])
    kept = np.abs(image - middle) <= TAKEN_OUT * max(middle - low, 1e-6)
    kept &= image != 0.0
    for axis in (0, 1):
        rolled = np.roll(kept, 1, axis) & np.roll(kept, -1, axis)
        kept = kept & rolled
    work = image - _local_mean(image, kept)
    work[~kept] = 0.0
    unit: PixelArray = work / max(float(work[kept].std()) if kept.any() else 1.0, 1e-6)
    return unit


def _local_mean(image: PixelArray, kept: BoolArray) -> PixelArray:
    """Return the mean of the kept squares round every square."""
    ny, nx = (max(side // LOCAL, 1) for side in image.shape)
    tiles = (slice(0, ny * LOCAL), slice(0, nx * LOCAL))
    shape = (ny, min(LOCAL, image.shape[0]), nx, min(LOCAL, image.shape[1]))
    n = kept[tiles].reshape(shape).sum(axis=(1, 3), dtype=np.float32)
    sums = np.where(kept[tiles], image[tiles], 0).reshape(shape).sum(axis=(1, 3))
    nodes = ndimage.uniform_filter(sums, 3) / np.maximum(
        ndimage.uniform_filter(n, 3), 1.0
    )
    mean = np.empty_like(image)
    middle = 0.5 * (LOCAL - 1)
    bilinear_rows(
        nodes.astype(np.float32), middle, middle, float(LOCAL), mean, 0, len(image)
    )
    return mean
