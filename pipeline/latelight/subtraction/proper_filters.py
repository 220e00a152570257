"""The filters of proper image subtraction, in Fourier space.

Zackay, Ofek & Gal-Yam 2016, ApJ 830, 27, doi:10.3847/0004-637X/830/1/27.  With N the
new and R the reference image, P their unit-sum PSFs, F their flux zero points and
sigma their sky noise:

    den  = sigma_n^2 F_r^2 |P_r|^2 + sigma_r^2 F_n^2 |P_n|^2
    D    = (F_r P_r N - F_n P_n R) / sqrt(den)
    F_D  = F_r F_n / sqrt(sigma_n^2 F_r^2 + sigma_r^2 F_n^2)
    P_D  = F_r F_n P_r P_n / (F_D sqrt(den))
    S    = F_D D P_D*

all of them transforms except the numbers F and sigma.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage

from latelight.records import FloatArray

__all__ = [
    "ProperFilters",
    "corrected_score",
    "noise_spectrum",
    "origin_transform",
    "proper_filters",
]

ComplexArray = NDArray[np.complexfloating]


@dataclass(frozen=True, slots=True)
class ProperFilters:
    """What is applied to each image.

    Attributes
    ----------
    new, reference : complex array, shape (..., m, m // 2 + 1)
        ``D = new * N - reference * R``, unit noise in the sky.
    psf : complex array, same shape
        P_D, unit sum.
    flux : float or float64 array
        F_D: counts in D per unit of flux.
    """

    new: ComplexArray
    reference: ComplexArray
    psf: ComplexArray
    flux: FloatArray


def origin_transform(psf: FloatArray, size: int) -> ComplexArray:
    """Return the transform of a PSF image moved to the origin of a square grid.

    Parameters
    ----------
    psf : array, shape (..., k, k)
        k odd, centre at ``k // 2``, not larger than the grid.
    size : int
        Side of the grid, pixels.
    """
    side = psf.shape[-1]
    grid = np.zeros((*psf.shape[:-2], size, size), dtype=psf.dtype)
    grid[..., :side, :side] = psf
    return fft.rfft2(np.roll(grid, (-(side // 2), -(side // 2)), axis=(-2, -1)))


def noise_spectrum(noise_power: FloatArray | None, size: int) -> FloatArray:
    """Return a noise power spectrum on the half grid of a real transform.

    Parameters
    ----------
    noise_power : float64 array, shape (64, 64), or None
        Mean 1 on the FFT's frequency grid; None for white noise.
    size : int
        Side of the grid wanted, pixels.
    """
    if noise_power is None:
        return np.ones((1, 1))
    ny, nx = noise_power.shape
    fy = fft.fftfreq(size)[:, None] * ny
    fx = fft.rfftfreq(size)[None, :] * nx
    shape = (size, size // 2 + 1)
    at = [np.broadcast_to(fy, shape), np.broadcast_to(fx, shape)]
    return ndimage.map_coordinates(noise_power, at, order=1, mode="grid-wrap")


def proper_filters(
    new_psf: ComplexArray,
    reference_psf: ComplexArray,
    *,
    new_sigma: FloatArray,
    reference_sigma: FloatArray,
    new_flux: float,
    reference_flux: float,
    reference_noise: FloatArray | None = None,
) -> ProperFilters:
    """Make the filters.

    Parameters
    ----------
    new_psf, reference_psf : complex array, shape (..., m, m // 2 + 1)
        Transforms of the unit-sum PSFs, centred on the origin.
    new_sigma, reference_sigma : float or array that broadcasts with them
        Sky noise of one pixel, counts, positive.
    new_flux, reference_flux : float
        F_n and F_r, positive.
    reference_noise : float64 array, optional
        Power spectrum of the reference's noise, mean 1; white when not given.
        (The paper's sigma_r^2 then becomes sigma_r^2 times this.)
    """
    spectrum = 1.0 if reference_noise is None else reference_noise
    from_new = new_sigma**2 * reference_flux**2
    from_reference = reference_sigma**2 * new_flux**2
    den = from_new * _power(reference_psf) + from_reference * spectrum * _power(new_psf)
    # Only 0 / 0 is kept from arising: however small both transfers are, their ratio
    # decides, and the noise stays white.
    root = np.sqrt(np.maximum(den, np.finfo(den.dtype).tiny))
    flux = reference_flux * new_flux / np.sqrt(from_new + from_reference)
    both = reference_flux * new_flux * reference_psf * new_psf
    return ProperFilters(
        new=reference_flux * reference_psf / root,
        reference=new_flux * new_psf / root,
        psf=both / (flux * root),
        flux=flux,
    )


def _power(transform: ComplexArray) -> FloatArray:
    return transform.real**2 + transform.imag**2


def corrected_score(
    new: FloatArray,
    reference: FloatArray,
    filters: ProperFilters,
    *,
    new_variance: FloatArray,
    reference_variance: FloatArray,
    new_shift_px: float,
    reference_shift_px: float,
) -> tuple[FloatArray, FloatArray]:
    """Return the score S and S_corr of square periodic images with one PSF each.

    ``S_corr = S / sqrt(V(S_N) + V(S_R) + V_ast(S_N) + V_ast(S_R))`` with ``V(S_N) =
    V(N) (x) k_n^2`` and ``V_ast = shift^2 (S_x^2 + S_y^2)`` of each image's part of S
    (section 3.3 of the paper).

    Parameters
    ----------
    new, reference : float64 array, shape (m, m)
        Sky-subtracted images.
    filters : ProperFilters
        Made for grids of side m.
    new_variance, reference_variance : float64 array, shape (m, m)
        Variances with the stars' photon noise.
    new_shift_px, reference_shift_px : float
        1-sigma registration errors of each coordinate, pixels.
    """
    shape = new.shape
    match = filters.flux * np.conj(filters.psf)
    score = np.zeros(shape)
    variance = np.zeros(shape)
    for sign, image, kernel, noise, shift in (
        (1.0, new, filters.new * match, new_variance, new_shift_px),
        (-1.0, reference, filters.reference * match, reference_variance,
         reference_shift_px),
    ):  # fmt: skip
        part = fft.irfft2(fft.rfft2(image) * kernel, shape)
        score += sign * part
        squared = fft.irfft2(kernel, shape) ** 2
        variance += fft.irfft2(fft.rfft2(noise) * fft.rfft2(squared), shape)
        slope_y, slope_x = (
            0.5 * (np.roll(part, -1, axis) - np.roll(part, 1, axis)) for axis in (0, 1)
        )
        variance += shift**2 * (slope_x**2 + slope_y**2)
    return score, score / np.sqrt(variance)
