"""Loops over pixels that look for faults; rows ``first <= row < last`` only."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

__all__ = [
    "cosmic_ray_rows",
    "group_pixels",
    "grow_cosmic_rays",
    "mark_bleeds",
    "ray_profiles",
    "stamp_discs",
    "star_sharpness",
]


@njit(nogil=True, cache=True)
def star_sharpness(
    pixels: Any, sky: Any, mask: Any, sigma: float, height: float, out: Any
) -> int:
    """Collect how far star peaks drop to their neighbours, as a fraction.

    A star is a peak ``height`` above the sky with light on all four sides two
    pixels out.  ``out[k]`` gets the steeper of the two axes and of the two
    diagonals of star k; the number of stars found is returned.
    """
    ny, nx = pixels.shape
    side = 4.0 * sigma / np.sqrt(3.0)
    n = 0
    for y in range(3, ny - 3):
        for x in range(3, nx - 3):
            p = pixels[y, x]
            base = sky[y, x]
            if p - base < height or n == out.shape[0]:
                continue
            peak = True
            for dy in range(-2, 3):
                for dx in range(-2, 3):
                    near = abs(dy) < 2 and abs(dx) < 2
                    if mask[y + dy, x + dx] != 0 or (
                        near and pixels[y + dy, x + dx] > p
                    ):
                        peak = False
            if not peak:
                continue
            north, south, west, east = 0.0, 0.0, 0.0, 0.0
            for d in range(-1, 2):
                north += pixels[y - 2, x + d] - base
                south += pixels[y + 2, x + d] - base
                west += pixels[y + d, x - 2] - base
                east += pixels[y + d, x + 2] - base
            if min(min(north, south), min(west, east)) < 3.0 * side:
                continue
            along_x = p - 0.5 * (pixels[y, x - 1] + pixels[y, x + 1])
            along_y = p - 0.5 * (pixels[y - 1, x] + pixels[y + 1, x])
            rising = p - 0.5 * (pixels[y - 1, x - 1] + pixels[y + 1, x + 1])
            falling = p - 0.5 * (pixels[y - 1, x + 1] + pixels[y + 1, x - 1])
            # Along a trail it hardly drops: a star does in every direction.
            if min(along_x, along_y) < 0.3 * max(along_x, along_y):
                continue
            if min(rising, falling) < 0.3 * max(rising, falling):
                continue
            out[n, 0] = max(along_x, along_y) / (p - base)
            out[n, 1] = max(rising, falling) / (p - base)
            n += 1
    return n


@njit(nogil=True, cache=True)
def _too_sharp(
    pixels: Any,
    sky: Any,
    mask: Any,
    y: int,
    x: int,
    sky_variance: float,
    per_count: float,
    limit_axis: float,
    limit_diagonal: float,
    n_sigma: float,
) -> bool:
    """Whether a pixel stands above its sides as no star can, in any direction."""
    p = pixels[y, x]
    base = sky[y, x]
    for k in range(4):
        # West-east, north-south and the two diagonals.
        dy = 0 if k == 0 else 1
        dx = 0 if k == 1 else (-1 if k == 3 else 1)
        if mask[y + dy, x + dx] != 0 or mask[y - dy, x - dx] != 0:
            continue
        one, two = pixels[y + dy, x + dx], pixels[y - dy, x - dx]
        sides = 0.5 * (one + two)
        sigma = np.sqrt(sky_variance + max(sides - base, 0.0) * per_count)
        limit = limit_axis if k < 2 else limit_diagonal
        # Noise of the excess: the pixel's, and half of it again for two sides.
        excess = p - sides - limit * max(p - base, 0.0)
        noise = sigma * np.sqrt((1.0 - limit) ** 2 + 0.5)
        if excess > n_sigma * noise and p - max(one, two) > 2.0 * sigma:
            return True
    return False


@njit(nogil=True, cache=True)
def cosmic_ray_rows(
    pixels: Any,
    sky: Any,
    mask: Any,
    sky_variance: float,
    per_count: float,
    limit_axis: float,
    limit_diagonal: float,
    n_sigma: float,
    hits: Any,
    first: int,
    last: int,
) -> None:
    """Mark pixels sharper than any star in ``hits``."""
    ny, nx = pixels.shape
    height = n_sigma * np.sqrt(sky_variance)
    for y in range(max(first, 1), min(last, ny - 1)):
        for x in range(1, nx - 1):
            if pixels[y, x] - sky[y, x] > height and mask[y, x] == 0:
                hits[y, x] = _too_sharp(
                    pixels,
                    sky,
                    mask,
                    y,
                    x,
                    sky_variance,
                    per_count,
                    limit_axis,
                    limit_diagonal,
                    n_sigma,
                )


@njit(nogil=True, cache=True)
def grow_cosmic_rays(
    pixels: Any,
    cleaned: Any,
    sky: Any,
    mask: Any,
    sky_variance: float,
    per_count: float,
    limit_axis: float,
    limit_diagonal: float,
    n_sigma: float,
    ys: Any,
    xs: Any,
    hits: Any,
    new_ys: Any,
    new_xs: Any,
) -> int:
    """Test the neighbours of hits once the hits are taken away.

    ``cleaned`` holds the pixels with every hit replaced by the median of the good
    pixels round it; it is updated for the hits listed in ``ys, xs`` first.  New
    hits are marked, listed in ``new_ys, new_xs`` and counted.
    """
    ny, nx = pixels.shape
    around = np.empty(24)
    for k in range(ys.size):
        n = 0
        for y in range(max(ys[k] - 2, 0), min(ys[k] + 3, ny)):
            for x in range(max(xs[k] - 2, 0), min(xs[k] + 3, nx)):
                if mask[y, x] == 0 and hits[y, x] == 0:
                    around[n] = pixels[y, x]
                    n += 1
        cleaned[ys[k], xs[k]] = np.median(around[:n]) if n else sky[ys[k], xs[k]]
    found = 0
    for k in range(ys.size):
        for y in range(max(ys[k] - 1, 1), min(ys[k] + 2, ny - 1)):
            for x in range(max(xs[k] - 1, 1), min(xs[k] + 2, nx - 1)):
                if hits[y, x] != 0 or mask[y, x] != 0 or found == new_ys.size:
                    continue
                if _too_sharp(
                    cleaned,
                    sky,
                    mask,
                    y,
                    x,
                    sky_variance,
                    per_count,
                    limit_axis,
                    limit_diagonal,
                    n_sigma,
                ):
                    hits[y, x] = 2
                    new_ys[found] = y
                    new_xs[found] = x
                    found += 1
    return found


@njit(nogil=True, cache=True)
def stamp_discs(ys: Any, xs: Any, radii: Any, bit: int, mask: Any) -> None:
    """Set a bit within a radius of each listed pixel."""
    ny, nx = mask.shape
    for k in range(ys.size):
        reach = int(radii[k])
        limit = radii[k] * radii[k]
        for y in range(max(ys[k] - reach, 0), min(ys[k] + reach + 1, ny)):
            for x in range(max(xs[k] - reach, 0), min(xs[k] + reach + 1, nx)):
                if (y - ys[k]) ** 2 + (x - xs[k]) ** 2 <= limit:
                    mask[y, x] |= bit


@njit(nogil=True, cache=True)
def mark_bleeds(
    pixels: Any,
    mask: Any,
    ys: Any,
    xs: Any,
    saturated: int,
    bleed: int,
    sky: float,
    sigma: float,
) -> None:
    """Mark charge that ran along the columns from saturated pixels.

    The saturated pixels ``ys, xs`` are sorted by column, then row.  Where an upright
    run of them is three times longer than wide it is a bleed; from both its ends
    the column is followed for as long as it stands out of what lies 3 px beside.
    """
    ny, nx = pixels.shape
    begin = 0
    for k in range(1, ys.size + 1):
        if k < ys.size and xs[k] == xs[k - 1] and ys[k] - ys[k - 1] <= 2:
            continue
        x, low, high = xs[begin], ys[begin], ys[k - 1]
        length = high - low + 1
        begin = k
        narrow = 0
        for y in range(low, high + 1):
            left, right = x, x
            while left > 0 and mask[y, left - 1] & saturated and x - left < length:
                left -= 1
            while (
                right < nx - 1 and mask[y, right + 1] & saturated and right - x < length
            ):
                right += 1
            if 3 * (right - left + 1) <= length:
                _mark_across(mask, y, x, bleed)
                narrow += 1
        if length < 3:
            continue
        for direction in (-1, 1):
            y = low if direction < 0 else high
            misses = 0
            while misses < 3 and 0 <= y + direction < ny:
                y += direction
                beside = 0.5 * (
                    pixels[y, max(x - 3, 0)] + pixels[y, min(x + 3, nx - 1)]
                )
                wing = max(beside - sky, 0.0)
                if pixels[y, x] - beside > 4.0 * sigma + wing:
                    _mark_across(mask, y, x, bleed)
                    misses = 0
                else:
                    misses += 1


@njit(nogil=True, cache=True)
def _mark_across(mask: Any, y: int, x: int, bit: int) -> None:
    for beside in range(max(x - 1, 0), min(x + 2, mask.shape[1])):
        mask[y, beside] |= bit


@njit(nogil=True, cache=True)
def group_pixels(ys: Any, xs: Any, shape: Any, labels: Any) -> int:
    """Give numbers to the connected groups (8 neighbours) of listed pixels, from 0.

    The pixels are sorted by row, then column; returns how many groups there are.
    """
    ny, nx = shape
    where = np.full((ny, nx), -1, np.int32)
    for k in range(ys.size):
        where[ys[k], xs[k]] = k
        labels[k] = -1
    stack = np.empty(ys.size, np.int64)
    groups = 0
    for start in range(ys.size):
        if labels[start] >= 0:
            continue
        labels[start] = groups
        stack[0] = start
        depth = 1
        while depth > 0:
            depth -= 1
            k = stack[depth]
            for y in range(max(ys[k] - 1, 0), min(ys[k] + 2, ny)):
                for x in range(max(xs[k] - 1, 0), min(xs[k] + 2, nx)):
                    other = where[y, x]
                    if other >= 0 and labels[other] < 0:
                        labels[other] = groups
                        stack[depth] = other
                        depth += 1
        groups += 1
    return groups


@njit(nogil=True, cache=True)
def ray_profiles(
    pixels: Any, sky: Any, mask: Any, y0: float, x0: float, radii: Any, out: Any
) -> None:
    """Sample heights above the sky on rays round a star; NaN where masked.

    ``out[i, j]`` is at ``radii[j]`` on ray i of ``out.shape[0]`` even angles.
    """
    ny, nx = pixels.shape
    for i in range(out.shape[0]):
        angle = 2.0 * np.pi * i / out.shape[0]
        for j in range(radii.size):
            y = int(np.rint(y0 + radii[j] * np.sin(angle)))
            x = int(np.rint(x0 + radii[j] * np.cos(angle)))
            out[i, j] = np.nan
            if 0 <= y < ny and 0 <= x < nx and mask[y, x] == 0:
                out[i, j] = pixels[y, x] - sky[y, x]
