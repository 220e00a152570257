"""Compiled loop of the stack."""

from __future__ import annotations

import numba as nb
import numpy as np

__all__ = ["combine_block"]


@nb.njit(nogil=True, cache=True)
def combine_block(
    pixels: np.ndarray,
    variance: np.ndarray,
    mask: np.ndarray,
    weights: np.ndarray,
    sky: np.ndarray,
    clip: float,
    tolerance: float,
    out_pixels: np.ndarray,
    out_variance: np.ndarray,
    out_mask: np.ndarray,
) -> None:
    """Combine a block of rows: (n, h, w) arrays into three (h, w) arrays."""
    n, height, width = pixels.shape
    ordered = np.empty(n)
    used = np.empty(n, np.bool_)
    outlying = np.empty(n, np.bool_)
    for row in range(height):
        for col in range(width):
            count = 0
            spread = 0.0
            for k in range(n):
                used[k] = mask[k, row, col] == 0
                if used[k]:
                    _insert(ordered, count, pixels[k, row, col])
                    spread += variance[k, row, col]
                    count += 1
            if count >= 3:
                middle = 0.5 * (ordered[(count - 1) // 2] + ordered[count // 2])
                # Of the deviation from the median, to first order.
                own = clip**2 * (1.0 - 2.0 / count)
                shared = clip**2 * 0.5 * np.pi * spread / count**2
                shared += (tolerance * (middle - sky[row, col])) ** 2
                outliers = 0
                for k in range(n):
                    deviation = pixels[k, row, col] - middle
                    limit = own * variance[k, row, col] + shared
                    outlying[k] = used[k] and deviation**2 > limit
                    outliers += outlying[k]
                # Without a majority nobody can tell who is wrong.
                if 0 < outliers <= (count - 1) // 2:
                    for k in range(n):
                        used[k] = used[k] and not outlying[k]
            bits = np.uint16(0)
            if count == 0:
                for k in range(n):
                    bits |= mask[k, row, col]
                    used[k] = True
            total, light, noise = 0.0, 0.0, 0.0
            for k in range(n):
                if used[k]:
                    total += weights[k]
                    light += weights[k] * pixels[k, row, col]
                    noise += weights[k] ** 2 * variance[k, row, col]
            out_pixels[row, col] = light / total
            out_variance[row, col] = noise / total**2
            out_mask[row, col] = bits


@nb.njit(nogil=True, cache=True)
def _insert(ordered: np.ndarray, count: int, value: float) -> None:
    """Insert a value into the first ``count`` ones, which are in order."""
    place = count
    while place > 0 and ordered[place - 1] > value:
        ordered[place] = ordered[place - 1]
        place -= 1
    ordered[place] = value
