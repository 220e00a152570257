"""Compiled loops of the matching stage."""

from __future__ import annotations

import numba as nb
import numpy as np

__all__ = ["fill_bad", "filter_stamps"]


@nb.njit(nogil=True, cache=True)
def filter_stamps(
    image: np.ndarray,
    centre: np.ndarray,
    taps: np.ndarray,
    pairs: np.ndarray,
    pixels: np.ndarray,
    out: np.ndarray,
    first_star: int,
    last_star: int,
) -> None:
    """Convolve star cutouts with separable filters.

    Parameters
    ----------
    image : float32 array, shape (ny, nx)
        Every cutout with its margin must lie inside.
    centre : int64 array, shape (n_stars, 2)
        Row and column of each star.
    taps : float32 array, shape (n_taps, k)
        One-dimensional filters, k odd.
    pairs : int64 array, shape (n_basis, 2)
        Taps along y and along x of each filter, sorted by the second.
    pixels : int64 array, shape (n_pixels, 2)
        Row and column offsets wanted.
    out : float32 array, shape (n_stars, n_basis, n_pixels)
        Filled for ``first_star <= star < last_star``.
    """
    side = taps.shape[1]
    reach = side // 2
    half = 0
    for p in range(pixels.shape[0]):
        half = max(half, abs(pixels[p, 0]), abs(pixels[p, 1]))
    width = 2 * half + 1
    height = width + 2 * reach
    along_x = np.empty((height, width), dtype=np.float32)
    both = np.empty((width, width), dtype=np.float32)
    for star in range(first_star, last_star):
        top = centre[star, 0] - half - reach
        left = centre[star, 1] - half
        done = -1
        for b in range(pairs.shape[0]):
            if pairs[b, 1] != done:
                done = pairs[b, 1]
                along_x[:] = 0.0
                for row in range(height):
                    for tap in range(side):
                        weight = taps[done, tap]
                        if weight != 0.0:
                            start = left + reach - tap
                            for col in range(width):
                                along_x[row, col] += (
                                    weight * image[top + row, start + col]
                                )
            both[:] = 0.0
            for tap in range(side):
                weight = taps[pairs[b, 0], tap]
                if weight != 0.0:
                    for row in range(width):
                        source = row + 2 * reach - tap
                        for col in range(width):
                            both[row, col] += weight * along_x[source, col]
            for p in range(pixels.shape[0]):
                out[star, b, p] = both[half + pixels[p, 0], half + pixels[p, 1]]


@nb.njit(nogil=True, cache=True)
def fill_bad(
    image: np.ndarray,
    bad: np.ndarray,
    radius: int,
    out: np.ndarray,
    first_row: int,
    last_row: int,
) -> None:
    """Fill bad pixels with the mean of near good ones, weighted by 1/r^2.

    ``out`` starts as a copy of ``image``; a bad pixel with no good one within
    ``radius`` becomes 0.
    """
    ny, nx = image.shape
    for y in range(first_row, last_row):
        for x in range(nx):
            if not bad[y, x]:
                continue
            total = 0.0
            weight = 0.0
            for yy in range(max(y - radius, 0), min(y + radius + 1, ny)):
                for xx in range(max(x - radius, 0), min(x + radius + 1, nx)):
                    if not bad[yy, xx]:
                        w = 1.0 / ((yy - y) ** 2 + (xx - x) ** 2)
                        total += w * image[yy, xx]
                        weight += w
            out[y, x] = total / weight if weight > 0.0 else 0.0
