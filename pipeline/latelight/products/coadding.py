"""Part what moves along a track from what stands still."""

from __future__ import annotations

import functools
from collections.abc import Iterable

import numpy as np
from scipy import ndimage

from latelight.records import FloatArray, PixelArray

__all__ = ["part_moving"]

# Rounds of telling what moves from what stands still.  Sharp structure is parted in
# two or three; what is wider than the way moved goes slowly, and stays shared.
_ROUNDS = 8


def part_moving(
    pixels: PixelArray,
    weight: FloatArray,
    *,
    step_x: FloatArray,
    step_y: FloatArray,
) -> tuple[PixelArray, PixelArray]:
    """Return what moves in a series, and what stands still.

    The sky is taken for the sum of an image that stands still and one that moves as
    a whole; by turns each is the weighted mean of what the other leaves over.

    Parameters
    ----------
    pixels : float32 array, shape (n, ny, nx)
        Epochs less a static image that need not be known; finite everywhere.
    weight : float array, shape (n, ny, nx)
        Inverse variances; zero where a pixel must not be used.
    step_x, step_y : float64 array, shape (n,)
        How far the arc has moved at each epoch, pixels.

    Returns
    -------
    moving, still : float32 array, shape (ny, nx)
        Co-added along the motion, as it stands where the steps are zero, and co-added
        in place; NaN where no epoch has data.
    """
    weight = weight.astype(np.float32)
    steps = np.stack([step_y, step_x], axis=1)
    total = weight.sum(axis=0)
    total_back = _total(_shifted(w, -s) for w, s in zip(weight, steps, strict=True))
    moving = still = np.zeros(pixels.shape[1:], np.float32)
    for _ in range(_ROUNDS):
        left = [
            w * (d - _shifted(moving, s))
            for w, d, s in zip(weight, pixels, steps, strict=True)
        ]
        still = _ratio(_total(left), total)
        left = [
            _shifted(w * (d - still), -s)
            for w, d, s in zip(weight, pixels, steps, strict=True)
        ]
        moving = _ratio(_total(left), total_back)
    # Shifts blend neighbours: a trace of weight is no measurement.
    enough = total_back > 1e-3 * max(float(total_back.max()), 1e-30)
    return (
        np.where(enough, moving, np.float32(np.nan)),
        np.where(total > 0.0, still, np.float32(np.nan)),
    )


def _shifted(image: FloatArray | PixelArray, step: FloatArray) -> PixelArray:
    moved: PixelArray = ndimage.shift(image, step, order=1, mode="constant", cval=0.0)
    return moved


def _total(images: Iterable[PixelArray]) -> PixelArray:
    return functools.reduce(np.add, images)


def _ratio(summed: PixelArray, total: PixelArray) -> PixelArray:
    return np.divide(summed, total, out=np.zeros_like(total), where=total > 0.0)
