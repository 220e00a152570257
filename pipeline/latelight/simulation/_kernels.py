"""Compiled loops of the renderer."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

__all__ = ["add_stars", "bleed", "deposit_charge", "light_sheet"]


@njit(nogil=True, cache=True)
def add_stars(
    image: np.ndarray, stars: np.ndarray, beta: float, first: int, last: int
) -> None:
    """Add Moffat stars to rows ``first <= row < last`` of an image.

    ``stars`` has one row a star: x, y, flux, a, b, c, norm, radius (pixels).
    """
    nx = image.shape[1]
    for i in range(stars.shape[0]):
        x, y, radius = stars[i, 0], stars[i, 1], stars[i, 7]
        height = stars[i, 2] * stars[i, 6]
        low = max(first, math.ceil(y - radius))
        high = min(last, math.floor(y + radius) + 1)
        for row in range(low, high):
            dy = row - y
            reach = math.sqrt(max(radius * radius - dy * dy, 0.0))
            left = max(0, math.ceil(x - reach))
            right = min(nx, math.floor(x + reach) + 1)
            for col in range(left, right):
                dx = col - x
                form = (
                    stars[i, 3] * dx * dx
                    + 2.0 * stars[i, 4] * dx * dy
                    + stars[i, 5] * dy * dy
                )
                image[row, col] += height * math.exp(-beta * math.log1p(form))


@njit(nogil=True, cache=True)
def light_sheet(
    out: np.ndarray,
    density: np.ndarray,
    early: np.ndarray,
    middle: np.ndarray,
    late: np.ndarray,
    weights: np.ndarray,
    cumulative: np.ndarray,
    step: float,
    first: int,
    last: int,
) -> None:
    """Integrate dust times light curve along each line of sight.

    The sheet's depth is cut into ``len(weights)`` cells; ``early, middle, late``
    hold the time since the light seen there left the outburst (yr) at its far
    face, mid-plane and near face; between them the delay is a parabola of depth.
    Inside a cell the light curve is integrated exactly from its running integral
    ``cumulative`` (sampled every ``step`` yr from time 0), so that a flash much
    shorter than a cell is neither missed nor counted twice.
    """
    n_cells = weights.size
    top = cumulative.size - 1
    for row in range(first, last):
        for col in range(out.shape[1]):
            dust = density[row, col]
            if dust <= 0.0:
                out[row, col] = 0.0
                continue
            t0, t1, t2 = early[row, col], middle[row, col], late[row, col]
            # The delay changes steadily with depth: the faces are the extremes.
            if max(t0, t2) <= 0.0 or min(t0, t2) >= top * step:
                out[row, col] = 0.0
                continue
            slope, bend = 0.5 * (t2 - t0), 0.5 * (t2 + t0) - t1
            total = 0.0
            before = t0
            sum_before = running_integral(cumulative, step, top, t0)
            for k in range(n_cells):
                s = -1.0 + 2.0 * (k + 1) / n_cells
                after = t1 + slope * s + bend * s * s
                sum_after = running_integral(cumulative, step, top, after)
                span = after - before
                if abs(span) > 1e-9:
                    total += weights[k] * (sum_after - sum_before) / span
                before, sum_before = after, sum_after
            out[row, col] = dust * total


@njit(nogil=True, cache=True)
def running_integral(
    cumulative: np.ndarray, step: float, top: int, time: float
) -> float:
    """Return the light curve's integral up to a time, linear between samples."""
    place = time / step
    if place <= 0.0:
        return 0.0
    if place >= top:
        return float(cumulative[top])
    k = int(place)
    part = place - k
    return float(cumulative[k] * (1.0 - part) + cumulative[k + 1] * part)


@njit(nogil=True, cache=True)
def bleed(electrons: np.ndarray, full_well: float, spilled: np.ndarray) -> None:
    """Cut pixels at the full well and spill the excess up and down the column.

    Half of each run's excess goes either way and fills every pixel it meets;
    pixels that were cut or filled are marked in ``spilled``.
    """
    ny, nx = electrons.shape
    for col in range(nx):
        row = 0
        while row < ny:
            if electrons[row, col] <= full_well:
                row += 1
                continue
            start, excess = row, 0.0
            while row < ny and electrons[row, col] > full_well:
                excess += electrons[row, col] - full_well
                electrons[row, col] = full_well
                spilled[row, col] = True
                row += 1
            _spill(electrons, spilled, col, start - 1, -1, 0.5 * excess, full_well)
            _spill(electrons, spilled, col, row, 1, 0.5 * excess, full_well)


@njit(nogil=True, cache=True)
def _spill(
    electrons: np.ndarray,
    spilled: np.ndarray,
    col: int,
    row: int,
    step: int,
    charge: float,
    full_well: float,
) -> None:
    while 0 <= row < electrons.shape[0] and charge > 0.0:
        room = full_well - electrons[row, col]
        if room > 0.0:
            moved = min(room, charge)
            electrons[row, col] += moved
            charge -= moved
            spilled[row, col] = True
        row += step


@njit(nogil=True, cache=True)
def deposit_charge(
    charge: np.ndarray, x: np.ndarray, y: np.ndarray, dose: np.ndarray, sigma: float
) -> None:
    """Deposit point charges spread by a narrow Gaussian, integrated over pixels."""
    ny, nx = charge.shape
    scale = 1.0 / (math.sqrt(2.0) * sigma)
    for i in range(x.size):
        col0, row0 = round(x[i]), round(y[i])
        for row in range(max(0, row0 - 2), min(ny, row0 + 3)):
            wy = math.erf((row + 0.5 - y[i]) * scale)
            wy -= math.erf((row - 0.5 - y[i]) * scale)
            for col in range(max(0, col0 - 2), min(nx, col0 + 3)):
                wx = math.erf((col + 0.5 - x[i]) * scale)
                wx -= math.erf((col - 0.5 - x[i]) * scale)
                charge[row, col] += 0.25 * dose[i] * wx * wy
