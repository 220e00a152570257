"""Compiled loops of the matching stage."""

from __future__ import annotations

import numba as nb
import numpy as np

__all__ = ["add_gram", "fill_bad", "filter_stamp"]


@nb.njit(nogil=True, cache=True)
def filter_stamp(
    image: np.ndarray,
    taps: np.ndarray,
    pairs: np.ndarray,
    half: int,
    offsets: np.ndarray,
    out: np.ndarray,
) -> None:
    """Convolve one star's cutout with separable filters.

    Parameters
    ----------
    image : float32 array, shape (n, n)
        The cutout with the filters' reach as margin.
    taps : float32 array, shape (n_taps, k)
        One-dimensional filters, k odd.
    pairs : int64 array, shape (n_basis, 2)
        Taps along y and along x of each filter, neighbours sharing the second.
    half : int
        Half-width of the cutout, pixels.
    offsets : int64 array, shape (n_pixels, 2)
        Row and column offsets wanted, within ``half``.
    out : float64 array, shape (n_pixels, n_basis)
        The filtered cutout.
    """
    side = taps.shape[1]
    reach = side // 2
    width = 2 * half + 1
    height = width + 2 * reach
    along_x = np.empty((height, width), dtype=np.float32)
    both = np.empty((width, width), dtype=np.float32)
    done = -1
    for b in range(pairs.shape[0]):
        if pairs[b, 1] != done:
            done = pairs[b, 1]
            along_x[:] = 0.0
            for tap in range(side):
                weight = taps[done, tap]
                if weight != 0.0:
                    start = 2 * reach - tap
                    for y in range(height):
                        # Slices: the inner loops then run over whole vectors.
                        source = image[y, start : start + width]
                        target = along_x[y]
                        for x in range(width):
                            target[x] += weight * source[x]
        both[:] = 0.0
        for tap in range(side):
            weight = taps[pairs[b, 0], tap]
            if weight != 0.0:
                for y in range(width):
                    source = along_x[y + 2 * reach - tap]
                    target = both[y]
                    for x in range(width):
                        target[x] += weight * source[x]
        for p in range(offsets.shape[0]):
            out[p, b] = both[half + offsets[p, 0], half + offsets[p, 1]]


@nb.njit(nogil=True, cache=True)
def add_gram(
    functions: np.ndarray,
    target: np.ndarray,
    weight: np.ndarray,
    gram: np.ndarray,
    cross: np.ndarray,
) -> None:
    """Sum the weighted products of functions with each other and a target.

    Parameters
    ----------
    functions : float64 array, shape (n_pixels, n_basis)
        Values of the functions.
    target, weight : float64 array, shape (n_pixels,)
        What they are fitted to, and the weights.
    gram : float64 array, shape (n_basis, n_basis)
        Starts at zero; the symmetric sums on return.
    cross : float64 array, shape (n_basis,)
        Starts at zero; the sums with the target on return.
    """
    n_pixels, n_basis = functions.shape
    for p in range(n_pixels):
        if weight[p] == 0.0:
            continue
        for i in range(n_basis):
            weighted = weight[p] * functions[p, i]
            cross[i] += weighted * target[p]
            for j in range(i + 1):
                gram[i, j] += weighted * functions[p, j]
    for i in range(n_basis):
        for j in range(i):
            gram[j, i] = gram[i, j]


@nb.njit(nogil=True, cache=True)
def fill_bad(
    image: np.ndarray, bad: np.ndarray, radius: int, first_row: int, last_row: int
) -> None:
    """Fill bad pixels with the mean of near good ones, weighted by 1/r^2.

    In place, as only good pixels are looked at; a bad one with no good one within
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
            image[y, x] = total / weight if weight > 0.0 else 0.0
