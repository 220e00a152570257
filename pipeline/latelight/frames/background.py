"""The smooth sky of a frame, from clipped medians on a coarse grid."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.frames._kernels import bilinear_rows, cell_levels
from latelight.records import MaskArray, PixelArray
from latelight.threads import over_rows

__all__ = ["sky_map"]


def sky_map(pixels: PixelArray, mask: MaskArray, *, cell: int) -> PixelArray:
    """Return the sky under every pixel, counts, shape (ny, nx).

    Clipped medians of square cells, a 3 x 3 median of the cells against the odd
    galaxy, and bilinear interpolation between their centres.

    Parameters
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts.
    mask : uint16 array, shape (ny, nx)
        Non-zero pixels are left out; some must be left.
    cell : int
        Side of a cell, pixels.

    Raises
    ------
    ValueError
        If no cell has enough good pixels.
    """
    ny, nx = pixels.shape
    levels = np.empty((max(ny // cell, 1), max(nx // cell, 1)), dtype=np.float32)
    over_rows(
        lambda first, last: cell_levels(pixels, mask, cell, levels, first, last),
        levels.shape[0],
    )
    known = np.isfinite(levels)
    if not known.any():
        msg = f"no cell of {cell} pixels has enough good pixels for a sky level"
        raise ValueError(msg)
    nearest = ndimage.distance_transform_edt(
        ~known, return_distances=False, return_indices=True
    )
    nodes = ndimage.median_filter(levels[tuple(nearest)], size=3, mode="nearest")
    sky = np.empty_like(pixels)
    centre = 0.5 * (cell - 1)
    over_rows(
        lambda first, last: bilinear_rows(
            nodes, centre, centre, float(cell), sky, first, last
        ),
        ny,
    )
    return sky
