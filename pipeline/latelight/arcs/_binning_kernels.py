"""Compiled loops that sum blocks of pixels."""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = ["block_sums", "weighted_block_sums"]


@njit(nogil=True, cache=True)
def weighted_block_sums(
    pixels: np.ndarray,
    variance: np.ndarray,
    mask: np.ndarray,
    size: int,
    signal: np.ndarray,
    weight: np.ndarray,
    first: int,
    last: int,
) -> None:
    """Sum D/V and 1/V of the good pixels of each block, for some rows of blocks."""
    ny, nx = pixels.shape
    for row in range(first, last):
        signal[row], weight[row] = 0.0, 0.0
        for y in range(row * size, min((row + 1) * size, ny)):
            for col in range(signal.shape[1]):
                for x in range(col * size, min((col + 1) * size, nx)):
                    if mask[y, x] == 0:
                        inverse = np.float32(1.0) / variance[y, x]
                        signal[row, col] += pixels[y, x] * inverse
                        weight[row, col] += inverse


@njit(nogil=True, cache=True)
def block_sums(image: np.ndarray, size: int, total: np.ndarray) -> None:
    """Sum the pixels of each block."""
    ny, nx = image.shape
    total[:] = 0.0
    for y in range(ny):
        for x in range(nx):
            total[y // size, x // size] += image[y, x]
