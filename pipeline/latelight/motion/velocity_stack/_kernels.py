"""Compiled loops of the search along trial velocities."""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = [
    "block_sums",
    "compress",
    "keep_best",
    "mask_ridge",
    "residual_sums",
    "ridge_sums",
    "sample_trial",
]


@njit(nogil=True, cache=True)
def residual_sums(
    pixels: np.ndarray,
    variance: np.ndarray,
    mask: np.ndarray,
    size: int,
    signal: np.ndarray,
    weight: np.ndarray,
    first: int,
    last: int,
) -> None:
    """Sum w R and w (1 - w / sum w) of each block, for some rows of blocks."""
    n, ny, nx = pixels.shape
    w = np.zeros((n, nx), np.float32)
    total = np.zeros(nx, np.float32)
    mean = np.zeros(nx, np.float32)
    zero, one = np.float32(0.0), np.float32(1.0)
    for row in range(first, last):
        for y in range(row * size, min((row + 1) * size, ny)):
            total[:] = zero
            mean[:] = zero
            for i in range(n):
                for x in range(nx):
                    w[i, x] = one / variance[i, y, x] if mask[i, y, x] == 0 else zero
                    total[x] += w[i, x]
                    mean[x] += w[i, x] * pixels[i, y, x]
            for x in range(nx):
                total[x] = one / total[x] if total[x] > zero else zero
                mean[x] *= total[x]
            for i in range(n):
                for x in range(nx):
                    own = w[i, x]
                    signal[i, row, x // size] += own * (pixels[i, y, x] - mean[x])
                    weight[i, row, x // size] += own * max(one - own * total[x], zero)


@njit(nogil=True, cache=True)
def block_sums(images: np.ndarray, total: np.ndarray) -> None:
    """Sum the pixels of each 2 x 2 block."""
    n, ny, nx = images.shape
    for i in range(n):
        for y in range(ny):
            for x in range(nx):
                total[i, y // 2, x // 2] += images[i, y, x]


@njit(nogil=True, cache=True)
def compress(response: np.ndarray, power: np.ndarray, cap: float, floor: float) -> None:
    """Hold back responses of more than ``cap`` sigma: beyond it they grow as a log.

    One epoch then cannot outvote the others, yet its maxima stay where they are.
    """
    ny, nx = response.shape
    quarter, one = np.float32(0.25), np.float32(1.0)
    square, least = np.float32(cap * cap), np.float32(floor)
    for y in range(ny):
        for x in range(nx):
            value = response[y, x]
            limit = square * max(power[y, x], least)
            if value * value > limit:
                limit = np.sqrt(limit)
                more = one + quarter * np.log(abs(value) / limit)
                response[y, x] = limit * more if value > 0.0 else -limit * more


@njit(nogil=True, cache=True, error_model="numpy")
def sample_trial(
    response: np.ndarray,
    power: np.ndarray,
    margin: int,
    shape: tuple[int, int],
    steps: np.ndarray,
    gains: np.ndarray,
    floor: float,
    stride: int,
    values: np.ndarray,
) -> int:
    """Write one trial's significance on a sparse lattice; return how many."""
    n = response.shape[0]
    count = 0
    for y in range(margin, margin + shape[0], stride):
        for x in range(margin, margin + shape[1], stride):
            a = b = 0.0
            for i in range(n):
                a += response[i, y + steps[i, 0], x + steps[i, 1]]
                b += gains[i] * power[i, y + steps[i, 0], x + steps[i, 1]]
            if b > floor:
                values[count] = a / np.sqrt(b)
                count += 1
    return count


# The check for division by zero would keep the loops from being vectorised.
@njit(nogil=True, cache=True, error_model="numpy")
def keep_best(
    best: np.ndarray,
    code: np.ndarray,
    response: np.ndarray,
    power: np.ndarray,
    margin: int,
    steps: np.ndarray,
    gains: np.ndarray,
    inverse: float,
    floor: float,
    number: int,
) -> None:
    """Stack one trial at every place; keep its squared significance where greatest.

    ``steps[i] = (dy, dx)`` is where epoch i is looked up, ``gains[i]`` what the
    static sky leaves of its weight, ``inverse`` the calibration 1 / sigma^2.
    """
    n, n_cols = response.shape[0], best.shape[1]
    top, bottom = np.empty(n_cols, np.float32), np.empty(n_cols, np.float32)
    scale, least = np.float32(inverse), np.float32(floor)
    name, zero = np.int16(number), np.float32(0.0)
    for row in range(best.shape[0]):
        top[:] = zero
        bottom[:] = zero
        for i in range(n):
            y, x = row + margin + steps[i, 0], margin + steps[i, 1]
            signal = response[i, y, x : x + n_cols]
            weight = power[i, y, x : x + n_cols]
            gain = np.float32(gains[i])
            for col in range(n_cols):
                top[col] += signal[col]
                bottom[col] += gain * weight[col]
        strongest, which = best[row], code[row]
        for col in range(n_cols):
            a = max(top[col], zero)
            value = a * a / max(bottom[col], least) * scale
            better = bottom[col] > least and value > strongest[col]
            strongest[col] = value if better else strongest[col]
            which[col] = name if better else which[col]


@njit(nogil=True, cache=True)
def ridge_sums(
    pixels: np.ndarray,
    variance: np.ndarray,
    mask: np.ndarray,
    shifts: np.ndarray,
    x0: float,
    y0: float,
    angle: float,
    curvature: float,
    sigma: float,
    block: float,
    matched: np.ndarray,
    power: np.ndarray,
    area: np.ndarray,
) -> None:
    """Match a moving ridge to all epochs, block by block along it.

    The ridge is the parabola of the given curvature through (x0, y0), Gaussian
    across; at epoch i it lies ``shifts[i]`` further along the normal.  Per block:
    ``matched[i] = sum w_i m_i R_i``, ``power[i, j] = sum (delta_ij w_i m_i^2 -
    w_i w_j m_i m_j / sum_k w_k)`` and ``area[i]``, the share of m_i on good pixels.
    """
    n, ny, nx = pixels.shape
    n_blocks = matched.shape[0]
    half = 0.5 * n_blocks * block
    reach = 3.2 * sigma
    cosine, sine = np.cos(angle), np.sin(angle)
    sag = 0.5 * curvature * half * half
    low = shifts.min() - reach + min(sag, 0.0)
    high = shifts.max() + reach + max(sag, 0.0)
    middle, spread = 0.5 * (low + high), 0.5 * (high - low)
    reach_y = abs(sine) * spread + abs(cosine) * half
    centre_y, centre_x = y0 + middle * sine, x0 + middle * cosine
    model, w, full = np.zeros(n), np.zeros(n), np.zeros((n_blocks, n))
    matched[:], power[:], area[:] = 0.0, 0.0, 0.0
    for y in range(
        max(int(np.ceil(centre_y - reach_y)), 0),
        min(int(np.floor(centre_y + reach_y)) + 1, ny),
    ):
        dy = y - centre_y
        left, right = -1e9, 1e9
        if abs(cosine) > 1e-6:
            at = -dy * sine / cosine
            left = max(left, at - spread / abs(cosine))
            right = min(right, at + spread / abs(cosine))
        if abs(sine) > 1e-6:
            at = dy * cosine / sine
            left = max(left, at - half / abs(sine))
            right = min(right, at + half / abs(sine))
        for x in range(
            max(int(np.ceil(centre_x + left)), 0),
            min(int(np.floor(centre_x + right)) + 1, nx),
        ):
            along = (y - y0) * cosine - (x - x0) * sine
            k = int(np.floor((along + half) / block))
            if k < 0 or k >= n_blocks:
                continue
            turn = curvature * along
            lean = 1.0 / np.sqrt(1.0 + turn * turn)
            across = (x - x0) * cosine + (y - y0) * sine - 0.5 * turn * along
            lit = False
            for i in range(n):
                d = (across - shifts[i]) * lean
                model[i] = 0.0
                if abs(d) < reach:
                    model[i] = np.exp(-0.5 * (d / sigma) ** 2)
                    full[k, i] += model[i]
                    lit = True
            if not lit:
                continue
            total = mean = 0.0
            for i in range(n):
                w[i] = 1.0 / variance[i, y, x] if mask[i, y, x] == 0 else 0.0
                total += w[i]
                mean += w[i] * pixels[i, y, x]
            if total <= 0.0:
                continue
            mean /= total
            for i in range(n):
                wm = w[i] * model[i]
                if wm == 0.0:
                    continue
                area[k, i] += model[i]
                matched[k, i] += wm * (pixels[i, y, x] - mean)
                power[k, i, i] += wm * model[i]
                for j in range(n):
                    power[k, i, j] -= wm * w[j] * model[j] / total
    for k in range(n_blocks):
        for i in range(n):
            area[k, i] /= max(full[k, i], 1e-9)


@njit(nogil=True, cache=True)
def mask_ridge(
    mask: np.ndarray,
    x0: float,
    y0: float,
    angle: float,
    curvature: float,
    first: float,
    last: float,
    half_width: float,
    bit: int,
) -> None:
    """Mark the pixels within half a width of a parabola's stretch."""
    ny, nx = mask.shape
    cosine, sine = np.cos(angle), np.sin(angle)
    far = max(abs(first), abs(last))
    reach = far + half_width + 0.5 * abs(curvature) * far * far
    for y in range(max(int(y0 - reach), 0), min(int(y0 + reach) + 2, ny)):
        for x in range(max(int(x0 - reach), 0), min(int(x0 + reach) + 2, nx)):
            along = (y - y0) * cosine - (x - x0) * sine
            if along < first or along > last:
                continue
            across = (x - x0) * cosine + (y - y0) * sine
            if abs(across - 0.5 * curvature * along * along) < half_width:
                mask[y, x] |= np.uint16(bit)
