"""Compiled loops of the fit of one arc."""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = [
    "block_matches",
    "lobe_sums",
    "polar_sums",
    "search_bends",
    "search_lobes",
]


@njit(nogil=True, cache=True)
def row_span(
    dy: float, cosine: float, sine: float, reach_u: float, reach_s: float
) -> tuple[float, float]:
    """Return where a row crosses the strips |u| <= reach_u and |s| <= reach_s."""
    high = abs(cosine) * reach_u + abs(sine) * reach_s
    low = -high
    if abs(cosine) > 1e-6:
        middle = -dy * sine / cosine
        low = max(low, middle - reach_u / abs(cosine))
        high = min(high, middle + reach_u / abs(cosine))
    if abs(sine) > 1e-6:
        middle = dy * cosine / sine
        low = max(low, middle - reach_s / abs(sine))
        high = min(high, middle + reach_s / abs(sine))
    return low, high


@njit(nogil=True, cache=True)
def arc_length(s: float, ahead: float, turn: float, curvature: float) -> float:
    """Return atan2(turn, ahead) / curvature, for turn = curvature s."""
    if abs(turn) < 0.3 * ahead:  # the series is right to 1e-6
        t2 = (turn / ahead) ** 2
        return s / ahead * (1.0 - t2 * (1.0 / 3.0 - t2 * (0.2 - t2 / 7.0)))
    if abs(curvature) > 1e-9:
        return np.arctan2(turn, ahead) / curvature
    return s


@njit(nogil=True, cache=True)
def polar_sums(
    pixels: np.ndarray,
    variance: np.ndarray,
    mask: np.ndarray,
    x0: float,
    y0: float,
    cosine: float,
    sine: float,
    curvature: float,
    block: float,
    signal: np.ndarray,
    weight: np.ndarray,
    total: np.ndarray,
) -> None:
    """Sum D/V, 1/V and the good pixels of each (block along, pixel across).

    Every pixel falls into exactly one bin, so the sums keep the exact noise.
    Coordinates are those of the circle of the given curvature through (x0, y0)
    with normal (cosine, sine): u across, s along, both zero there.
    """
    n_blocks, n_across = signal.shape
    half_length = 0.5 * n_blocks * block
    half_height = n_across // 2
    ny, nx = pixels.shape
    # Chord and sagitta of the outermost circle bound the box; so does all of it.
    outer = 1.0 + abs(curvature) * half_height
    reach_u = 0.5 * outer * abs(curvature) * half_length * half_length
    reach_s = outer * half_length
    if abs(curvature) > 1e-9:
        reach_u = min(reach_u, 2.0 / abs(curvature))
        reach_s = min(reach_s, half_height + 1.0 / abs(curvature))
    reach_u += half_height
    reach_y = abs(sine) * reach_u + abs(cosine) * reach_s
    for y in range(
        max(int(np.floor(y0 - reach_y)), 0), min(int(np.ceil(y0 + reach_y)) + 1, ny)
    ):
        dy = y - y0
        low, high = row_span(dy, cosine, sine, reach_u, reach_s)
        for x in range(
            max(int(np.floor(x0 + low)), 0), min(int(np.ceil(x0 + high)) + 1, nx)
        ):
            dx = x - x0
            u = dx * cosine + dy * sine
            s = dy * cosine - dx * sine
            ahead = 1.0 - curvature * u
            turn = curvature * s
            root = np.sqrt(ahead * ahead + turn * turn)
            if root <= 0.1:  # too near the centre of the circle
                continue
            across = (2.0 * u - curvature * (u * u + s * s)) / (1.0 + root)
            i_across = int(np.floor(across + half_height + 0.5))
            if i_across < 0 or i_across >= n_across:
                continue
            along = arc_length(s, ahead, turn, curvature)
            i_block = int(np.floor((along + half_length) / block))
            if i_block < 0 or i_block >= n_blocks:
                continue
            if mask[y, x] == 0:
                total[i_block, i_across] += 1.0
                inverse = 1.0 / variance[y, x]
                signal[i_block, i_across] += pixels[y, x] * inverse
                weight[i_block, i_across] += inverse


@njit(nogil=True, cache=True)
def lobe_sums(
    signal: np.ndarray,
    weight: np.ndarray,
    shapes: np.ndarray,
    half_widths: np.ndarray,
    matched: np.ndarray,
    power: np.ndarray,
    mass: np.ndarray,
) -> None:
    """Correlate a profile with every lobe shape centred on every pixel.

    ``matched = sum A E``, ``power = sum W E^2`` and ``mass = sum W E``.
    """
    n_across = signal.size
    middle = shapes.shape[1] // 2
    for k in range(shapes.shape[0]):
        half = half_widths[k]
        for centre in range(n_across):
            a = b = c = 0.0
            for i in range(max(-half, -centre), min(half + 1, n_across - centre)):
                e = shapes[k, middle + i]
                we = weight[centre + i] * e
                a += signal[centre + i] * e
                b += we * e
                c += we
            matched[k, centre] = a
            power[k, centre] = b
            mass[k, centre] = c


