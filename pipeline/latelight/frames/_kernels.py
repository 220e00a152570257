"""Loops over pixels: each writes rows ``first <= row < last`` and nothing else."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

__all__ = [
    "HISTOGRAM_STEPS_PER_SIGMA",
    "bilinear_rows",
    "cell_levels",
    "column_sums",
    "difference_histogram",
    "fill_layers",
    "flat_rows",
    "row_sums",
    "variance_rows",
]

# Resolution of the histogram of |difference|, in steps of the first-guess sigma.
HISTOGRAM_STEPS_PER_SIGMA = 32.0


@njit(nogil=True, cache=True)
def cell_levels(
    pixels: Any, mask: Any, cell: int, levels: Any, first: int, last: int
) -> None:
    """Clipped median of each cell of good pixels; NaN where too few are good.

    The clipping width is measured below the median, where no star adds to it.
    """
    ny, nx = pixels.shape
    step = max(1, cell // 16)
    values = np.empty((cell // step + 1) ** 2, np.float32)
    for row in range(first, last):
        for col in range(levels.shape[1]):
            y0, x0 = row * cell, col * cell
            n, total = 0, 0
            for y in range(y0, min(y0 + cell, ny), step):
                for x in range(x0, min(x0 + cell, nx), step):
                    total += 1
                    if mask[y, x] == 0:
                        values[n] = pixels[y, x]
                        n += 1
            if 5 * n < total or n < 5:
                levels[row, col] = np.nan
                continue
            ordered = np.sort(values[:n])
            low, high = 0, n
            for _ in range(6):
                middle = ordered[(low + high) // 2]
                width = 2.5 * (middle - ordered[low + int(0.1587 * (high - low))])
                new_low = np.searchsorted(ordered, middle - width)
                new_high = np.searchsorted(ordered, middle + width, side="right")
                if new_high - new_low < 5 or (new_low == low and new_high == high):
                    break
                low, high = new_low, new_high
            levels[row, col] = 0.5 * (
                ordered[(low + high) // 2] + ordered[(low + high - 1) // 2]
            )


@njit(nogil=True, cache=True)
def bilinear_rows(
    nodes: Any, y0: float, x0: float, step: float, out: Any, first: int, last: int
) -> None:
    """Interpolate a grid of nodes, held constant outside, to every pixel.

    Node (i, j) lies at pixel (y0 + i step, x0 + j step).
    """
    my, mx = nodes.shape
    for y in range(first, last):
        v = min(max((y - y0) / step, 0.0), my - 1.0)
        i = min(int(v), max(my - 2, 0))
        i2 = min(i + 1, my - 1)
        v -= i
        for j in range(mx - 1 if mx > 1 else 1):
            j2 = min(j + 1, mx - 1)
            left = (1.0 - v) * nodes[i, j] + v * nodes[i2, j]
            right = (1.0 - v) * nodes[i, j2] + v * nodes[i2, j2]
            begin = 0 if j == 0 else int(np.ceil(x0 + j * step))
            end = out.shape[1] if j >= mx - 2 else int(np.ceil(x0 + (j + 1) * step))
            for x in range(max(begin, 0), min(end, out.shape[1])):
                u = min(max((x - x0) / step - j, 0.0), 1.0)
                out[y, x] = left + u * (right - left)


@njit(nogil=True, cache=True)
def _stencil(pixels: Any, y: int, x: int, step: int) -> float:
    """Return the 3 x 3 second difference at a spacing; unit noise gain."""
    north, south, west, east = y - step, y + step, x - step, x + step
    corners = (
        pixels[north, west]
        + pixels[north, east]
        + pixels[south, west]
        + pixels[south, east]
    )
    sides = pixels[north, x] + pixels[south, x] + pixels[y, west] + pixels[y, east]
    return (corners - 2.0 * sides + 4.0 * pixels[y, x]) / 6.0


@njit(nogil=True, cache=True)
def difference_histogram(
    pixels: Any,
    sky: Any,
    mask: Any,
    sigma: float,
    per_count: float,
    edges: Any,
    stride: int,
    counts: Any,
    squares: Any,
    heights: Any,
) -> None:
    """Histogram of |second difference| / sigma against the height above the sky.

    The difference is the stencil [[1, -2, 1], [-2, 4, -2], [1, -2, 1]] / 6
    (Immerkaer 1996, CVIU 64, 300, DOI 10.1006/cviu.1996.0060): unit noise gain,
    blind to planes and to parabolas along the axes, and uncorrelated with the
    mean of the same nine pixels, which gives the height.  Where the same stencil
    at twice the spacing, sixteen times as keen on structure, stands out of the
    noise, the pixel is left out.

    Bin k of ``counts``, ``squares`` (of the difference, in sigma) and ``heights``
    (counts) lies between ``edges[k]`` and ``edges[k + 1]``, in sigma; the last bin
    of all is the wider stencil on pixels of the first.
    """
    ny, nx = pixels.shape
    wide = counts.shape[0] - 1
    for y in range(2, ny - 2, stride):
        for x in range(2, nx - 2, stride):
            good = True
            mean = 0.0
            for dy in range(-1, 2):
                for dx in range(-1, 2):
                    good &= (mask[y + dy, x + dx] | mask[y + 2 * dy, x + 2 * dx]) == 0
                    mean += pixels[y + dy, x + dx]
            height = mean / 9.0 - sky[y, x]
            k = np.searchsorted(edges, height / sigma) - 1
            if not good or k < 0 or k >= wide:
                continue
            wider = abs(_stencil(pixels, y, x, 2))
            if wider > 3.5 * np.sqrt(sigma**2 + max(height, 0.0) * per_count):
                continue
            _count(counts, squares, k, abs(_stencil(pixels, y, x, 1)) / sigma)
            heights[k] += height
            if k == 0:
                _count(counts, squares, wide, wider / sigma)


@njit(nogil=True, cache=True)
def _count(counts: Any, squares: Any, k: int, value: float) -> None:
    step = min(int(value * HISTOGRAM_STEPS_PER_SIGMA), counts.shape[1] - 1)
    counts[k, step] += 1
    squares[k, step] += value * value


@njit(nogil=True, cache=True)
def variance_rows(
    pixels: Any,
    sky: Any,
    sky_variance: float,
    sky_level: float,
    per_count: float,
    floor: float,
    variance: Any,
    first: int,
    last: int,
) -> None:
    """Variance of each pixel, from counts whose own noise is averaged out.

    Blank pixels get the variance of the smooth sky; where the 3 x 3 binomial mean
    stands 2 sigma above it, its height is added as photon noise; and on stars so
    bright that a pixel knows itself (4 to 8 sigma), the pixel's own height.
    """
    ny, nx = pixels.shape
    for y in range(first, last):
        up, down = max(y - 1, 0), min(y + 1, ny - 1)
        for x in range(nx):
            left, right = max(x - 1, 0), min(x + 1, nx - 1)
            blank = max(sky_variance + (sky[y, x] - sky_level) * per_count, floor)
            mean = (
                pixels[up, left]
                + pixels[up, right]
                + pixels[down, left]
                + pixels[down, right]
                + 2.0 * (pixels[up, x] + pixels[down, x])
                + 2.0 * (pixels[y, left] + pixels[y, right])
                + 4.0 * pixels[y, x]
            ) / 16.0 - sky[y, x]
            # The binomial mean of nine pixels has 3/8 of the noise of one.
            if mean <= 0.75 * np.sqrt(blank):
                variance[y, x] = blank
                continue
            own = pixels[y, x] - sky[y, x]
            trust = min(max(0.25 * own / np.sqrt(blank) - 1.0, 0.0), 1.0)
            variance[y, x] = blank + per_count * (mean + trust * (own - mean))


@njit(nogil=True, cache=True)
def fill_layers(image: Any, todo: Any, ys: Any, xs: Any, layers: int) -> Any:
    """Fill listed pixels from their rim inwards, one layer of pixels at a time.

    A pixel gets the median of its eight neighbours that are good or filled, where
    there are at least three.  ``todo`` is non-zero at listed pixels and cleared
    as they are filled; the ones deeper than ``layers`` are left and counted.
    """
    ny, nx = image.shape
    values = np.empty(8, image.dtype)
    left = ys.size
    waiting_y, waiting_x = ys.copy(), xs.copy()
    layer_y, layer_x = np.empty_like(ys), np.empty_like(xs)
    layer = np.empty(ys.size, image.dtype)
    for _ in range(layers):
        ready, still = 0, 0
        for k in range(left):
            y, x = waiting_y[k], waiting_x[k]
            n = 0
            for row in range(max(y - 1, 0), min(y + 2, ny)):
                for col in range(max(x - 1, 0), min(x + 2, nx)):
                    if todo[row, col] == 0:
                        # Kept sorted as it grows.
                        place = n
                        while place > 0 and values[place - 1] > image[row, col]:
                            values[place] = values[place - 1]
                            place -= 1
                        values[place] = image[row, col]
                        n += 1
            if n >= 3:
                layer_y[ready], layer_x[ready] = y, x
                layer[ready] = 0.5 * (values[n // 2] + values[(n - 1) // 2])
                ready += 1
            else:
                waiting_y[still], waiting_x[still] = y, x
                still += 1
        for k in range(ready):
            image[layer_y[k], layer_x[k]] = layer[k]
            todo[layer_y[k], layer_x[k]] = 0
        left = still
        if ready == 0:
            break
    return left


@njit(nogil=True, cache=True)
def column_sums(
    pixels: Any,
    sky: Any,
    mask: Any,
    sigma: float,
    block: int,
    sums: Any,
    squares: Any,
    counts: Any,
    first: int,
    last: int,
) -> None:
    """Sum each column's height above the sky, block by block of rows.

    Heights are in sigma and pulled in to +-2, so that stars count for little.
    """
    ny, nx = pixels.shape
    scale = 1.0 / sigma
    for k in range(first, last):
        for y in range(k * block, min((k + 1) * block, ny)):
            for x in range(nx):
                if mask[y, x] == 0:
                    z = min(max((pixels[y, x] - sky[y, x]) * scale, -2.0), 2.0)
                    sums[k, x] += z
                    squares[k, x] += z * z
                    counts[k, x] += 1.0


@njit(nogil=True, cache=True)
def row_sums(
    pixels: Any,
    sky: Any,
    mask: Any,
    sigma: float,
    block: int,
    sums: Any,
    squares: Any,
    counts: Any,
    first: int,
    last: int,
) -> None:
    """Sum each row's height above the sky, block by block of columns."""
    nx = pixels.shape[1]
    scale = 1.0 / sigma
    for y in range(first, last):
        for k in range(sums.shape[1]):
            total, square, n = 0.0, 0.0, 0.0
            for x in range(k * block, min((k + 1) * block, nx)):
                if mask[y, x] == 0:
                    z = min(max((pixels[y, x] - sky[y, x]) * scale, -2.0), 2.0)
                    total += z
                    square += z * z
                    n += 1.0
            sums[y, k] = total
            squares[y, k] = square
            counts[y, k] = n


@njit(nogil=True, cache=True)
def flat_rows(pixels: Any, flat: Any, first: int, last: int) -> None:
    """Mark pixels whose four neighbours across hold exactly the same value."""
    ny, nx = pixels.shape
    for y in range(max(first, 1), min(last, ny - 1)):
        for x in range(1, nx - 1):
            p = pixels[y, x]
            flat[y, x] = (
                pixels[y, x - 1] == p
                and pixels[y, x + 1] == p
                and pixels[y - 1, x] == p
                and pixels[y + 1, x] == p
                and pixels[y - 1, x - 1] == p
                and pixels[y + 1, x + 1] == p
                and pixels[y - 1, x + 1] == p
                and pixels[y + 1, x - 1] == p
            )
