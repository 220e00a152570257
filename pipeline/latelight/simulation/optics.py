"""The point-spread function of a simulated frame: a Moffat that varies over it.

The profile is that of one pixel's response (sampled at pixel centres, not
integrated again), so the sum over pixels is the flux.  Moffat 1969, A&A 3, 455.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy import fft

from latelight.records import FloatArray
from latelight.threads import n_threads

__all__ = ["MoffatField", "convolve_sampled", "random_psf"]


@dataclass(frozen=True, slots=True)
class MoffatField:
    """A Moffat PSF whose width and ellipticity vary smoothly over the frame.

    With ``u, v`` running from -1 to 1 over the frame, the width is ``fwhm_px *
    (1 + w . (u, v, u^2, uv, v^2))`` and each ellipticity ``c . (1, u, v)``.

    Attributes
    ----------
    fwhm_px : float
        Full width at half maximum at the centre, pixels.
    beta : float
        Moffat exponent, > 1.
    width_terms : tuple of 5 float
        Relative change of the width.
    e1_terms, e2_terms : tuple of 3 float
        Ellipticity along the axes and along the diagonals.
    shape : (int, int)
        Frame shape (ny, nx).
    """

    fwhm_px: float
    beta: float
    width_terms: tuple[float, ...]
    e1_terms: tuple[float, ...]
    e2_terms: tuple[float, ...]
    shape: tuple[int, int]

    def parameters(self, x: ArrayLike, y: ArrayLike) -> FloatArray:
        """Return the profile's form at places on the frame.

        Returns
        -------
        float64 array, shape (n, 4)
            ``a, b, c, norm``: the profile of unit flux is
            ``norm * (1 + a dx^2 + 2 b dx dy + c dy^2) ** -beta``.
        """
        ny, nx = self.shape
        u = 2.0 * np.atleast_1d(np.asarray(x, dtype=float)) / (nx - 1) - 1.0
        v = 2.0 * np.atleast_1d(np.asarray(y, dtype=float)) / (ny - 1) - 1.0
        width = 1.0 + np.array(self.width_terms) @ np.array([u, v, u * u, u * v, v * v])
        linear = np.array([np.ones_like(u), u, v])
        e1 = np.array(self.e1_terms) @ linear
        e2 = np.array(self.e2_terms) @ linear
        # FWHM = 2 alpha sqrt(2^(1/beta) - 1); the form has determinant alpha^-4.
        alpha = self.fwhm_px * width / (2.0 * np.sqrt(2.0 ** (1.0 / self.beta) - 1.0))
        unit = 1.0 / (alpha**2 * np.sqrt(1.0 - e1**2 - e2**2))
        norm = (self.beta - 1.0) / (np.pi * alpha**2)
        return np.column_stack([(1.0 - e1) * unit, -e2 * unit, (1.0 + e1) * unit, norm])

    def stamp(self, x: float, y: float, *, half: int, oversample: int) -> FloatArray:
        """Return the PSF at one place as a unit-sum image.

        Parameters
        ----------
        x, y : float
            Where on the frame, pixels.
        half : int
            Half size, oversampled pixels: the stamp is ``2 half + 1`` wide.
        oversample : int
            Samples per pixel.
        """
        a, b, c, _ = self.parameters(x, y)[0]
        d = np.arange(-half, half + 1) / oversample
        form = (
            a * d[None, :] ** 2 + 2 * b * d[None, :] * d[:, None] + c * d[:, None] ** 2
        )
        image = (1.0 + form) ** -self.beta
        return image / image.sum()


def convolve_sampled(
    image: FloatArray, psf: MoffatField, *, x: float, y: float, oversample: int
) -> FloatArray:
    """Convolve an oversampled image with the PSF at one place of the frame.

    Parameters
    ----------
    image : float64 array, shape (my, mx)
        Brightness at ``oversample`` samples per pixel, zero near its edges.
    psf : MoffatField
        PSF of the frame.
    x, y : float
        Where on the frame, pixels.
    oversample : int
        Samples per pixel.
    """
    # Eight FWHM hold all but 1e-4 of a Moffat of beta 3; the rest is renormalised.
    half = int(np.ceil(4.0 * psf.fwhm_px * oversample))
    kernel = psf.stamp(x, y, half=half, oversample=oversample)
    shape = [fft.next_fast_len(n + 2 * half, real=True) for n in image.shape]
    workers = n_threads()
    spectrum = fft.rfft2(image, shape, workers=workers)
    spectrum *= fft.rfft2(kernel, shape, workers=workers)
    full = fft.irfft2(spectrum, shape, workers=workers)
    return full[half : half + image.shape[0], half : half + image.shape[1]]


def random_psf(
    rng: np.random.Generator, *, fwhm_px: float, shape: tuple[int, int]
) -> MoffatField:
    """Draw the PSF of one exposure: some coma, some guiding error, some tilt."""
    return MoffatField(
        fwhm_px=fwhm_px,
        beta=float(rng.uniform(2.9, 3.9)),
        width_terms=tuple(rng.normal(0.0, [0.02, 0.02, 0.015, 0.01, 0.015]).tolist()),
        e1_terms=tuple(rng.normal(0.0, [0.025, 0.02, 0.02]).tolist()),
        e2_terms=tuple(rng.normal(0.0, [0.025, 0.02, 0.02]).tolist()),
        shape=shape,
    )
