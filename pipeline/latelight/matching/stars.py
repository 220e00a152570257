"""Choose the stars that the kernel is fitted to."""

from __future__ import annotations

import numpy as np

from latelight.errors import StageError
from latelight.matching.settings import MatchingSettings
from latelight.records import Alignment, FloatArray, IntArray, MaskArray, StarList

__all__ = ["choose_stars", "matched_clean", "spread_over_cells"]

# Response is often curved in the last tenth below saturation.
_BELOW_SATURATION = 0.9


def _in_range(stars: StarList, rows: IntArray) -> np.ndarray:
    """Return which stars are clean and below the saturated ones' peaks."""
    top = stars.peak[stars.saturated].min() if stars.saturated.any() else np.inf
    return stars.clean[rows] & (stars.peak[rows] < _BELOW_SATURATION * top)


def matched_clean(
    science: StarList, template: StarList, alignment: Alignment
) -> tuple[IntArray, FloatArray]:
    """Return science rows of stars clean in both frames, best first, and their S/N.

    The S/N is that of the difference of the two, each scaled to unit flux.
    """
    rows, other = alignment.science_index, alignment.template_index
    good = _in_range(science, rows) & _in_range(template, other)
    rows, other = rows[good], other[good]
    noise = np.hypot(
        science.flux_err[rows] / np.maximum(science.flux[rows], 1e-30),
        template.flux_err[other] / np.maximum(template.flux[other], 1e-30),
    )
    snr = 1.0 / np.maximum(noise, 1e-12)
    order = np.argsort(-snr, kind="stable")
    return rows[order], snr[order]


def choose_stars(
    rows: IntArray,
    snr: FloatArray,
    *,
    stars: StarList,
    mask: MaskArray,
    radius: int,
    margin: int,
    settings: MatchingSettings,
) -> IntArray:
    """Choose kernel stars, spread over the frame.

    Parameters
    ----------
    rows, snr : arrays, shape (n,)
        Candidates (rows of ``stars``), best first, and their S/N.
    stars : StarList
        Stars of the science frame.
    mask : uint16 array, shape (ny, nx)
        Bits of both frames.
    radius : int
        Radius of the fitted disc, pixels; its core must be unmasked.
    margin : int
        Distance from the frame's edge that a star needs, pixels.
    settings : MatchingSettings
        ``min_snr``, ``max_stars``, ``min_stars``.

    Returns
    -------
    int64 array
        Rows of ``stars``, best first.

    Raises
    ------
    StageError
        If fewer than ``min_stars`` are left.
    """
    ny, nx = mask.shape
    col, row = np.rint(stars.x[rows]).astype(int), np.rint(stars.y[rows]).astype(int)
    inside = (
        (col >= margin) & (row >= margin) & (col < nx - margin) & (row < ny - margin)
    )
    usable = inside & (snr >= settings.min_snr)
    step = np.arange(-radius, radius + 1)
    disc = np.hypot(step[:, None], step[None, :])
    core = disc <= 0.5 * radius
    for n in np.flatnonzero(usable):
        box = mask[row[n] - radius : row[n] + radius + 1,
                   col[n] - radius : col[n] + radius + 1] != 0  # fmt: skip
        usable[n] = not box[core].any() and box.mean() < 0.15
    rows = rows[usable]
    if rows.size < settings.min_stars:
        msg = (
            f"a kernel needs at least {settings.min_stars} clean stars in common, "
            f"got {rows.size} of S/N above {settings.min_snr}; lower min_snr or "
            "min_stars in [matching], or take a deeper template"
        )
        raise StageError("matching", msg)
    return spread_over_cells(
        rows, stars.x[rows], stars.y[rows], shape=mask.shape, most=settings.max_stars
    )


def spread_over_cells(
    rows: IntArray, x: FloatArray, y: FloatArray, *, shape: tuple[int, int], most: int
) -> IntArray:
    """Take the best rows of every cell in turn until there are ``most``.

    Cells hold five stars each when all are full; the first round takes the best
    of every cell, the next the second best, so that crowded corners do not rule.
    """
    if rows.size <= most:
        return rows
    ny, nx = shape
    cells = max(1, round(np.sqrt(most / 5)))
    cell = (y * cells // ny).astype(int) * cells + (x * cells // nx).astype(int)
    order = np.argsort(cell, kind="stable")
    first = np.r_[True, np.diff(cell[order]) != 0]
    start = np.maximum.accumulate(np.where(first, np.arange(order.size), 0))
    turn = np.empty(rows.size, dtype=int)
    turn[order] = np.arange(order.size) - start
    return rows[np.argsort(turn, kind="stable")[:most]]
