"""Compiled loop of the stack."""

from __future__ import annotations

import numba as nb
import numpy as np

__all__ = ["combine_block"]

# Squared deviation, in that of the last left out, of one that is as far off.
_ALIKE = 0.25


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
    for row in range(height):
        for col in range(width):
            count = 0
            for k in range(n):
                used[k] = mask[k, row, col] == 0
                count += used[k]
            most = (count - 1) // 2
            left_out = 0
            last = 0.0
            while count - left_out >= 3:
                worst, excess = _worst(
                    pixels, variance, row, col, sky[row, col], clip, tolerance, used,
                    ordered,
                )  # fmt: skip
                if worst < 0:
                    break
                if left_out == most:
                    if excess > _ALIKE * last:
                        # Without a majority nobody can tell who is wrong.
                        for k in range(n):
                            used[k] = mask[k, row, col] == 0
                    break
                used[worst] = False
                left_out += 1
                last = excess
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
def _worst(
    pixels: np.ndarray,
    variance: np.ndarray,
    row: int,
    col: int,
    sky: float,
    clip: float,
    tolerance: float,
    used: np.ndarray,
    ordered: np.ndarray,
) -> tuple[int, float]:
    """Return which used value deviates most from their median, and by how much.

    The squared deviation in its limit; -1 and 1 when none exceeds it.
    """
    count = 0
    spread = 0.0
    for k in range(used.size):
        if used[k]:
            value = pixels[k, row, col]
            place = count
            while place > 0 and ordered[place - 1] > value:
                ordered[place] = ordered[place - 1]
                place -= 1
            ordered[place] = value
            spread += variance[k, row, col]
            count += 1
    middle = 0.5 * (ordered[(count - 1) // 2] + ordered[count // 2])
    # Variance of the deviation from the median, to first order.
    own = clip**2 * (1.0 - 2.0 / count)
    shared = clip**2 * 0.5 * np.pi * spread / count**2
    shared += (tolerance * (middle - sky)) ** 2
    worst, most = -1, 1.0
    for k in range(used.size):
        if used[k]:
            deviation = pixels[k, row, col] - middle
            excess = deviation**2 / (own * variance[k, row, col] + shared)
            if excess > most:
                worst, most = k, excess
    return worst, most