@njit(nogil=True, cache=True)
def search_lobes(
    matched: np.ndarray,
    power: np.ndarray,
    mass: np.ndarray,
    overlap: np.ndarray,
    signal_sum: float,
    weight_sum: float,
    least: np.ndarray,
    reach: int,
    result: np.ndarray,
) -> None:
    """Find the pair of opposite lobes, or the single lobe, that fits best.

    The constant background is projected out.  ``overlap[k, d]`` is the
    correlation of shape k with itself at distance d, ``least[k]`` the least
    distance tried.  One lobe lies within ``reach`` pixels of the middle.  Rows of
    ``result``: gain in chi-square, shape, place and amplitude of the positive
    lobe, then of the negative one; row 0 the best pair, row 1 the best single.
    """
    n_shapes, n_across = matched.shape
    middle = n_across // 2
    n_shifts = overlap.shape[1]
    result[:, 0] = 0.0
    for k in range(n_shapes):
        for first in range(middle - reach, middle + reach + 1):
            b1 = power[k, first] - mass[k, first] ** 2 / weight_sum
            if b1 <= 0.05 * power[k, middle] or b1 <= 0.0:
                continue
            a1 = matched[k, first] - mass[k, first] * signal_sum / weight_sum
            gain = a1 * a1 / b1
            if gain > result[1, 0]:
                result[1, 0], result[1, 1] = gain, k
                result[1, 2], result[1, 3] = first, a1 / b1
            for shift in range(-n_shifts + 1, n_shifts):
                if abs(shift) < least[k]:
                    continue
                second = first + shift
                if second < 0 or second >= n_across:
                    continue
                b2 = power[k, second] - mass[k, second] ** 2 / weight_sum
                if b2 <= 0.1 * b1:
                    continue
                a2 = matched[k, second] - mass[k, second] * signal_sum / weight_sum
                cross = overlap[k, abs(shift)] * np.sqrt(
                    power[k, first] * power[k, second]
                )
                cross -= mass[k, first] * mass[k, second] / weight_sum
                determinant = b1 * b2 - cross * cross
                if determinant <= 1e-3 * b1 * b2:
                    continue
                p1 = (b2 * a1 - cross * a2) / determinant
                p2 = (b1 * a2 - cross * a1) / determinant
                if p1 * p2 >= 0.0:
                    continue
                gain = p1 * a1 + p2 * a2
                if gain > result[0, 0]:
                    # The positive lobe first.
                    one = (p1 > 0.0) == (first < second)
                    low, high = min(first, second), max(first, second)
                    result[0, 0], result[0, 1] = gain, k
                    result[0, 2] = low if one else high
                    result[0, 3] = max(p1, p2)
                    result[0, 4] = high if one else low
                    result[0, 5] = min(p1, p2)


@njit(nogil=True, cache=True)
def block_matches(
    signal: np.ndarray,
    weight: np.ndarray,
    template: np.ndarray,
    first: int,
    last: int,
    matched: np.ndarray,
    power: np.ndarray,
) -> None:
    """Match a profile to every block of an arc, shifted across by every pixel.

    ``template[first:last]`` is where the profile differs from zero; column
    ``shift + n_shifts // 2`` of the results belongs to that shift.
    """
    n_blocks, n_across = signal.shape
    half = matched.shape[1] // 2
    for i in range(n_blocks):
        for shift in range(-half, half + 1):
            a = b = 0.0
            for n in range(max(first, -shift), min(last, n_across - shift)):
                e = template[n]
                a += signal[i, n + shift] * e
                b += weight[i, n + shift] * e * e
            matched[i, half + shift] = a
            power[i, half + shift] = b


@njit(nogil=True, cache=True)
def search_bends(
    matched: np.ndarray,
    power: np.ndarray,
    along: np.ndarray,
    slopes: np.ndarray,
    bends: np.ndarray,
    anchor_first: int,
    anchor_last: int,
    result: np.ndarray,
) -> None:
    """Find the slope, bend and stretch of blocks that match a profile best.

    Block i is shifted by ``slope * along[i] + bend * along[i]^2 / 2``; the stretch
    overlaps blocks ``anchor_first`` to ``anchor_last``.  ``result`` becomes gain
    in chi-square, slope, bend, first and last block (inclusive).
    """
    n_blocks = along.size
    half = matched.shape[1] // 2
    sum_a = np.zeros(n_blocks + 1)
    sum_b = np.zeros(n_blocks + 1)
    result[0] = 0.0
    for slope in slopes:
        for bend in bends:
            for i in range(n_blocks):
                shift = slope * along[i] + 0.5 * bend * along[i] * along[i]
                column = int(np.floor(shift + half + 0.5))
                a = b = 0.0
                if 0 <= column <= 2 * half:
                    a = matched[i, column]
                    b = power[i, column]
                sum_a[i + 1] = sum_a[i] + a
                sum_b[i + 1] = sum_b[i] + b
            for first in range(anchor_last + 1):
                if sum_b[first + 1] <= sum_b[first]:  # no arc ends on a masked block
                    continue
                for last in range(max(anchor_first, first + 1), n_blocks):
                    if sum_b[last + 1] <= sum_b[last]:
                        continue
                    a = sum_a[last + 1] - sum_a[first]
                    b = sum_b[last + 1] - sum_b[first]
                    if a > 0.0 and b > 0.0 and a * a > result[0] * b:
                        result[0] = a * a / b
                        result[1] = slope
                        result[2] = bend
                        result[3] = first
                        result[4] = last
