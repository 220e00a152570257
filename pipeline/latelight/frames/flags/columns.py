"""Bad columns and rows, whole or in part, and areas without data."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.frames._kernels import column_sums, flat_rows, row_sums
from latelight.records import BoolArray, FloatArray, MaskArray, PixelArray
from latelight.threads import over_rows

__all__ = ["find_bad_lines", "find_flat_areas"]

# Partial columns are found in blocks of this many rows.
BLOCK = 64
# A column is compared with the median of this many round it.
WINDOW = 9
# Columns wider than this are no fault of single columns.
MAX_WIDTH = 3
# Just outside a bad column the offset has fallen below this fraction; outside a
# star or a spike, which the optics have widened, it has not.
SHARP = 0.4
# Noise below this fraction of the usual one: nothing is read there at all.
DEAD_NOISE = 0.15
# A Gaussian cut at 2 sigma keeps this much of its standard deviation.
CUT_SIGMA = 0.95
MAJORITY = 0.8
# Dark or bright bands along an edge: the mean of their lines is this far off.
EDGE_SIGMA = 0.7
MIN_FLAT_PIXELS = 25


def find_bad_lines(
    pixels: PixelArray,
    sky: PixelArray,
    mask: MaskArray,
    *,
    sigma: float,
    n_sigma: float,
) -> BoolArray:
    """Mark columns and rows that are offset from their neighbours, or dead.

    Parameters
    ----------
    pixels, sky : float32 array, shape (ny, nx)
        Counts, and the smooth sky.
    mask : uint16 array, shape (ny, nx)
        Non-zero pixels are left out.
    sigma : float
        Noise of the blank sky, counts.
    n_sigma : float
        Offset of a line's mean, in sigma of that mean.

    Returns
    -------
    bool array, shape (ny, nx)
    """
    ny, nx = pixels.shape
    bad = np.zeros(pixels.shape, dtype=bool)
    blocks = -(-ny // BLOCK)
    sums, squares, counts = (np.zeros((blocks, nx)) for _ in range(3))
    over_rows(
        lambda first, last: column_sums(
            pixels, sky, mask, sigma, BLOCK, sums, squares, counts, first, last
        ),
        blocks,
    )
    for block, column in np.argwhere(_bad(sums, squares, counts, n_sigma)):
        bad[block * BLOCK : (block + 1) * BLOCK, column] = True
    blocks = -(-nx // BLOCK)
    across, across_squares, across_counts = (np.zeros((ny, blocks)) for _ in range(3))
    over_rows(
        lambda first, last: row_sums(
            pixels,
            sky,
            mask,
            sigma,
            BLOCK,
            across,
            across_squares,
            across_counts,
            first,
            last,
        ),
        ny,
    )
    bad_rows = _bad(across.T, across_squares.T, across_counts.T, n_sigma)
    for block, row in np.argwhere(bad_rows):
        bad[row, block * BLOCK : (block + 1) * BLOCK] = True
    return bad


def find_flat_areas(pixels: PixelArray) -> BoolArray:
    """Mark areas of one and the same value: padding, and parts never read out.

    Only areas at the frame's lowest value count, so that neither saturated stars
    nor a coarsely quantised sky are taken for one.
    """
    lowest = pixels.min()
    if np.count_nonzero(pixels == lowest) < MIN_FLAT_PIXELS:
        return np.zeros(pixels.shape, dtype=bool)
    flat = np.zeros(pixels.shape, dtype=bool)
    over_rows(lambda first, last: flat_rows(pixels, flat, first, last), pixels.shape[0])
    flat &= pixels == lowest
    if np.count_nonzero(flat) < MIN_FLAT_PIXELS:
        return np.zeros(pixels.shape, dtype=bool)
    return ndimage.binary_dilation(flat, np.ones((3, 3))) & (pixels == lowest)


def _bad(
    sums: FloatArray, squares: FloatArray, counts: FloatArray, n_sigma: float
) -> BoolArray:
    """Find bad lines in the sums of blocks, shape (blocks, lines).

    A line is tried block by block, and whole: a faint one shows only as a whole.
    """
    total, n = sums.sum(axis=0, keepdims=True), counts.sum(axis=0, keepdims=True)
    # Bad as a whole means alike in most blocks, not very bad in a few.
    half = 0.5 * _offset_mean(total, n)
    alike = np.sign(half) * _offset_mean(sums, counts) > np.abs(half)
    whole = _offset(total, n, n_sigma) & (alike.mean(axis=0) > MAJORITY)
    bad = _dead(sums, squares, counts) | _offset(sums, counts, n_sigma) | whole
    # What is bad in most blocks is bad in the others too, if less so.
    mean = (total / np.maximum(n, 1.0))[0]
    return bad | (bad.mean(axis=0) > MAJORITY) | _edge_band(mean, n_sigma)


def _edge_band(mean: FloatArray, n_sigma: float) -> BoolArray:
    """Find lines at either edge, one after another, that are far off the others."""
    offset = np.abs(mean - np.median(mean))
    scatter = 1.4826 * float(np.median(offset))
    off = offset > max(EDGE_SIGMA, n_sigma * scatter)
    band: BoolArray = np.logical_and.accumulate(off)
    band |= np.logical_and.accumulate(off[::-1])[::-1]
    return band


def _dead(sums: FloatArray, squares: FloatArray, counts: FloatArray) -> BoolArray:
    """Find lines with hardly any noise of their own."""
    enough = counts >= BLOCK // 4
    n = np.maximum(counts, 1.0)
    spread = np.sqrt(np.maximum(squares / n - (sums / n) ** 2, 0.0))
    usual = float(np.median(spread[enough])) if enough.any() else 0.0
    # A bright trail along a line leaves no spread either, all heights being cut.
    dead: BoolArray = enough & (spread < DEAD_NOISE * usual) & (sums / n < 1.0)
    return dead


def _offset(sums: FloatArray, counts: FloatArray, n_sigma: float) -> BoolArray:
    """Find lines whose mean differs from that of the lines round them."""
    offset = _offset_mean(sums, counts)
    noise = CUT_SIGMA / np.sqrt(np.maximum(counts, 1.0))
    # Crowding makes the means scatter more than noise does: let them tell.
    scatter = 1.4826 * np.median(np.abs(offset), axis=1, keepdims=True)
    limit = n_sigma * np.maximum(noise, scatter)
    high = (np.abs(offset) > limit) & (counts >= BLOCK // 4)
    bad = np.zeros_like(high)
    for block, column in np.argwhere(high):
        bad[block, column] = _is_sharp(offset[block], column)
    return bad


def _offset_mean(sums: FloatArray, counts: FloatArray) -> FloatArray:
    """Return each line's mean above the median of the lines round it, in sigma."""
    mean = sums / np.maximum(counts, 1.0)
    around: FloatArray = ndimage.median_filter(mean, size=(1, WINDOW), mode="reflect")
    return mean - around


def _is_sharp(offset: FloatArray, column: int) -> bool:
    """Whether an offset is at most MAX_WIDTH lines wide, with steep sides."""
    size = np.abs(offset) * (np.sign(offset) == np.sign(offset[column]))
    edge = SHARP * size[column]
    left = right = column
    while left > 0 and size[left - 1] >= edge:
        left -= 1
    while right < size.size - 1 and size[right + 1] >= edge:
        right += 1
    # A ramp of decreasing steps is a profile; a column falls in one step.
    return right - left + 1 <= MAX_WIDTH
