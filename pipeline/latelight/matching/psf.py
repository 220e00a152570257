"""The PSF of one frame, stacked from its stars."""

from __future__ import annotations

import numpy as np
from scipy import fft

from latelight.errors import StageError
from latelight.matching.settings import MatchingSettings
from latelight.records import FloatArray, Plane, SpatialKernel, SpatialPsf
from latelight.statistics import MAD_TO_SIGMA
from latelight.widths import fwhm_of

__all__ = ["measure_psf", "polynomial_exponents", "positions_matrix"]

_STAGE = "matching"
_FIRST_HALF = 12
_FEWEST = 5
# Half-width of the PSF image in FWHM: a Moffat profile (beta = 3) has 98 % of its
# light within 3.5 FWHM.
_HALF_IN_FWHM = 3.5
# Error of any one star's profile, per pixel and unit flux: no star rules the stack.
_STAR_ERROR = 3e-4


def polynomial_exponents(degree: int) -> tuple[tuple[int, int], ...]:
    """Return the powers (i, j) of u and v with ``i + j <= degree``, lowest first."""
    return tuple((n - j, j) for n in range(degree + 1) for j in range(n + 1))


def positions_matrix(
    x: FloatArray,
    y: FloatArray,
    exponents: tuple[tuple[int, int], ...],
    *,
    shape: tuple[int, int],
) -> FloatArray:
    """Return ``u**i * v**j`` at places on a frame, shape (n, n_terms)."""
    ny, nx = shape
    u = 2.0 * x / max(nx - 1, 1) - 1.0
    v = 2.0 * y / max(ny - 1, 1) - 1.0
    return np.stack([u**i * v**j for i, j in exponents], axis=1)


def measure_psf(
    plane: Plane, *, x: FloatArray, y: FloatArray, settings: MatchingSettings
) -> SpatialPsf:
    """Stack star cutouts into the PSF of a frame.

    Parameters
    ----------
    plane : Plane
        The frame.
    x, y : float64 array, shape (n,)
        Places of clean stars, brightest first, pixels.
    settings : MatchingSettings
        ``psf_stars``, ``psf_degree``.

    Returns
    -------
    SpatialPsf
        Unit sum everywhere; degree in position as the number of stars allows.

    Raises
    ------
    StageError
        If fewer than 5 stars lie unmasked on the frame.

    Notes
    -----
    Each cutout is cleared of its local sky, shifted onto the pixel grid by a
    phase ramp, divided by its sum, and every pixel is fitted as a polynomial of
    the position over the stars, with two rounds of clipping of whole stars
    (blends, galaxies) by their scatter about the fit.
    """
    stamps, kept, weight = _unit_stamps(
        plane, x, y, half=_FIRST_HALF, settings=settings
    )
    width = fwhm_of(np.median(stamps, axis=0))
    half = max(6, int(np.ceil(_HALF_IN_FWHM * width)))
    if half != _FIRST_HALF:
        stamps, kept, weight = _unit_stamps(plane, x, y, half=half, settings=settings)
    shape = plane.pixels.shape
    flat = stamps.reshape(len(stamps), -1)
    keep = np.ones(len(stamps), dtype=bool)
    for _ in range(3):
        exponents = _affordable(settings.psf_degree, int(keep.sum()))
        basis = positions_matrix(x[kept], y[kept], exponents, shape=shape)
        inverse = np.linalg.pinv(basis[keep] * weight[keep])
        planes = inverse @ (flat[keep] * weight[keep])
        scatter = weight[:, 0] * np.sqrt(np.mean((flat - basis @ planes) ** 2, axis=1))
        keep = scatter <= 2.5 * np.median(scatter)
    images = planes.reshape(len(exponents), *stamps.shape[1:]) * _taper(half)
    total = images[0].sum()
    images = images / total
    for term in images[1:]:  # the sum is 1 everywhere, not only in the middle
        term -= term.sum() * images[0]
    kernel = SpatialKernel(images, exponents, (shape[0], shape[1]))
    middle = kernel.at((shape[1] - 1) / 2, (shape[0] - 1) / 2)
    return SpatialPsf(kernel=kernel, fwhm_px=fwhm_of(middle), n_stars=int(keep.sum()))


def _affordable(degree: int, n_stars: int) -> tuple[tuple[int, int], ...]:
    """Return the highest polynomial with at least eight stars for each term."""
    while degree > 0 and 8 * (degree + 1) * (degree + 2) // 2 > n_stars:
        degree -= 1
    return polynomial_exponents(degree)


def _taper(half: int) -> FloatArray:
    """Return a disc that falls smoothly to 0 over its outer fifth."""
    step = np.arange(-half, half + 1)
    radius = np.hypot(step[:, None], step[None, :]) / half
    return np.clip((1.0 - radius) / 0.2, 0.0, 1.0)


def _unit_stamps(
    plane: Plane,
    x: FloatArray,
    y: FloatArray,
    *,
    half: int,
    settings: MatchingSettings,
) -> tuple[FloatArray, np.ndarray, FloatArray]:
    """Cut out unmasked stars, centred and of unit sum; their rows and weights."""
    ny, nx = plane.pixels.shape
    col, row = np.rint(x).astype(int), np.rint(y).astype(int)
    inside = (col >= half) & (row >= half) & (col < nx - half) & (row < ny - half)
    rows = np.flatnonzero(inside)
    step = np.arange(-half, half + 1)
    radius = np.hypot(step[:, None], step[None, :])
    core = radius <= 0.7 * half
    take: list[int] = []
    for star in rows:
        box = np.s_[row[star] - half : row[star] + half + 1,
                    col[star] - half : col[star] + half + 1]  # fmt: skip
        if not plane.mask[box][core].any():
            take.append(int(star))
        if len(take) == settings.psf_stars:
            break
    kept = np.array(take, dtype=int)
    stamps = plane.pixels[
        row[kept, None, None] + step[:, None], col[kept, None, None] + step
    ].astype(float)
    rim = radius > 0.8 * half
    around = stamps[:, rim]
    middle = np.median(around, axis=1)[:, None]
    stamps -= middle[:, :, None]
    stamps = _shift(stamps, x[kept] - col[kept], y[kept] - row[kept])
    total = stamps[:, core].sum(axis=1)
    lit = total > 0
    if lit.sum() < _FEWEST:
        msg = (
            f"the PSF needs at least {_FEWEST} clean unmasked stars, got {lit.sum()}; "
            "lower clean_snr in [registration], or leave the frame out"
        )
        raise StageError(_STAGE, msg)
    stamps, total, kept = stamps[lit], total[lit], kept[lit]
    around, middle = around[lit], middle[lit]
    noise = MAD_TO_SIGMA * np.median(np.abs(around - middle), axis=1) / total
    weight = 1.0 / np.hypot(noise, _STAR_ERROR)
    return stamps / total[:, None, None], kept, weight[:, None]


def _shift(stamps: FloatArray, dx: FloatArray, dy: FloatArray) -> FloatArray:
    """Move each cutout by (-dx, -dy) pixels with a phase ramp."""
    n = stamps.shape[1]
    fy = fft.fftfreq(n)[:, None]
    fx = fft.rfftfreq(n)[None, :]
    phase = fy * dy[:, None, None] + fx * dx[:, None, None]
    return fft.irfft2(fft.rfft2(stamps) * np.exp(2j * np.pi * phase), (n, n))
