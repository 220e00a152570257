"""How sharp and how deep a frame is."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from latelight.frames.headers import FrameHeader
from latelight.night.calibration import Calibration
from latelight.records import Frame, StarList

__all__ = ["Quality", "flux_noises", "quality_of", "widths"]


@dataclass(frozen=True, slots=True)
class Quality:
    """How sharp and how quiet a frame is: pixels, arcsec or None, and counts."""

    fwhm_px: float
    fwhm_arcsec: float | None
    sigma: float


def quality_of(frame: Frame, stars: StarList) -> Quality | None:
    """Measure a frame; None when no star stands out."""
    if not np.isfinite(stars.fwhm_px):
        return None
    ny, nx = frame.plane.pixels.shape
    scale = Calibration(frame.wcs, None).scale(0.5 * (nx - 1), 0.5 * (ny - 1))
    good = frame.plane.mask == 0
    sigma = float(np.sqrt(np.median(frame.plane.variance[good])))
    width = None if scale is None else stars.fwhm_px * scale
    return Quality(stars.fwhm_px, width, sigma)


def widths(quality: Sequence[Quality]) -> list[float]:
    """Return the widths on the sky, or in pixels when a frame has no WCS."""
    known = [q.fwhm_arcsec for q in quality if q.fwhm_arcsec is not None]
    return known if len(known) == len(quality) else [q.fwhm_px for q in quality]


def flux_noises(
    headers: Sequence[FrameHeader], quality: Sequence[Quality]
) -> list[float]:
    """Return the noise of a star's flux in each frame, on one flux scale.

    The noise of a point source on a bright sky goes as sigma times the width of
    the PSF.  The scale is that of the zero points, or where one is missing, that
    of the exposure times.
    """
    if all(h.zero_point is not None for h in headers):
        scales = [10.0 ** (-0.4 * (h.zero_point or 0.0)) for h in headers]
    else:
        scales = [1.0 / h.exposure_s for h in headers]
    return [q.sigma * q.fwhm_px * s for q, s in zip(quality, scales, strict=True)]
