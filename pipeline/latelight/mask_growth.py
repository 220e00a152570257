"""Grow masked pixels by a footprint, every bit kept."""

from __future__ import annotations

import numba as nb
import numpy as np

from latelight.records import BoolArray, MaskArray

__all__ = ["disc", "grow_mask"]


def disc(radius: float) -> BoolArray:
    """Return a disc as a footprint, shape (2 r + 1, 2 r + 1) with r rounded up."""
    half = int(np.ceil(radius))
    step = np.arange(-half, half + 1)
    return step[:, None] ** 2 + step[None, :] ** 2 <= radius**2


def grow_mask(mask: MaskArray, *, footprint: BoolArray) -> MaskArray:
    """Give every pixel the bits of all pixels whose footprint reaches it.

    Parameters
    ----------
    mask : uint16 array, shape (ny, nx)
        Mask bits.
    footprint : bool array, shape (k, k), k odd
        Offsets a masked pixel spreads to; convex and holding its centre.

    Returns
    -------
    uint16 array, shape (ny, nx)
        The grown mask.

    Raises
    ------
    ValueError
        If the footprint is not square with an odd side.
    """
    side = footprint.shape[0]
    if footprint.shape != (side, side) or side % 2 == 0:
        msg = f"footprint must be square with an odd side, got {footprint.shape}"
        raise ValueError(msg)
    reach = footprint.sum(axis=1).astype(np.int64)
    rows = np.flatnonzero(reach)
    first = np.argmax(footprint[rows], axis=1) - side // 2
    out = mask.copy()
    _spread(mask, rows - side // 2, first, first + reach[rows], out)
    return out


@nb.njit(nogil=True, cache=True)
def _spread(
    mask: MaskArray,
    dy: np.ndarray,
    first: np.ndarray,
    last: np.ndarray,
    out: MaskArray,
) -> None:
    ny, nx = mask.shape
    for y in range(ny):
        for x in range(nx):
            bits = mask[y, x]
            if bits == 0:
                continue
            # Pixels inside a patch of equal bits add nothing to its rim's growth.
            if (
                0 < y < ny - 1
                and 0 < x < nx - 1
                and mask[y - 1, x] == bits
                and mask[y + 1, x] == bits
                and mask[y, x - 1] == bits
                and mask[y, x + 1] == bits
            ):
                continue
            for row in range(dy.size):
                yy = y + dy[row]
                if 0 <= yy < ny:
                    for xx in range(max(x + first[row], 0), min(x + last[row], nx)):
                        out[yy, xx] |= bits
