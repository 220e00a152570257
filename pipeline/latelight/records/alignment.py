"""Stars, and the map between two frames."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from latelight.records.arrays import BoolArray, FloatArray, IntArray, PixelArray

__all__ = ["Alignment", "PixelMap", "StarList"]


@dataclass(frozen=True, slots=True)
class StarList:
    """Stars of one frame, brightest first, with the frame's sky.

    Attributes
    ----------
    x, y : float64 array, shape (n,)
        Windowed centroids, pixels.
    position_err : float64 array, shape (n,)
        1-sigma error of each coordinate, pixels.
    flux, flux_err : float64 array, shape (n,)
        Counts above the sky in an aperture, and 1 sigma.
    peak : float64 array, shape (n,)
        Highest pixel above the sky, counts.
    fwhm : float64 array, shape (n,)
        Full width at half maximum, pixels.
    elongation : float64 array, shape (n,)
        Long over short axis, >= 1.
    saturated : bool array, shape (n,)
        A saturated or bled pixel lies in the star.
    clean : bool array, shape (n,)
        Point-like, unsaturated, unmasked and not blended: fit for alignment,
        PSF and kernel.
    sky : float32 array, shape (ny, nx)
        Smooth sky level, counts.
    fwhm_px : float
        Median width of the clean stars, pixels.
    """

    x: FloatArray
    y: FloatArray
    position_err: FloatArray
    flux: FloatArray
    flux_err: FloatArray
    peak: FloatArray
    fwhm: FloatArray
    elongation: FloatArray
    saturated: BoolArray
    clean: BoolArray
    sky: PixelArray
    fwhm_px: float

    def __len__(self) -> int:
        return int(self.x.size)


@dataclass(frozen=True, slots=True)
class PixelMap:
    """A smooth map from science pixels to template pixels.

    Attributes
    ----------
    node_y, node_x : float64 array, shape (my,), (mx,)
        Science pixel coordinates of the nodes; they cover the whole frame.
    map_y, map_x : float64 array, shape (my, mx)
        Template coordinates at the nodes; cubic splines join them.
    error_px : float
        Estimated 1-sigma error of the map in each coordinate, pixels.
    """

    node_y: FloatArray
    node_x: FloatArray
    map_y: FloatArray
    map_x: FloatArray
    error_px: float


@dataclass(frozen=True, slots=True)
class Alignment:
    """The map between two frames and the stars that carry it.

    Attributes
    ----------
    pixel_map : PixelMap
        Science pixels to template pixels.
    science_index, template_index : int64 array, shape (n_matched,)
        Rows of the two star lists that are one star.
    rms_px : float
        Residual of the kept stars after the fit, per coordinate, pixels.
    method : str
        ``"wcs"`` when the headers' WCS led, ``"asterisms"`` otherwise.
    """

    pixel_map: PixelMap
    science_index: IntArray
    template_index: IntArray
    rms_px: float
    method: Literal["wcs", "asterisms"]
