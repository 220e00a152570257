"""Loops of the trail search: binning, sums along lines, samples along one line."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

__all__ = [
    "across_profile",
    "best_line",
    "binned_rows",
    "line_sum",
    "line_transform",
]


@njit(nogil=True, cache=True)
def binned_rows(
    pixels: Any,
    sky: Any,
    mask: Any,
    sigma: float,
    size: int,
    out: Any,
    first: int,
    last: int,
) -> None:
    """Average good pixels in squares, in sigma of the average; zero where few are."""
    for row in range(first, last):
        for col in range(out.shape[1]):
            total, n = 0.0, 0
            for y in range(row * size, (row + 1) * size):
                for x in range(col * size, (col + 1) * size):
                    if mask[y, x] == 0:
                        total += pixels[y, x] - sky[y, x]
                        n += 1
            out[row, col] = 0.0 if 2 * n < size * size else total / np.sqrt(n) / sigma


@njit(nogil=True, cache=True)
def line_transform(image: Any, padded: int, sums: Any, spare: Any) -> Any:
    """Sum an image along every line from steep to 45 degrees, one way.

    Approximate discrete Radon transform (Brady 1998, SIAM J. Comput. 27, 107, DOI
    10.1137/S0097539793256673; for trails: Nir, Zackay & Ofek 2018, AJ 156, 229):
    sums over two neighbouring strips of rows are joined to one of a strip twice as
    high, log2(padded) times.

    ``padded`` is a power of two, at least the number of rows; ``sums`` and ``spare``
    have shape (padded, columns + padded).  Returns whichever of them holds the
    result: row s, column padded + x0 is the sum over the line that starts at
    column x0 of the first row and ends s columns further in the last.
    """
    ny, nx = image.shape
    sums[:] = 0.0
    sums[:ny, padded:] = image
    width = nx + padded
    height = 1
    while height < padded:
        for strip in range(padded // (2 * height)):
            top = 2 * strip * height
            for slope in range(2 * height):
                half = slope // 2
                shift = slope - half
                upper = sums[top + half]
                lower = sums[top + height + half]
                joined = spare[top + slope]
                for x in range(width - shift):
                    joined[x] = upper[x] + lower[x + shift]
                for x in range(width - shift, width):
                    joined[x] = upper[x]
        sums, spare = spare, sums
        height *= 2
    return sums


@njit(nogil=True, cache=True)
def best_line(
    sums: Any, ny: int, nx: int, shortest: float, samples: Any, best: Any
) -> int:
    """Find the most significant line of a transform.

    ``best`` gets significance, slope, x0 and width (1 or 2 lines side by side);
    ``samples`` every few significances, to learn their scatter; the number of
    samples is returned.  Lines shorter than ``shortest`` do not count.
    """
    padded = sums.shape[0]
    best[0] = 0.0
    taken = 0
    for slope in range(padded):
        per_row = slope / (padded - 1.0)
        stretch = np.sqrt(1.0 + per_row * per_row)
        fewest = np.sqrt(shortest / stretch)
        for k in range(sums.shape[1] - 1):
            x0 = k - padded
            sampled = (k + 7 * slope) % 61 == 0 and taken < samples.size
            if (
                not sampled
                and sums[slope, k] + max(sums[slope, k + 1], 0.0) < best[0] * fewest
            ):
                continue
            # Rows on which the line lies inside the image.
            enter = 0.0 if x0 >= 0 else (-x0 / per_row if per_row > 0.0 else np.inf)
            leave = ny if per_row == 0.0 else min(float(ny), (nx - x0) / per_row)
            rows = leave - enter
            if rows * stretch < shortest:
                continue
            one = sums[slope, k] / np.sqrt(rows)
            two = (sums[slope, k] + sums[slope, k + 1]) / np.sqrt(2.0 * rows)
            if sampled:
                samples[taken] = one
                taken += 1
            if max(one, two) > best[0]:
                best[0] = max(one, two)
                best[1] = slope
                best[2] = x0
                best[3] = 1.0 if one >= two else 2.0
    return taken


@njit(nogil=True, cache=True)
def line_sum(image: Any, ends: Any, values: Any) -> float:
    """Sample an image along a line by bilinear interpolation; zero outside.

    ``ends`` holds y0, x0, y1, x1.
    Fills ``values`` with the samples, one a pixel or so; returns their sum.
    """
    ny, nx = image.shape
    n = values.size
    total = 0.0
    for i in range(n):
        t = (i + 0.5) / n
        y = ends[0] + t * (ends[2] - ends[0])
        x = ends[1] + t * (ends[3] - ends[1])
        row, col = int(np.floor(y)), int(np.floor(x))
        values[i] = 0.0
        if 0 <= row < ny - 1 and 0 <= col < nx - 1:
            v, u = y - row, x - col
            values[i] = (1.0 - v) * (
                (1.0 - u) * image[row, col] + u * image[row, col + 1]
            ) + v * ((1.0 - u) * image[row + 1, col] + u * image[row + 1, col + 1])
            total += values[i]
    return total


@njit(nogil=True, cache=True)
def across_profile(
    pixels: Any,
    sky: Any,
    mask: Any,
    sigma: float,
    highest: float,
    ends: Any,
    profile: Any,
) -> None:
    """Average the height across a line, in sigma; stars, higher still, are left out.

    ``profile`` has an odd size, its middle is on the line; ``ends`` holds y0, x0, y1,
    x1.
    """
    ny, nx = pixels.shape
    dy, dx = ends[2] - ends[0], ends[3] - ends[1]
    length = np.sqrt(dy * dy + dx * dx)
    n = int(length)
    middle = profile.size // 2
    for j in range(profile.size):
        total, used = 0.0, 0
        for i in range(n):
            y = int(np.rint(ends[0] + dy * i / n + (j - middle) * dx / length))
            x = int(np.rint(ends[1] + dx * i / n - (j - middle) * dy / length))
            if 0 <= y < ny and 0 <= x < nx and mask[y, x] == 0:
                z = (pixels[y, x] - sky[y, x]) / sigma
                if -3.0 < z < highest:
                    total += z
                    used += 1
        profile[j] = total / used if used else 0.0
