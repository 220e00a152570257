"""What a fitted ridge explains: its own pixels, and the seeds that lie on it."""

from __future__ import annotations

import numpy as np

from latelight.arcs.evidence import Evidence
from latelight.arcs.fit import Fit
from latelight.arcs.geometry import Circle
from latelight.arcs.search import Seed
from latelight.masks import MaskBit
from latelight.records import BoolArray, FloatArray, MaskArray

__all__ = ["explains", "mask_explained"]

_MARGIN_PX = 6.0
_SAME_ANGLE = np.radians(25.0)
"""Ridges that cross at more than this are two; seeds are right to 15 degrees."""
_EXPLAINED = MaskBit.COMPACT
"""Any bit will do: the mask is the search's own copy."""


def explains(fit: Fit, seed: Seed) -> bool:
    """Tell whether a seed is a piece of a fitted ridge: on it, and along it."""
    s, u = fit.circle.coordinates(seed.x, seed.y)
    turn = seed.angle - (fit.circle.angle - fit.circle.curvature * float(s))
    return bool(_on(fit, s, u)) and bool(abs(np.sin(turn)) < np.sin(_SAME_ANGLE))


def mask_explained(mask: MaskArray, evidence: Evidence, *, artefact: str) -> None:
    """Mask what a judged ridge explains, so that it is not found again.

    Parameters
    ----------
    mask : uint16 array, shape (ny, nx)
        Changed in place.
    evidence : Evidence
        The ridge.
    artefact : {"", "line", "ring"}
        What it is part of: nothing, a line across the frame, a ring.
    """
    fit = evidence.fit
    # Both look at the ridge itself: before it is masked.
    line = evidence.line() if artefact == "line" else None
    ring = evidence.ring() if artefact == "ring" else None
    x, y = fit.circle.point(np.linspace(-1.1, 1.1, 23) * fit.half_length, np.zeros(23))
    low, high = fit.pair.reach
    pad = max(-low, high) + _flank(fit)
    box = _box(mask.shape, x, y, pad)
    yy, xx = np.mgrid[box]
    s, u = fit.circle.coordinates(xx, yy)
    mask[box][_on(fit, s, u)] |= np.uint16(_EXPLAINED)
    if line is not None:
        _mask_line(mask, line.circle, 3.0 * evidence.lobe_width_px)
    if ring is not None:
        reach = ring.radius_px + _flank(fit)
        box = _box(mask.shape, np.array([ring.x]), np.array([ring.y]), reach)
        yy, xx = np.mgrid[box]
        inside = np.hypot(xx - ring.x, yy - ring.y) <= reach
        mask[box][inside] |= np.uint16(_EXPLAINED)


def _mask_line(mask: MaskArray, line: Circle, half_width: float) -> None:
    ny, nx = mask.shape
    yy, xx = np.ogrid[0:ny, 0:nx]
    across = (xx - line.x) * np.cos(line.angle) + (yy - line.y) * np.sin(line.angle)
    mask[np.abs(across) <= half_width] |= np.uint16(_EXPLAINED)


def _box(
    shape: tuple[int, ...], x: FloatArray, y: FloatArray, pad: float
) -> tuple[slice, slice]:
    ny, nx = shape
    return (
        slice(max(int(y.min() - pad), 0), min(max(int(y.max() + pad) + 1, 0), ny)),
        slice(max(int(x.min() - pad), 0), min(max(int(x.max() + pad) + 1, 0), nx)),
    )


def _flank(fit: Fit) -> float:
    return 2.0 * float(np.hypot(fit.pair.sigma_px, fit.pair.tail_px)) + _MARGIN_PX


def _on(fit: Fit, s: FloatArray, u: FloatArray) -> BoolArray:
    """Tell which places lie on the ridge, its lobes or their flanks."""
    low, high = fit.pair.reach
    flank = _flank(fit)
    along = np.abs(s) <= fit.half_length + _MARGIN_PX
    return np.asarray(along & (u >= low - flank) & (u <= high + flank))
