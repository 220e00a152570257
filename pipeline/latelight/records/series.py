"""All epochs of one field, on one grid and one flux scale."""

from __future__ import annotations

from dataclasses import dataclass

from latelight.records.arrays import FloatArray, MaskArray, PixelArray

__all__ = ["EpochSeries"]


@dataclass(frozen=True, slots=True)
class EpochSeries:
    """Differences of n epochs from one template, aligned, in order of time.

    ``pixels[i]`` is the sky at epoch i minus a static image that is the same at
    all epochs, so a fit must leave one free constant in every pixel.  A template
    that is one of the epochs is among them, with pixels of zero and the noise of
    its own: all noise is then independent between the epochs.

    Attributes
    ----------
    pixels : float32 array, shape (n, ny, nx)
        Counts on the flux scale of the grid's frame; zero where masked.
    variance : float32 array, shape (n, ny, nx)
        Variance of one pixel of that epoch alone, counts squared, with the
        star-residual term.
    mask : uint16 array, shape (n, ny, nx)
        Non-zero: do not use.
    mjd : float64 array, shape (n,)
        Middles of the exposures, MJD, rising.
    fwhm_px : float64 array, shape (n,)
        PSF width of each epoch's difference, pixels.
    noise_ratio : float64 array, shape (n,)
        Measured over predicted noise (1 sigma) in blank sky.
    names : tuple of str
        Names of the frames.
    """

    pixels: PixelArray
    variance: PixelArray
    mask: MaskArray
    mjd: FloatArray
    fwhm_px: FloatArray
    noise_ratio: FloatArray
    names: tuple[str, ...]

    def __len__(self) -> int:
        return int(self.mjd.size)
