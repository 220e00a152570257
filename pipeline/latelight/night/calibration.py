"""From pixels and counts to the sky and magnitudes, where the header allows it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from latelight.sky import pixel_angle_to_position_angle, pixel_scale_arcsec

__all__ = ["Calibration", "known", "magnitude_error", "scaled"]

_MAG_PER_RELATIVE = 2.5 / math.log(10.0)


def known(value: float) -> float | None:
    """Return a number, or None for one that is not finite."""
    return float(value) if math.isfinite(value) else None


def scaled(value_px: float, scale: float | None) -> float | None:
    """Return pixels in arcsec; None without a scale or for what is not finite."""
    return None if scale is None else known(value_px * scale)


def magnitude_error(counts: float, counts_err: float) -> float | None:
    """Return the 1-sigma error in magnitudes of a positive number of counts.

    First order: 2.5 / ln 10 times the relative error.
    """
    if not counts > 0.0:
        return None
    return known(_MAG_PER_RELATIVE * counts_err / counts)


@dataclass(frozen=True, slots=True)
class Calibration:
    """The scales of one frame; every method returns None for what is not known.

    Attributes
    ----------
    wcs : astropy.wcs.WCS or None
        Celestial WCS.
    zero_point : float or None
        Magnitude of one count.
    """

    wcs: Any
    zero_point: float | None

    def place(self, x: float, y: float) -> tuple[float, float] | tuple[None, None]:
        """Return RA and Dec of a pixel, degrees."""
        if self.wcs is None:
            return None, None
        ra, dec = self.wcs.all_pix2world(x, y, 0)
        return float(ra) % 360.0, float(dec)

    def direction(
        self, x: float, y: float, angle: float
    ) -> tuple[float, float] | tuple[None, None]:
        """Return the position angle of a pixel angle, and arcsec per pixel along it."""
        if self.wcs is None:
            return None, None
        return pixel_angle_to_position_angle(self.wcs, x, y, angle)

    def scale(self, x: float, y: float) -> float | None:
        """Return the pixel scale at a pixel, arcsec."""
        return None if self.wcs is None else pixel_scale_arcsec(self.wcs, x, y)

    def magnitude(self, counts: float) -> float | None:
        """Return the magnitude of a positive number of counts."""
        if self.zero_point is None or not counts > 0.0 or not math.isfinite(counts):
            return None
        return self.zero_point - 2.5 * math.log10(counts)

    def surface_brightness(self, counts: float, x: float, y: float) -> float | None:
        """Return mag/arcsec^2 of a number of counts per pixel, at a pixel."""
        scale = self.scale(x, y)
        return None if scale is None else self.magnitude(counts / scale**2)

    def depth(self, sigma: float, shape: tuple[int, int]) -> float | None:
        """Return the faintest patch of 10 arcsec^2 seen at 5 sigma, mag/arcsec^2.

        Parameters
        ----------
        sigma : float
            Noise of one pixel in blank sky, counts; taken as independent.
        shape : (int, int)
            Shape of the frame: the scale is that of its middle.
        """
        x, y = 0.5 * (shape[1] - 1), 0.5 * (shape[0] - 1)
        scale = self.scale(x, y)
        if scale is None:
            return None
        n_pixels = 10.0 / scale**2
        return self.surface_brightness(5.0 * sigma / math.sqrt(n_pixels), x, y)
