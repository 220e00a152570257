"""Normal equations of the kernel fit, one small system a star."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from latelight.matching._kernels import add_gram, filter_stamp
from latelight.matching.basis import KernelBasis
from latelight.matching.convolution import noise_gain
from latelight.records import BoolArray, FloatArray, IntArray, PixelArray
from latelight.threads import over_rows

__all__ = ["FitImages", "StarSystems", "build_systems", "disc_offsets"]

# Share of the noise term taken out of the normal equations; the rest is a gentle
# ridge on the functions the stars say nothing about.
_NOISE_REMOVED = 0.95


@dataclass(frozen=True, slots=True)
class StarSystems:
    """What each star says about the kernel's coefficients.

    For star s with coefficients c, ``chi2 = t - 2 b.c + c.G.c``; ``N`` is the part
    of G that comes from the noise of the convolved frame.

    Attributes
    ----------
    gram : float64 array, shape (n_stars, n_basis, n_basis)
        G.
    noise : float64 array, shape (n_stars, n_basis, n_basis)
        N, already times the share to be removed.
    cross : float64 array, shape (n_stars, n_basis)
        b.
    total : float64 array, shape (n_stars,)
        t.
    degrees : float64 array, shape (n_stars,)
        Pixels used less the local background.
    """

    gram: FloatArray
    noise: FloatArray
    cross: FloatArray
    total: FloatArray
    degrees: FloatArray

    def chi2(self, coefficients: FloatArray) -> FloatArray:
        """Return each star's reduced chi-square, coefficients (n_stars, n_basis)."""
        gc = np.einsum("sij,sj->si", self.gram, coefficients)
        raw = self.total + np.einsum("si,si->s", coefficients, gc - 2.0 * self.cross)
        return raw / self.degrees


@dataclass(frozen=True, slots=True)
class FitImages:
    """What the kernel is fitted to.

    Attributes
    ----------
    sharp, target : float32 array, shape (ny, nx)
        The frame to be convolved and the other, sky removed.
    sharp_variance, target_variance : float32 array, shape (ny, nx)
        Their variances.
    bad : bool array, shape (ny, nx)
        Not to be used.
    noise_power : float64 array, shape (64, 64), or None
        Power spectrum of the sharp frame's noise.
    """

    sharp: PixelArray
    target: PixelArray
    sharp_variance: PixelArray
    target_variance: PixelArray
    bad: BoolArray
    noise_power: FloatArray | None


def disc_offsets(radius: int) -> IntArray:
    """Return the (row, column) offsets of a disc's pixels, shape (n, 2)."""
    step = np.arange(-radius, radius + 1)
    dy, dx = np.meshgrid(step, step, indexing="ij")
    inside = dy**2 + dx**2 <= radius**2
    return np.stack([dy[inside], dx[inside]], axis=1).astype(np.int64)


