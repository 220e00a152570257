"""A difference, and the compact sources in it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from latelight.records.arrays import MaskArray, PixelArray

__all__ = ["CompactResidual", "Difference"]


@dataclass(frozen=True, slots=True)
class CompactResidual:
    """A compact source in a difference: a variable star or a moving body.

    Attributes
    ----------
    x, y : float
        Science pixel coordinates.
    flux, flux_err : float
        Counts, signed: positive is brighter in the science frame.
    snr : float
        Signed significance.
    fwhm_px : float
        Width, pixels.
    kind : str
        ``"variable"`` on a star of either frame, ``"new"`` where there is none.
    """

    x: float
    y: float
    flux: float
    flux_err: float
    snr: float
    fwhm_px: float
    kind: Literal["variable", "new"]


@dataclass(frozen=True, slots=True)
class Difference:
    """Science minus template, on the science frame's grid and flux scale.

    Attributes
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts; zero where masked.
    variance : float32 array, shape (ny, nx)
        Variance of one pixel, counts squared, with the star-residual term.
    mask : uint16 array, shape (ny, nx)
        Bits of both frames, compact residuals included.
    fwhm_px : float
        PSF width of the difference, pixels.
    noise_ratio : float
        Measured over predicted noise (1 sigma) in blank sky.
    method : str
        ``"kernel"`` or ``"proper"``.
    compact : tuple of CompactResidual
        Compact residuals, most significant first.
    star_scatter, star_shift_px : float
        The two coefficients of the star-residual noise: fraction of the model,
        and pixels of its gradient.
    """

    pixels: PixelArray
    variance: PixelArray
    mask: MaskArray
    fwhm_px: float
    noise_ratio: float
    method: Literal["kernel", "proper"]
    compact: tuple[CompactResidual, ...]
    star_scatter: float
    star_shift_px: float
