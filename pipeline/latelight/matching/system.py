"""Normal equations of the kernel fit, one small system a star."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from latelight.matching._kernels import filter_stamps
from latelight.matching.basis import KernelBasis
from latelight.matching.convolution import noise_gain
from latelight.records import FloatArray, IntArray, PixelArray
from latelight.threads import over_rows

__all__ = ["StarSystems", "Stamps", "build_systems", "cut_stamps"]

# A star's model error, as a fraction of its light in a pixel: keeps a few very
# bright stars from ruling the fit.
_MODEL_ERROR = 0.01
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
        raw = self.total + np.einsum(
            "si,si->s", coefficients, gc - 2.0 * self.cross
        )
        return raw / self.degrees


@dataclass(frozen=True, slots=True)
class Stamps:
    """Star cutouts of the two frames, disc pixels only.

    Attributes
    ----------
    target : float64 array, shape (n_stars, n_pixels)
        The broader frame.
    target_variance, sharp_variance : float64 array, shape (n_stars, n_pixels)
        Variances, smoothed so that a pixel's own noise does not set its weight.
    good : bool array, shape (n_stars, n_pixels)
        Unmasked in both.
    """

    target: FloatArray
    target_variance: FloatArray
    sharp_variance: FloatArray
    good: np.ndarray


def disc_offsets(radius: int) -> IntArray:
    """Return the (row, column) offsets of a disc's pixels, shape (n, 2)."""
    step = np.arange(-radius, radius + 1)
    dy, dx = np.meshgrid(step, step, indexing="ij")
    inside = dy**2 + dx**2 <= radius**2
    return np.stack([dy[inside], dx[inside]], axis=1).astype(np.int64)


def cut_stamps(
    centre: IntArray,
    *,
    radius: int,
    target: PixelArray,
    target_variance: PixelArray,
    sharp_variance: PixelArray,
    mask: np.ndarray,
    smoothing: float,
) -> Stamps:
    """Cut discs around stars.

    Parameters
    ----------
    centre : int64 array, shape (n_stars, 2)
        Row and column of each star; the disc and 3 px more must lie on the frame.
    radius : int
        Disc radius, pixels.
    target, target_variance, sharp_variance : float32 array, shape (ny, nx)
        Pixels of the broader frame, and the variances of both.
    mask : uint16 array, shape (ny, nx)
        Bits of both.
    smoothing : float
        Sigma of the smoothing of the variances, pixels.
    """
    offsets = disc_offsets(radius)
    rows = centre[:, 0, None] + offsets[:, 0]
    cols = centre[:, 1, None] + offsets[:, 1]
    step = np.arange(-radius, radius + 1)
    box = (centre[:, 0, None, None] + step[:, None], centre[:, 1, None, None] + step)
    place = (slice(None), offsets[:, 0] + radius, offsets[:, 1] + radius)

    def smooth(variance: PixelArray) -> FloatArray:
        return ndimage.gaussian_filter(
            variance[box].astype(float), (0, smoothing, smoothing), truncate=3.0
        )[place]

    return Stamps(
        target=target[rows, cols].astype(float),
        target_variance=smooth(target_variance),
        sharp_variance=smooth(sharp_variance),
        good=mask[rows, cols] == 0,
    )


def build_systems(
    sharp: PixelArray,
    stamps: Stamps,
    centre: IntArray,
    *,
    basis: KernelBasis,
    radius: int,
    scale: float,
    noise_power: FloatArray | None,
    kernel_sigma: float,
) -> StarSystems:
    """Build every star's normal equations.

    Parameters
    ----------
    sharp : float32 array, shape (ny, nx)
        The frame to be convolved, sky removed.
    stamps : Stamps
        Discs of the other frame.
    centre : int64 array, shape (n_stars, 2)
        Row and column of each star.
    basis : KernelBasis
        Kernel functions.
    radius : int
        Radius of the discs, pixels.
    scale : float
        First guess of the kernel's sum.
    noise_power : float64 array, shape (64, 64), or None
        Power spectrum of the convolved frame's noise.
    kernel_sigma : float
        First guess of the kernel's width: how much of that noise gets through.

    Notes
    -----
    The local background is eliminated by taking weighted means off.  The noise of
    the convolved frame adds a positive term to G that would bias the kernel's sum
    low (errors in variables; Fuller 1987, Measurement Error Models, ch. 2): for
    weights w and variance V it is ``sum_i w_i V_i * <(K_m * n)(K_n * n)>``, known
    from the variance plane, and handed on to be removed.
    """
    n_stars, n_pixels = stamps.target.shape
    raw = np.empty((n_stars, len(basis.pairs), n_pixels), dtype=np.float32)
    offsets = disc_offsets(radius)
    taps = basis.taps.astype(np.float32)

    def do_stars(first: int, last: int) -> None:
        filter_stamps(sharp, centre, taps, basis.pairs, offsets, raw, first, last)

    over_rows(do_stars, n_stars)
    through = scale**2 * _gaussian_gain(kernel_sigma)
    light = np.maximum(scale * (raw[:, 0] * basis.combine[0, 0]), 0.0)
    variance = (
        stamps.target_variance
        + through * stamps.sharp_variance
        + (_MODEL_ERROR * light) ** 2
    )
    weight = np.where(stamps.good, 1.0 / variance, 0.0)
    norm = weight.sum(axis=1)
    target = stamps.target - (weight * stamps.target).sum(axis=1)[:, None] / norm[:, None]
    n_basis = len(basis.pairs)
    gram = np.empty((n_stars, n_basis, n_basis))
    cross = np.empty((n_stars, n_basis))
    for star in range(n_stars):
        functions = raw[star].astype(float)
        functions -= (functions @ weight[star] / norm[star])[:, None]
        weighted = functions * weight[star]
        gram[star] = weighted @ functions.T
        cross[star] = weighted @ target[star]
    lift = basis.combine
    overlap = _overlaps(basis.images(), noise_power)
    share = _NOISE_REMOVED * (weight * stamps.sharp_variance).sum(axis=1)
    return StarSystems(
        gram=lift @ gram @ lift.T,
        noise=share[:, None, None] * overlap,
        cross=cross @ lift.T,
        total=(weight * target**2).sum(axis=1),
        degrees=stamps.good.sum(axis=1) - 1.0,
    )


def _gaussian_gain(sigma: float) -> float:
    """Return the noise gain of a unit-sum Gaussian kernel on pixels."""
    half = int(np.ceil(4 * sigma)) + 1
    profile = np.exp(-0.5 * (np.arange(-half, half + 1) / max(sigma, 1e-3)) ** 2)
    profile /= profile.sum()
    return noise_gain(np.outer(profile, profile), None)


def _overlaps(images: FloatArray, noise_power: FloatArray | None) -> FloatArray:
    """Return the covariance of unit noise seen through each pair of functions."""
    flat = images.reshape(len(images), -1)
    if noise_power is None:
        return flat @ flat.T
    ny, nx = noise_power.shape
    y, x = np.indices(images.shape[1:])
    folded = np.zeros((len(images), ny, nx))
    for image, out in zip(images, folded, strict=True):
        np.add.at(out, (y % ny, x % nx), image)
    spectra = np.fft.fft2(folded).reshape(len(images), -1)
    weighted = spectra * noise_power.ravel()
    return np.real(weighted @ spectra.conj().T) / (ny * nx)
