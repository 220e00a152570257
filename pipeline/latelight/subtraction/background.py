"""The smooth background of a difference, on scales that no arc reaches."""

from __future__ import annotations

import numpy as np
from scipy import ndimage
from scipy.interpolate import make_interp_spline

from latelight.records import BoolArray, FloatArray, PixelArray
from latelight.statistics import clipped_mean, robust_sigma
from latelight.subtraction._kernels import bin_good
from latelight.threads import over_rows

__all__ = ["smooth_background"]

_BIN = 4
# Fewest good bins of a cell: below this its level comes from its neighbours.
_FEWEST = 30


def smooth_background(
    difference: PixelArray, good: BoolArray, *, mesh_px: int, ridge_sigma: float
) -> PixelArray:
    """Model the smooth part of a difference.

    Parameters
    ----------
    difference : float32 array, shape (ny, nx)
        Science minus template.
    good : bool array, shape (ny, nx)
        Pixels free of masks and of bright stars.
    mesh_px : int
        Side of a cell, pixels: a ridge shorter or narrower than a fraction of it
        leaves no trace in the cell's clipped mean.
    ridge_sigma : float
        Smoothed S/N above which bins are left out in the second pass.

    Returns
    -------
    float32 array, shape (ny, nx)
        Cubic splines through the cells' levels, going on straight at the edges.

    Notes
    -----
    Everything is done on 4x4 bins.  The first pass takes off a rough level and
    finds what stands out of the smoothed bins (echoes, trails, residuals of stars);
    the second leaves that out.
    """
    ny, nx = difference.shape
    level, count = _binned(difference, good)
    used = count >= _BIN * _BIN // 2
    if not used.any():
        return np.zeros((ny, nx), dtype=np.float32)
    cells = (max(1, round(ny / mesh_px)), max(1, round(nx / mesh_px)))
    rough = _surface(_cell_levels(level, used, cells), level.shape)
    standing_out = _ridges(level - rough, used, ridge_sigma)
    levels = _cell_levels(level, used & ~standing_out, cells)
    return _surface(levels, (ny, nx))


def _binned(image: PixelArray, good: BoolArray) -> tuple[PixelArray, PixelArray]:
    shape = tuple(-(-n // _BIN) for n in image.shape)
    mean = np.empty(shape, dtype=np.float32)
    count = np.empty(shape, dtype=np.float32)

    def do_rows(first: int, last: int) -> None:
        bin_good(image, good, _BIN, mean, count, first, last)

    over_rows(do_rows, shape[0])
    return mean, count


def _ridges(level: PixelArray, used: BoolArray, ridge_sigma: float) -> BoolArray:
    """Return the bins that belong to something standing out, and their rim."""
    noise = robust_sigma(level[used])
    weight = ndimage.gaussian_filter(used.astype(np.float32), 1.0)
    smooth = ndimage.gaussian_filter(np.where(used, level, np.float32(0.0)), 1.0)
    smooth /= np.maximum(weight, 0.05)
    strong = np.abs(smooth) > ridge_sigma * max(robust_sigma(smooth[used]), 1e-30)
    strong |= np.abs(level) > 2.0 * ridge_sigma * max(noise, 1e-30)
    return ndimage.binary_dilation(strong, iterations=2)


def _cell_levels(
    level: PixelArray, used: BoolArray, cells: tuple[int, int]
) -> FloatArray:
    """Return each cell's clipped mean; empty cells take their neighbours'."""
    out = np.full(cells, np.nan)
    rows = np.linspace(0, level.shape[0], cells[0] + 1).round().astype(int)
    cols = np.linspace(0, level.shape[1], cells[1] + 1).round().astype(int)
    for i in range(cells[0]):
        for j in range(cells[1]):
            box = np.s_[rows[i] : rows[i + 1], cols[j] : cols[j + 1]]
            values = level[box][used[box]]
            if values.size >= _FEWEST:
                out[i, j] = clipped_mean(values, n_sigma=3.0)[0]
    if np.isnan(out).all():
        out[:] = np.median(level[used]) if used.any() else 0.0
    empty = np.isnan(out)
    if empty.any():
        nearest = ndimage.distance_transform_edt(
            empty, return_distances=False, return_indices=True
        )
        out = out[tuple(nearest)]
    return out


def _surface(levels: FloatArray, shape: tuple[int, ...]) -> PixelArray:
    """Interpolate cell levels to every pixel."""
    rows, cols = (
        _interpolation(n, size) for n, size in zip(levels.shape, shape, strict=True)
    )
    return rows @ levels.astype(np.float32) @ cols.T


def _interpolation(n_cells: int, size: int) -> PixelArray:
    """Return the matrix from cell levels to pixels along one axis."""
    if n_cells == 1:
        return np.ones((size, 1), dtype=np.float32)
    # One more node beyond each end, on the straight line through the last two.
    extend = np.zeros((n_cells + 2, n_cells))
    extend[1:-1] = np.eye(n_cells)
    extend[0, :2] = 2.0, -1.0
    extend[-1, -2:] = -1.0, 2.0
    width = size / n_cells
    nodes = (np.arange(-1, n_cells + 1) + 0.5) * width - 0.5
    spline = make_interp_spline(nodes, extend, k=3, bc_type="natural")
    return spline(np.arange(size)).astype(np.float32)
