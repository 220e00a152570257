"""Which pixels a fitted ridge covers, with its lobes and their flanks."""

from __future__ import annotations

import numpy as np

from latelight.arcs.fit import Fit
from latelight.arcs.geometry import Circle
from latelight.masks import MaskBit
from latelight.records import BoolArray, FloatArray, MaskArray

__all__ = ["box_around", "mask_disc", "mask_line", "mask_ridge", "on_ridge"]

_MARGIN_PX = 6.0
_EXPLAINED = np.uint16(MaskBit.COMPACT)
"""Any bit will do: the masks are the search's own copies."""


def on_ridge(fit: Fit, s: FloatArray, u: FloatArray) -> BoolArray:
    """Tell which places along and across lie on a ridge."""
    low, high = fit.pair.reach
    flank = flank_px(fit)
    along = (s >= fit.first - _MARGIN_PX) & (s <= fit.last + _MARGIN_PX)
    return np.asarray(along & (u >= low - flank) & (u <= high + flank))


def flank_px(fit: Fit) -> float:
    """Return how far a lobe reaches from its peak, pixels."""
    return 2.0 * float(np.hypot(fit.pair.sigma_px, fit.pair.tail_px)) + _MARGIN_PX


def mask_ridge(mask: MaskArray, fit: Fit) -> None:
    """Mask a ridge, in place."""
    s = np.linspace(fit.first - _MARGIN_PX, fit.last + _MARGIN_PX, 23)
    x, y = fit.circle.point(s, np.zeros(s.size))
    low, high = fit.pair.reach
    box = box_around(mask.shape, x, y, max(-low, high) + flank_px(fit))
    yy, xx = np.mgrid[box]
    s, u = fit.circle.coordinates(xx, yy)
    mask[box][on_ridge(fit, s, u)] |= _EXPLAINED


def mask_line(mask: MaskArray, line: Circle, half_width: float) -> None:
    """Mask a straight line across the frame, in place."""
    ny, nx = mask.shape
    yy, xx = np.ogrid[0:ny, 0:nx]
    across = (xx - line.x) * np.cos(line.angle) + (yy - line.y) * np.sin(line.angle)
    mask[np.abs(across) <= half_width] |= _EXPLAINED


def mask_disc(mask: MaskArray, x: float, y: float, radius: float) -> None:
    """Mask a disc, in place."""
    box = box_around(mask.shape, np.array([x]), np.array([y]), radius)
    yy, xx = np.mgrid[box]
    mask[box][np.hypot(xx - x, yy - y) <= radius] |= _EXPLAINED


def box_around(
    shape: tuple[int, ...], x: FloatArray, y: FloatArray, pad: float
) -> tuple[slice, slice]:
    """Return rows and columns within ``pad`` pixels of any of some places."""
    ny, nx = shape
    return (
        slice(max(int(y.min() - pad), 0), min(max(int(y.max() + pad) + 1, 0), ny)),
        slice(max(int(x.min() - pad), 0), min(max(int(x.max() + pad) + 1, 0), nx)),
    )
