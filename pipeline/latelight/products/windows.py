"""Square windows of a frame, with their WCS; at the frame's edge they are filled."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latelight.records import FloatArray

__all__ = ["Window", "window_around"]

# Sky around an arc on every side: at least this, and this many PSF widths.
_CONTEXT_PX = 20.0
_CONTEXT_FWHM = 8.0


@dataclass(frozen=True, slots=True)
class Window:
    """A square of a frame.

    Attributes
    ----------
    x0, y0 : int
        The frame's pixel that is the window's first; may lie outside the frame.
    side : int
        Pixels.
    """

    x0: int
    y0: int
    side: int

    def cut(self, image: Any, fill: Any) -> Any:
        """Return a copy of the window's pixels, those outside the frame filled."""
        piece = np.full((self.side, self.side), fill, dtype=image.dtype)
        ny, nx = image.shape
        top, bottom = max(self.y0, 0), min(self.y0 + self.side, ny)
        left, right = max(self.x0, 0), min(self.x0 + self.side, nx)
        if top < bottom and left < right:
            inside = (
                slice(top - self.y0, bottom - self.y0),
                slice(left - self.x0, right - self.x0),
            )
            piece[inside] = image[top:bottom, left:right]
        return piece

    def wcs(self, wcs: Any) -> Any:
        """Return the window's celestial WCS; None for None.

        Distortions in lookup tables are not kept.
        """
        if wcs is None:
            return None
        shifted = wcs.deepcopy()
        offset = np.array([self.x0, self.y0], dtype=float)
        shifted.wcs.crpix = shifted.wcs.crpix - offset
        if shifted.sip is not None:
            shifted.sip = type(shifted.sip)(
                shifted.sip.a,
                shifted.sip.b,
                shifted.sip.ap,
                shifted.sip.bp,
                shifted.sip.crpix - offset,
            )
        shifted.wcs.set()
        shifted.pixel_shape = (self.side, self.side)
        return shifted


def window_around(
    x: FloatArray, y: FloatArray, *, fwhm_px: float, reach_px: float, longest_px: int
) -> Window:
    """Return the square that holds some points and enough sky around them.

    Parameters
    ----------
    x, y : float64 array, shape (n,)
        The points, pixels.
    fwhm_px : float
        PSF width, pixels.
    reach_px : float
        Least sky on every side, pixels.
    longest_px : int
        Longest side, pixels; what does not fit is cut off.
    """
    extent = max(np.ptp(x), np.ptp(y))
    context = max(_CONTEXT_PX, _CONTEXT_FWHM * fwhm_px, reach_px)
    half = int(min(np.ceil(extent / 2 + context), (longest_px - 1) // 2))
    centre_x, centre_y = (x.min() + x.max()) / 2, (y.min() + y.max()) / 2
    return Window(round(centre_x) - half, round(centre_y) - half, 2 * half + 1)
