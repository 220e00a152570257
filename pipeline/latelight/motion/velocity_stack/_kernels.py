"""Compiled loops of the search along trial velocities."""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = [
    "block_rows",
    "block_sums",
    "clipped_sums",
    "compress",
    "keep_best",
    "project_rows",
    "ridge_sums",
    "sample_trial",
    "subtract_smooth",
    "take_out_ridge",
]


@njit(nogil=True, cache=True)
def clipped_sums(
    pixels: np.ndarray,
    variance: np.ndarray,
    mask: np.ndarray,
    limit: float,
    size: int,
    top: np.ndarray,
    bottom: np.ndarray,
) -> None:
    """Sum w y and w over blocks, but for pixels of more than ``limit`` sigma."""
    ny, nx = pixels.shape
    square = limit * limit
    for y in range(ny):
        for x in range(nx):
            value = pixels[y, x]
            if mask[y, x] == 0 and value * value < square * variance[y, x]:
                w = 1.0 / variance[y, x]
                top[y // size, x // size] += w * value
                bottom[y // size, x // size] += w


@njit(nogil=True, cache=True)
def subtract_smooth(
    pixels: np.ndarray,
    mask: np.ndarray,
    smooth: np.ndarray,
    size: int,
    out: np.ndarray,
    first: int,
    last: int,
) -> None:
    """Subtract what is given at the middles of blocks, linear between them."""
    nx = pixels.shape[1]
    n_rows, n_cols = smooth.shape
    for y in range(first, last):
        v = min(max((y + 0.5) / size - 0.5, 0.0), n_rows - 1.0)
        row = min(int(v), max(n_rows - 2, 0))
        below = min(row + 1, n_rows - 1)
        fy = v - row
        for x in range(nx):
            u = min(max((x + 0.5) / size - 0.5, 0.0), n_cols - 1.0)
            col = min(int(u), max(n_cols - 2, 0))
            right = min(col + 1, n_cols - 1)
            fx = u - col
            near = (1.0 - fx) * smooth[row, col] + fx * smooth[row, right]
            far = (1.0 - fx) * smooth[below, col] + fx * smooth[below, right]
            level = (1.0 - fy) * near + fy * far
            out[y, x] = pixels[y, x] - level if mask[y, x] == 0 else 0.0


@njit(nogil=True, cache=True)
def project_rows(
    pixels: np.ndarray,
    variance: np.ndarray,
    mask: np.ndarray,
    weight: np.ndarray,
    signal: np.ndarray,
    total: np.ndarray,
    first: int,
    last: int,
) -> None:
    """Write w, w R and the sum of w over the epochs, for some rows."""
    n, _, nx = pixels.shape
    mean = np.zeros(nx, np.float32)
    zero, one = np.float32(0.0), np.float32(1.0)
    for y in range(first, last):
        mean[:] = zero
        total[y] = zero
        for i in range(n):
            for x in range(nx):
                w = one / variance[i, y, x] if mask[i, y, x] == 0 else zero
                weight[i, y, x] = w
                total[y, x] += w
                mean[x] += w * pixels[i, y, x]
        for x in range(nx):
            mean[x] = mean[x] / total[y, x] if total[y, x] > zero else zero
        for i in range(n):
            for x in range(nx):
                signal[i, y, x] = weight[i, y, x] * (pixels[i, y, x] - mean[x])


@njit(nogil=True, cache=True)
def block_rows(
    weight: np.ndarray,
    signal: np.ndarray,
    total: np.ndarray,
    size: int,
    signal_sum: np.ndarray,
    weight_sum: np.ndarray,
    first: int,
    last: int,
) -> None:
    """Sum w R and w (1 - w / sum w) over blocks, for some rows of blocks."""
    n, ny, nx = weight.shape
    zero = np.float32(0.0)
    for i in range(n):
        for row in range(first, last):
            for y in range(row * size, min((row + 1) * size, ny)):
                for col in range(signal_sum.shape[2]):
                    for x in range(col * size, min((col + 1) * size, nx)):
                        w = weight[i, y, x]
                        if w > zero:
                            signal_sum[i, row, col] += signal[i, y, x]
                            weight_sum[i, row, col] += w - w * w / total[y, x]


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
def row_span(
    dy: float, cosine: float, sine: float, reach_u: float, reach_s: float
) -> tuple[float, float]:
    """Return where a row crosses the box |across| <= reach_u, |along| <= reach_s."""
    low, high = -1e9, 1e9
    if abs(cosine) > 1e-6:
        middle = -dy * sine / cosine
        low = max(low, middle - reach_u / abs(cosine))
        high = min(high, middle + reach_u / abs(cosine))
    if abs(sine) > 1e-6:
        middle = dy * cosine / sine
        low = max(low, middle - reach_s / abs(sine))
        high = min(high, middle + reach_s / abs(sine))
    return low, high


_REACH = 3.0
_FINE = 512.0
# exp(-d^2 / 2) by d^2, in steps of 1/512: right to 0.05 %.
_GAUSSIAN = np.exp(-0.5 * (np.arange(int(_REACH**2 * _FINE) + 1) + 0.5) / _FINE)


@njit(nogil=True, cache=True)
def ridge_sums(
    weight: np.ndarray,
    signal: np.ndarray,
    total: np.ndarray,
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
    n, ny, nx = weight.shape
    n_blocks = matched.shape[0]
    half = 0.5 * n_blocks * block
    reach = _REACH * sigma
    limit = _REACH * _REACH
    cosine, sine = np.cos(angle), np.sin(angle)
    inverse = 1.0 / sigma
    sag = 0.25 * curvature * half * half
    spread = abs(sag) + reach * np.sqrt(1.0 + (curvature * half) ** 2)
    reach_y = abs(sine) * spread + abs(cosine) * half
    full = np.zeros((n_blocks, n))
    matched[:], power[:], area[:] = 0.0, 0.0, 0.0
    for i in range(n):
        middle_x = x0 + (shifts[i] + sag) * cosine
        middle_y = y0 + (shifts[i] + sag) * sine
        for y in range(
            max(int(np.ceil(middle_y - reach_y)), 0),
            min(int(np.floor(middle_y + reach_y)) + 1, ny),
        ):
            low, high = row_span(y - middle_y, cosine, sine, spread, half)
            for x in range(
                max(int(np.ceil(middle_x + low)), 0),
                min(int(np.floor(middle_x + high)) + 1, nx),
            ):
                along = (y - y0) * cosine - (x - x0) * sine
                k = int(np.floor((along + half) / block))
                if k < 0 or k >= n_blocks:
                    continue
                turn = curvature * along
                scale = inverse / (1.0 + 0.5 * turn * turn)  # leaning ridges look wider
                across = (x - x0) * cosine + (y - y0) * sine - 0.5 * turn * along
                d = (across - shifts[i]) * scale
                if d * d >= limit:
                    continue
                model = _GAUSSIAN[int(d * d * _FINE)]
                full[k, i] += model
                w = weight[i, y, x]
                if w <= 0.0:
                    continue
                area[k, i] += model
                matched[k, i] += model * signal[i, y, x]
                power[k, i, i] += w * model * model
                share = w * model / total[y, x]
                power[k, i, i] -= share * w * model
                for j in range(n):
                    d = (across - shifts[j]) * scale
                    if j != i and d * d < limit:
                        other = _GAUSSIAN[int(d * d * _FINE)]
                        power[k, i, j] -= share * weight[j, y, x] * other
    for k in range(n_blocks):
        for i in range(n):
            area[k, i] /= max(full[k, i], 1e-9)


@njit(nogil=True, cache=True)
def take_out_ridge(
    pixels: np.ndarray,
    weight: np.ndarray,
    signal: np.ndarray,
    total: np.ndarray,
    epoch: int,
    x0: float,
    y0: float,
    angle: float,
    curvature: float,
    first: float,
    last: float,
    half_width: float,
) -> None:
    """Give the pixels of one epoch along a parabola no weight, and project anew."""
    n, ny, nx = pixels.shape
    cosine, sine = np.cos(angle), np.sin(angle)
    far = max(abs(first), abs(last))
    reach = far + half_width + 0.5 * abs(curvature) * far * far
    for y in range(max(int(y0 - reach), 0), min(int(y0 + reach) + 2, ny)):
        for x in range(max(int(x0 - reach), 0), min(int(x0 + reach) + 2, nx)):
            along = (y - y0) * cosine - (x - x0) * sine
            if along < first or along > last:
                continue
            across = (x - x0) * cosine + (y - y0) * sine
            if abs(across - 0.5 * curvature * along * along) > half_width:
                continue
            weight[epoch, y, x] = 0.0
            w = mean = 0.0
            for i in range(n):
                w += weight[i, y, x]
                mean += weight[i, y, x] * pixels[i, y, x]
            mean = mean / w if w > 0.0 else 0.0
            total[y, x] = w
            for i in range(n):
                signal[i, y, x] = weight[i, y, x] * (pixels[i, y, x] - mean)