def build_systems(
    images: FitImages,
    centre: IntArray,
    *,
    basis: KernelBasis,
    radius: int,
    scale: float,
    sharp_sigma: float,
    broad_sigma: float,
) -> StarSystems:
    """Build every star's normal equations.

    Parameters
    ----------
    images : FitImages
        The two frames.
    centre : int64 array, shape (n_stars, 2)
        Row and column of each star.
    basis : KernelBasis
        Kernel functions.
    radius : int
        Radius of the discs, pixels.
    scale : float
        First guess of the kernel's sum.
    sharp_sigma, broad_sigma : float
        Gaussian sigmas of the two PSFs, pixels: a first guess of how much of the
        sharp frame's noise gets through the kernel.

    Notes
    -----
    The local background is eliminated by taking weighted means off.  The noise of
    the convolved frame adds a positive term to G that would bias the kernel's sum
    low (errors in variables; Fuller 1987, Measurement Error Models, ch. 2): for
    weights w and variance V it is ``sum_i w_i V_i * <(K_m * n)(K_n * n)>``, known
    from the variance plane, and handed on to be removed.
    """
    n_stars, n_raw = len(centre), len(basis.pairs)
    offsets = disc_offsets(radius)
    at = tuple(offsets.T + radius)
    taps = basis.taps.astype(np.float32)
    reach = taps.shape[1] // 2
    kernel_sigma = np.sqrt(max(broad_sigma**2 - sharp_sigma**2, 0.0))
    through = scale**2 * _gaussian_gain(float(kernel_sigma))
    gram = np.zeros((n_stars, n_raw, n_raw))
    cross = np.zeros((n_stars, n_raw))
    total, noise, degrees = np.zeros((3, n_stars))

    def do_stars(first: int, last: int) -> None:
        functions = np.empty((len(offsets), n_raw))
        for star in range(first, last):
            box = _cutout(images.sharp, centre[star], radius + reach, beyond=0.0)
            filter_stamp(box, taps, basis.pairs, radius, offsets, functions)
            smooth = [
                _smooth_variance(v, centre[star], radius, broad_sigma)
                for v in (images.target_variance, images.sharp_variance)
            ]
            target_v, sharp_v = (v[at] for v in smooth)
            variance = target_v + through * sharp_v
            bad = _cutout(images.bad, centre[star], radius, beyond=True)[at]
            weight = np.where(bad, 0.0, 1.0 / variance)
            share = weight / weight.sum()
            functions -= share @ functions
            target = _cutout(images.target, centre[star], radius, beyond=0.0)[at]
            target = target.astype(float)
            target -= share @ target
            add_gram(functions, target, weight, gram[star], cross[star])
            total[star] = np.sum(weight * target**2)
            noise[star] = _NOISE_REMOVED * np.sum(weight * sharp_v)
            degrees[star] = np.count_nonzero(weight) - 1

    over_rows(do_stars, n_stars)
    lift = basis.combine
    overlap = _overlaps(basis, images.noise_power)
    return StarSystems(
        gram=lift @ gram @ lift.T,
        noise=noise[:, None, None] * overlap,
        cross=cross @ lift.T,
        total=total,
        degrees=degrees,
    )


def _cutout(
    image: np.ndarray, centre: IntArray, half: int, *, beyond: float | None
) -> np.ndarray:
    """Cut out a box; beyond the frame it holds a value, or that of its rim."""
    first, last = centre - half, centre + half + 1
    y0, x0 = np.maximum(first, 0)
    inside = image[y0 : last[0], x0 : last[1]]
    outside = np.stack([-first, last - image.shape], axis=1).clip(0)
    if not outside.any():
        return np.ascontiguousarray(inside)
    if beyond is None:
        return np.pad(inside, outside, mode="edge")
    return np.pad(inside, outside, constant_values=beyond)


def _smooth_variance(
    variance: PixelArray, centre: IntArray, radius: int, sigma: float
) -> FloatArray:
    """Smooth a cutout so that a pixel's own noise does not set its weight."""
    box = _cutout(variance, centre, radius, beyond=None).astype(float)
    return ndimage.gaussian_filter(box, sigma, truncate=2.0)


def _gaussian_gain(sigma: float) -> float:
    """Return the noise gain of a unit-sum Gaussian kernel on pixels."""
    half = int(np.ceil(4 * sigma)) + 1
    profile = np.exp(-0.5 * (np.arange(-half, half + 1) / max(sigma, 1e-3)) ** 2)
    profile /= profile.sum()
    return noise_gain(np.outer(profile, profile), None)


def _overlaps(basis: KernelBasis, noise_power: FloatArray | None) -> FloatArray:
    """Return the covariance of unit noise seen through each pair of functions."""
    flat = basis.images().reshape(len(basis), -1)
    white = np.einsum("ip,jp->ij", flat, flat)
    if noise_power is None:
        return white
    side = basis.taps.shape[1]
    step = np.arange(side) - side // 2
    along_y, along_x = (
        basis.taps @ np.exp(-2j * np.pi * np.outer(step, np.fft.fftfreq(n)))
        for n in noise_power.shape
    )
    spectra = np.einsum(
        "by,bx->byx", along_y[basis.pairs[:, 0]], along_x[basis.pairs[:, 1]]
    ).reshape(len(basis.pairs), -1)
    parts = np.concatenate([spectra.real, spectra.imag], axis=1)
    colour = np.tile(noise_power.ravel() - 1.0, 2) / noise_power.size
    raw = (parts * colour) @ parts.T
    return white + basis.combine @ raw @ basis.combine.T
