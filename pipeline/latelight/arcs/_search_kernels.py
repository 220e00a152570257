"""Compiled loops of the coarse search for arcs."""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = ["update_rows"]


@njit(nogil=True, cache=True)
def keep_best(
    best: np.ndarray,
    code: np.ndarray,
    value: np.ndarray,
    here: np.ndarray,
    least: np.float32,
    number: int,
) -> None:
    """Keep the greater of two rows where there is data, and which it was."""
    name = np.int16(number)
    for col in range(best.size):
        better = here[col] > least and value[col] > best[col]
        best[col] = value[col] if better else best[col]
        code[col] = name if better else code[col]


# The check for division by zero would keep the loops from being vectorised.
@njit(nogil=True, cache=True, error_model="numpy")
def update_rows(
    best: np.ndarray,
    code: np.ndarray,
    response: np.ndarray,
    power: np.ndarray,
    margin: int,
    steps: np.ndarray,
    overlap: np.ndarray,
    inverse: np.ndarray,
    floor: float,
    number: int,
    first: int,
    last: int,
) -> None:
    """Keep the strongest of one ridge and its pairs at every pixel, and its number.

    ``steps[j] = (dy, dx)`` leads from the middle of pair j to its positive lobe;
    ``overlap[j]`` is the correlation of the two lobes, and the last step also
    sets the flanks of the single ridge.  ``inverse`` are the calibrations 1 /
    sigma^2 of the single ridge (0) and the pairs (1...).
    """
    n_steps, n_cols = steps.shape[0], best.shape[1]
    flank, least = np.float32(overlap[n_steps]), np.float32(floor)
    half = np.float32(0.5)
    value = np.empty(n_cols, np.float32)
    for row in range(first, last):
        y = row + margin
        here = power[y, margin : margin + n_cols]
        middle = response[y, margin : margin + n_cols]
        value[:] = np.float32(0.0)
        for j in range(n_steps):
            dy, dx = steps[j, 0], margin + steps[j, 1]
            ahead = response[y + dy, dx : dx + n_cols]
            ahead_power = power[y + dy, dx : dx + n_cols]
            dx = margin - steps[j, 1]
            behind = response[y - dy, dx : dx + n_cols]
            behind_power = power[y - dy, dx : dx + n_cols]
            rho, scale = np.float32(2.0 * overlap[j]), np.float32(inverse[1 + j])
            for col in range(n_cols):
                rise = ahead[col] - behind[col]
                noise = ahead_power[col] + behind_power[col] - rho * here[col]
                gain = rise * rise / max(noise, least) * scale
                value[col] = max(value[col], gain)
        # The farthest pair's places are the single ridge's flanks.
        share, scale = np.float32(1.0 + 0.25 * rho - flank), np.float32(inverse[0])
        sides = half * (half - flank)
        for col in range(n_cols):
            rise = middle[col] - half * (ahead[col] + behind[col])
            noise = here[col] * share
            noise += sides * (ahead_power[col] + behind_power[col])
            gain = rise * rise / max(noise, least) * scale
            value[col] = max(value[col], gain)
        keep_best(best[row], code[row], value, here, least, number)
