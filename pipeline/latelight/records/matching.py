"""Kernels and PSFs that vary over a frame, and two frames brought together."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from latelight.records.arrays import FloatArray, PixelArray
from latelight.records.frame import Plane

__all__ = ["MatchedPair", "SpatialKernel", "SpatialPsf"]


@dataclass(frozen=True, slots=True)
class SpatialKernel:
    """A convolution kernel that varies over the frame as a polynomial.

    ``K(x, y) = sum_t planes[t] * u**i_t * v**j_t`` with ``(i_t, j_t) =
    exponents[t]``, ``u = 2 x / (nx - 1) - 1`` and ``v = 2 y / (ny - 1) - 1``.

    Attributes
    ----------
    planes : float64 array, shape (n_terms, k, k)
        Kernel image of each term, k odd, centre at ``k // 2``.
    exponents : tuple of (int, int)
        Powers of u and v of each term.
    shape : (int, int)
        Shape (ny, nx) of the frame it belongs to.
    """

    planes: FloatArray
    exponents: tuple[tuple[int, int], ...]
    shape: tuple[int, int]

    def at(self, x: float, y: float) -> FloatArray:
        """Return the kernel at one place, shape (k, k)."""
        ny, nx = self.shape
        u = 2.0 * x / max(nx - 1, 1) - 1.0
        v = 2.0 * y / max(ny - 1, 1) - 1.0
        weights = np.array([u**i * v**j for i, j in self.exponents])
        return np.tensordot(weights, self.planes, axes=1)


@dataclass(frozen=True, slots=True)
class SpatialPsf:
    """The unit-sum PSF of one frame, varying over it as a polynomial.

    Attributes
    ----------
    kernel : SpatialKernel
        The PSF image at any place.
    fwhm_px : float
        Full width at half maximum at the centre of the frame, pixels.
    n_stars : int
        Stars it was made from.
    """

    kernel: SpatialKernel
    fwhm_px: float
    n_stars: int


@dataclass(frozen=True, slots=True)
class MatchedPair:
    """Two frames on one pixel grid, one PSF and one flux scale (the science's).

    Attributes
    ----------
    science, template : Plane
        ``science.pixels - template.pixels`` is the difference, up to a smooth
        background.  Variances are of one pixel, correlation allowed for.
    model : float32 array, shape (ny, nx)
        The matched template above its sky: what stars look like, counts.
    convolved : str
        Which frame was convolved with the fitted kernel.
    kernel : SpatialKernel
        The fitted kernel; its sum is the photometric scale or its inverse.
    smoothing_px : float
        Sigma of the Gaussian given to the other frame first so that the kernel
        need not sharpen; 0 when none was needed.
    scale, scale_err : float
        Science counts per template count, and 1 sigma.
    fwhm_px : float
        PSF width of the matched frames, pixels.
    n_fit, n_held_out : int
        Stars in the fit, and kept out to judge it.
    held_out_chi2 : float
        Median reduced chi-square of the held-out stars against photon and read
        noise alone; NaN when none could be spared.
    """

    science: Plane
    template: Plane
    model: PixelArray
    convolved: Literal["template", "science"]
    kernel: SpatialKernel
    smoothing_px: float
    scale: float
    scale_err: float
    fwhm_px: float
    n_fit: int
    n_held_out: int
    held_out_chi2: float
