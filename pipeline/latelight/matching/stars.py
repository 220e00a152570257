"""Choose the stars that the kernel is fitted to."""

from __future__ import annotations

import numpy as np

from latelight.errors import StageError
from latelight.matching.settings import MatchingSettings
from latelight.records import Alignment, BoolArray, FloatArray, IntArray, StarList

__all__ = ["choose_stars", "matched_clean", "spread_over_cells"]

_STAGE = "matching"
# Response is often curved in the last tenth below saturation.
_BELOW_SATURATION = 0.9
# Share of a star's disc that may be masked.
_MOST_MASKED = 0.4
# Pixels in the fit, all stars together, and the stars taken whatever they cost.
_MOST_PIXELS = 600_000
_LEAST_AFFORDABLE = 80


def _in_range(stars: StarList, rows: IntArray) -> np.ndarray:
    """Return which stars are clean and well below the saturated ones' peaks."""
    # The highest: a faint star under a bleed counts as saturated too.
    top = stars.peak[stars.saturated].max(initial=0.0) or np.inf
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
    bad: BoolArray,
    core: int,
    radius: int,
    settings: MatchingSettings,
) -> IntArray:
    """Choose kernel stars, spread over the frame.

    Parameters
    ----------
    rows, snr : arrays, shape (n,)
        Candidates (rows of ``stars``), best first, and their S/N.
    stars : StarList
        Stars of the science frame.
    bad : bool array, shape (ny, nx)
        Pixels not to be used in either frame; beyond the rim all are bad.
    core, radius : int
        A star's box of half-width ``core`` must be free of bad pixels, and most
        of its disc.
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
    col = np.rint(stars.x[rows]).astype(int)
    row = np.rint(stars.y[rows]).astype(int)
    usable = snr >= settings.min_snr
    for n in np.flatnonzero(usable):
        usable[n] = (
            _bad_share(bad, row[n], col[n], core) == 0.0
            and _bad_share(bad, row[n], col[n], radius) < _MOST_MASKED
        )
    rows = rows[usable]
    if rows.size < settings.min_stars:
        msg = (
            f"a kernel needs at least {settings.min_stars} clean stars in common, "
            f"got {rows.size} of S/N above {settings.min_snr}; lower min_snr or "
            "min_stars in [matching], or take a deeper template"
        )
        raise StageError(_STAGE, msg)
    # Wide PSFs have wide discs: fewer stars then hold as many pixels.
    affordable = max(_LEAST_AFFORDABLE, int(_MOST_PIXELS / (np.pi * radius**2)))
    return spread_over_cells(
        rows,
        stars.x[rows],
        stars.y[rows],
        shape=(bad.shape[0], bad.shape[1]),
        most=min(settings.max_stars, affordable),
    )


def _bad_share(bad: BoolArray, row: int, col: int, half: int) -> float:
    """Return the share of a box that is bad or outside the frame."""
    box = bad[max(row - half, 0) : row + half + 1, max(col - half, 0) : col + half + 1]
    return 1.0 - (box.size - np.count_nonzero(box)) / (2 * half + 1) ** 2


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
