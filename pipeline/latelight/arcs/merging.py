"""What a judged ridge explains: its own pixels, and the seeds that lie on it."""

from __future__ import annotations

import numpy as np

from latelight.arcs.evidence import Evidence
from latelight.arcs.fit import Fit
from latelight.arcs.footprint import (
    flank_px,
    mask_disc,
    mask_line,
    mask_ridge,
    on_ridge,
)
from latelight.arcs.search import Seed
from latelight.records import MaskArray

__all__ = ["explained", "mask_explained"]

_SAME_ANGLE = np.radians(25.0)
"""Ridges that cross at more than this are two; seeds are right to 15 degrees."""


def explained(fit: Fit, seeds: list[Seed]) -> list[Seed]:
    """Return the seeds that are pieces of a fitted ridge: on it, and along it."""
    places = np.array([(seed.x, seed.y, seed.angle) for seed in seeds])
    x, y, angle = places.reshape(-1, 3).T
    s, u = fit.circle.coordinates(x, y)
    turn = angle - (fit.circle.angle - fit.circle.curvature * s)
    along = np.abs(np.sin(turn)) < np.sin(_SAME_ANGLE)
    return [seeds[i] for i in np.flatnonzero(on_ridge(fit, s, u) & along).tolist()]


def mask_explained(mask: MaskArray, evidence: Evidence, *, extent: str) -> None:
    """Mask what a judged ridge explains, so that it is not found again.

    Parameters
    ----------
    mask : uint16 array, shape (ny, nx)
        Changed in place.
    evidence : Evidence
        The ridge.
    extent : {"", "line", "ring"}
        What else it spoils: nothing, a line across the frame, a disc.
    """
    # Both look at the ridge itself: before it is masked.
    if extent == "line":
        line = evidence.line()
        # Brighter trails show more of their wings.
        widths = 1.0 + 0.5 * np.log10(max(line.snr / 10.0, 1.0))
        mask_line(mask, line.circle, widths * evidence.lobe_width_px)
    if extent == "ring":
        ring = evidence.ring()
        mask_disc(mask, ring.x, ring.y, ring.radius_px + flank_px(evidence.fit))
    mask_ridge(mask, evidence.fit)
