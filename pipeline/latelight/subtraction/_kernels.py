"""Compiled loops of the subtraction stage."""

from __future__ import annotations

import numba as nb
import numpy as np

__all__ = ["add_star_noise", "bin_good", "smooth_columns", "smooth_rows"]


@nb.njit(nogil=True, cache=True)
def bin_good(
    image: np.ndarray,
    good: np.ndarray,
    factor: int,
    mean: np.ndarray,
    count: np.ndarray,
    first_row: int,
    last_row: int,
) -> None:
    """Average the good pixels of square bins.

    Fills rows ``first_row <= row < last_row`` of ``mean`` (0 where a bin has no good
    pixel) and ``count``; the frame's last bins may be partial.
    """
    ny, nx = image.shape
    for row in range(first_row, last_row):
        for col in range(mean.shape[1]):
            total = 0.0
            n = 0
            for y in range(row * factor, min((row + 1) * factor, ny)):
                for x in range(col * factor, min((col + 1) * factor, nx)):
                    if good[y, x]:
                        total += image[y, x]
                        n += 1
            mean[row, col] = total / n if n > 0 else 0.0
            count[row, col] = n


@nb.njit(nogil=True, cache=True)
def add_star_noise(
    model: np.ndarray,
    scatter: float,
    shift: float,
    variance: np.ndarray,
    first_row: int,
    last_row: int,
) -> None:
    """Add ``(scatter M)^2 + (shift |grad M|)^2`` to rows of a variance."""
    ny, nx = model.shape
    for y in range(first_row, last_row):
        up, down = min(y + 1, ny - 1), max(y - 1, 0)
        for x in range(nx):
            right, left = min(x + 1, nx - 1), max(x - 1, 0)
            slope_x = 0.5 * (model[y, right] - model[y, left])
            slope_y = 0.5 * (model[up, x] - model[down, x])
            variance[y, x] += (scatter * model[y, x]) ** 2 + shift**2 * (
                slope_x**2 + slope_y**2
            )


@nb.njit(nogil=True, cache=True)
def smooth_rows(
    image: np.ndarray, taps: np.ndarray, out: np.ndarray, first_row: int, last_row: int
) -> None:
    """Filter along x with symmetric taps, zeros outside."""
    nx = image.shape[1]
    reach = taps.size // 2
    # Padded lines and slices: the inner loops then run over whole vectors.
    line = np.zeros(nx + 2 * reach, dtype=np.float32)
    for y in range(first_row, last_row):
        line[reach : reach + nx] = image[y]
        target, middle = out[y], line[reach : reach + nx]
        for x in range(nx):
            target[x] = taps[reach] * middle[x]
        for away in range(1, reach + 1):
            weight = taps[reach + away]
            left, right = line[reach - away :], line[reach + away :]
            for x in range(nx):
                target[x] += weight * (left[x] + right[x])


@nb.njit(nogil=True, cache=True)
def smooth_columns(
    image: np.ndarray, taps: np.ndarray, out: np.ndarray, first_row: int, last_row: int
) -> None:
    """Filter along y with symmetric taps, zeros outside."""
    ny, nx = image.shape
    reach = taps.size // 2
    outside = np.zeros(nx, dtype=np.float32)
    for y in range(first_row, last_row):
        target, middle = out[y], image[y]
        for x in range(nx):
            target[x] = taps[reach] * middle[x]
        for away in range(1, reach + 1):
            weight = taps[reach + away]
            down = image[y - away] if y >= away else outside
            up = image[y + away] if y + away < ny else outside
            for x in range(nx):
                target[x] += weight * (down[x] + up[x])
