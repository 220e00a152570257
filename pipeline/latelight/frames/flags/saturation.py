"""Saturated stars: their level, rim, core, and the charge they bleed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latelight.frames.flags._kernels import group_pixels, mark_bleeds, stamp_discs
from latelight.frames.flags.bits import set_bit
from latelight.masks import MaskBit
from latelight.records import FloatArray, MaskArray, PixelArray

__all__ = ["SaturatedStars", "estimate_saturation", "flag_saturated"]

# Pile-up: this many pixels in one step of 1 % of the brightest pixel, and this
# many times what the steps below hold.
MIN_PILE = 6
# No star lower than this many sigma tells of saturation.
LEAST_HEIGHT = 100.0
PILE_RATIO = 4.0
STEPS = 100
# A group of saturated pixels this large is a star and not a cosmic ray.
MIN_STAR_PIXELS = 5


@dataclass(frozen=True, slots=True)
class SaturatedStars:
    """Where stars saturate, largest first.

    Attributes
    ----------
    y, x : float64 array, shape (n,)
        Centres, pixels.
    radius : float64 array, shape (n,)
        Half the width of the saturated area across its bleed, pixels.
    """

    y: FloatArray
    x: FloatArray
    radius: FloatArray


def estimate_saturation(
    pixels: PixelArray, *, sky: float, sigma: float, ceiling: float
) -> tuple[float, tuple[str, ...]]:
    """Find the level at which the brightest pixels pile up.

    Star counts fall steadily with height; where the detector or its converter
    saturates, many pixels share the same few per cent of the range instead.

    Parameters
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts, finite.
    sky, sigma : float
        Typical sky and its noise, counts.
    ceiling : float
        Largest count the data type can hold; ``inf`` for floating point.

    Returns
    -------
    level : float
        Counts; the ceiling when nothing piles up.
    notes : tuple of str
        How it was found.
    """
    height = float(np.max(pixels)) - sky
    if height > LEAST_HEIGHT * sigma:
        bright = pixels[pixels > sky + 0.5 * height] - np.float32(sky)
        steps = np.minimum((bright * (STEPS / height)).astype(np.int64), STEPS - 1)
        counts = np.bincount(steps, minlength=STEPS)
        for step in range(STEPS - 1, STEPS // 2 + 10, -1):
            below = float(np.median(counts[step - 10 : step - 1]))
            if counts[step] >= max(MIN_PILE, PILE_RATIO * below):
                # The pile may begin in the step before.
                level = sky + height * (step - 1) / STEPS
                note = f"saturation estimated from pile-up: {level:.6g} counts"
                return level, (note,)
    if np.isfinite(ceiling):
        note = (
            f"no pile-up seen: saturation taken as the data type's {ceiling:g} counts"
        )
    else:
        note = "saturation unknown and no pile-up seen: no pixel is flagged for it"
    return ceiling, (note,)


def flag_saturated(
    pixels: PixelArray,
    mask: MaskArray,
    *,
    level: float,
    rim: int,
    core_factor: float,
    sky: float,
    sigma: float,
    along_rows: bool,
) -> SaturatedStars:
    """Flag saturated pixels with their rim, bleeds and cores in ``mask``.

    Parameters
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts.
    mask : uint16 array, shape (ny, nx)
        Changed in place: SATURATED, BLEED and SPIKE (cores) are added.
    level : float
        Saturation, counts.
    rim : int
        Pixels round each saturated one that are flagged too.
    core_factor : float
        Radius of the flagged core in radii of the saturated area.
    sky, sigma : float
        Typical sky and its noise, counts.
    along_rows : bool
        Charge bleeds along rows rather than columns.

    Returns
    -------
    SaturatedStars
    """
    ys, xs = np.nonzero(pixels >= level)
    if ys.size == 0:
        return SaturatedStars(np.empty(0), np.empty(0), np.empty(0))
    set_bit(mask, (ys, xs), MaskBit.SATURATED)
    lines = (pixels.T, mask.T, xs, ys) if along_rows else (pixels, mask, ys, xs)
    order = np.lexsort((lines[2], lines[3]))
    mark_bleeds(
        lines[0],
        lines[1],
        lines[2][order],
        lines[3][order],
        int(MaskBit.SATURATED),
        int(MaskBit.BLEED),
        sky,
        sigma,
    )
    stars = _stars(ys, xs, mask.shape, not along_rows)
    stamp_discs(ys, xs, np.full(ys.size, float(rim)), int(MaskBit.SATURATED), mask)
    stamp_discs(
        np.rint(stars.y).astype(np.int64),
        np.rint(stars.x).astype(np.int64),
        core_factor * stars.radius + 1.0,
        int(MaskBit.SPIKE),
        mask,
    )
    return stars


def _stars(ys: Any, xs: Any, shape: tuple[int, int], upright: bool) -> SaturatedStars:
    """Group saturated pixels into stars; their widest rows tell, not their bleeds."""
    labels = np.empty(ys.size, dtype=np.int64)
    n = group_pixels(ys, xs, shape, labels)
    area = np.bincount(labels, minlength=n)
    lines = ys if upright else xs
    # One entry a group and line across the bleed: how many pixels it holds.
    keys, width = np.unique(labels * max(shape) + lines, return_counts=True)
    group = keys // max(shape)
    widest = np.zeros(n, dtype=np.int64)
    np.maximum.at(widest, group, width)
    core = np.isin(labels * max(shape) + lines, keys[width >= 0.8 * widest[group]])
    share = np.maximum(np.bincount(labels[core], minlength=n), 1)
    y = np.bincount(labels[core], weights=ys[core], minlength=n) / share
    x = np.bincount(labels[core], weights=xs[core], minlength=n) / share
    order = np.argsort(-widest, kind="stable")
    order = order[area[order] >= MIN_STAR_PIXELS]
    return SaturatedStars(y[order], x[order], 0.5 * widest[order].astype(float))
