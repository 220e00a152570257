"""What both methods do to a raw difference: background, star noise, compacts."""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import numpy as np

from latelight.records import BoolArray, Difference, MaskArray, PixelArray, StarList
from latelight.statistics import robust_sigma
from latelight.subtraction._kernels import add_star_noise
from latelight.subtraction.background import smooth_background
from latelight.subtraction.compact import find_compact, mask_compact
from latelight.subtraction.settings import SubtractionSettings
from latelight.subtraction.star_noise import fit_star_noise
from latelight.threads import over_rows

__all__ = ["finish_difference"]

# Light of a star, in sigma of the sky, above which its residual could lift the
# background, and above which a pixel is no longer blank sky.
_STAR_FOR_BACKGROUND = 10.0
_STAR_FOR_SKY = 3.0
# Star noise, as a share of the variance, that blank sky may hold.
_NEGLIGIBLE = 0.02
# Side of the blocks the noise is measured in, px, how many, and their fewest pixels.
_NOISE_BLOCK = 32
_NOISE_BLOCKS = 400
_FEWEST_SKY = 100


def finish_difference(
    raw: PixelArray,
    variance: PixelArray,
    mask: MaskArray,
    model: PixelArray,
    *,
    stars: StarList,
    fwhm_px: float,
    least_shift_px: float,
    method: Literal["kernel", "proper"],
    settings: SubtractionSettings,
) -> Difference:
    """Turn a raw difference into a Difference.

    Parameters
    ----------
    raw : float32 array, shape (ny, nx)
        Science minus template.
    variance : float32 array, shape (ny, nx)
        Its photon and read noise.
    mask : uint16 array, shape (ny, nx)
        Bits of both frames.
    model : float32 array, shape (ny, nx)
        The stars' light that was taken away, counts.
    stars : StarList
        Stars of the science frame.
    fwhm_px : float
        PSF width of the difference, pixels.
    least_shift_px : float
        Known error of the registration: the least the fit may give, pixels.
    method : {"kernel", "proper"}
        How the difference was made.
    settings : SubtractionSettings
        Table ``[subtraction]``.
    """
    unmasked = mask == 0
    sky_noise = np.float32(np.sqrt(np.median(variance[unmasked][::53])))
    away = unmasked & (np.abs(model) < _STAR_FOR_BACKGROUND * sky_noise)
    pixels = raw - smooth_background(
        raw,
        away,
        mesh_px=settings.background_mesh_px,
        ridge_sigma=settings.ridge_sigma,
    )
    scatter, shift = fit_star_noise(
        pixels,
        variance,
        unmasked,
        model,
        stars=stars,
        fwhm_px=fwhm_px,
        most=settings.star_noise_stars,
    )
    shift = max(shift, least_shift_px)
    total = variance.copy()

    def add_rows(first: int, last: int) -> None:
        add_star_noise(model, scatter, shift, total, first, last)

    over_rows(add_rows, total.shape[0])
    compact = find_compact(
        pixels, total, mask, model, fwhm_px=fwhm_px, sigma=settings.compact_sigma
    )
    marked = mask_compact(
        mask, compact, fwhm_px=fwhm_px, radius_fwhm=settings.compact_radius_fwhm
    )

    def is_blank(box: tuple[slice, slice]) -> BoolArray:
        dark = np.abs(model[box]) < _STAR_FOR_SKY * sky_noise
        calm = total[box] - variance[box] < _NEGLIGIBLE * variance[box]
        return (marked[box] == 0) & dark & calm

    ratio = _noise_ratio(pixels, total, is_blank)
    pixels[marked != 0] = 0.0
    return Difference(
        pixels=pixels,
        variance=total,
        mask=marked,
        fwhm_px=fwhm_px,
        noise_ratio=ratio,
        method=method,
        compact=compact,
        star_scatter=scatter,
        star_shift_px=shift,
    )


def _noise_ratio(
    pixels: PixelArray,
    variance: PixelArray,
    is_blank: Callable[[tuple[slice, slice]], BoolArray],
) -> float:
    """Return measured over predicted noise in blank sky.

    The median over small blocks, each about its own level: a ghost, a halo or a
    trail counts as what it is, not as noise.
    """
    ny, nx = pixels.shape
    corners = [
        (y, x) for y in range(0, ny, _NOISE_BLOCK) for x in range(0, nx, _NOISE_BLOCK)
    ]
    stride = max(1, len(corners) // _NOISE_BLOCKS)
    sigmas = []
    for y, x in corners[::stride]:
        box = np.s_[y : y + _NOISE_BLOCK, x : x + _NOISE_BLOCK]
        sky = is_blank(box)
        if sky.sum() >= _FEWEST_SKY:
            pull = pixels[box][sky] / np.sqrt(variance[box][sky])
            sigmas.append(robust_sigma(pull))
    return float(np.median(sigmas)) if sigmas else float("nan")
