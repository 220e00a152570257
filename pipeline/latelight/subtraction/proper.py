"""Proper image subtraction over a frame, in overlapping blocks with local PSFs."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import sep
from scipy import fft

from latelight.mask_growth import disc, grow_mask
from latelight.masks import MaskBit
from latelight.records import (
    Difference,
    FloatArray,
    MaskArray,
    PixelArray,
    Plane,
    SpatialPsf,
    StarList,
)
from latelight.subtraction.finish import finish_difference
from latelight.subtraction.proper_filters import (
    ProperFilters,
    noise_spectrum,
    origin_transform,
    proper_filters,
)
from latelight.subtraction.settings import SubtractionSettings
from latelight.threads import n_threads
from latelight.widths import fwhm_of

__all__ = ["subtract_proper"]

_SKY_BOX = 128
# Width of the linear joins between blocks, pixels.
_JOIN = 32
# Growth of masked pixels, in FWHM: those whose light is unknown, and the others.
_UNKNOWN = MaskBit.SATURATED | MaskBit.BLEED | MaskBit.SPIKE
_UNKNOWN_FWHM = 1.5
_FILLED_FWHM = 0.5


@dataclass(frozen=True, slots=True)
class _Inputs:
    """Both frames, sky removed and padded, in template flux scaled by ``scale``."""

    science: PixelArray
    template: PixelArray
    science_variance: PixelArray
    template_variance: PixelArray


def subtract_proper(
    science: Plane,
    template: Plane,
    *,
    science_psf: SpatialPsf,
    template_psf: SpatialPsf,
    scale: float,
    registration_error_px: float,
    stars: StarList,
    settings: SubtractionSettings,
) -> Difference:
    """Subtract by the statistic that is optimal in the sky-dominated limit.

    Parameters
    ----------
    science : Plane
        The science frame.
    template : Plane
        The template, resampled onto the science grid; its noise power spectrum,
        where it has one, takes the place of white noise.
    science_psf, template_psf : SpatialPsf
        Unit-sum PSFs on the science grid.
    scale : float
        Science counts per template count, positive.
    registration_error_px : float
        1-sigma error of the alignment, pixels: the least ``star_shift_px``.
    stars : StarList
        Stars of the science frame.
    settings : SubtractionSettings
        Table ``[subtraction]``.

    Returns
    -------
    Difference
        D / F_D: science counts, with the PSF P_D of unit sum.

    Raises
    ------
    ValueError
        If the planes differ in shape or the scale is not positive.

    Notes
    -----
    Zackay, Ofek & Gal-Yam 2016, ApJ 830, 27, doi:10.3847/0004-637X/830/1/27, in
    blocks that overlap by more than the filters reach, each with its own PSFs and
    sky noise, joined by linear ramps.  Bad pixels of one frame are filled with the
    other's light, and what they reach is masked.
    """
    if science.pixels.shape != template.pixels.shape:
        msg = (
            "template must be resampled onto the science grid: shapes "
            f"{template.pixels.shape} and {science.pixels.shape} differ"
        )
        raise ValueError(msg)
    if not scale > 0:
        msg = f"scale must be positive, got {scale}"
        raise ValueError(msg)
    margin = max(p.kernel.planes.shape[1] for p in (science_psf, template_psf)) // 2 + 4
    inputs, sky = _prepare(science, template, scale, margin)
    ny, nx = science.pixels.shape
    new, model, variance = np.zeros((3, ny, nx), dtype=np.float32)
    size = _block_side((ny, nx), margin, settings.block_px)
    power = template.noise_power
    for corner, weight in _blocks((ny, nx), size, margin):
        centre = (
            corner[1] + (size - 1) / 2 - margin,
            corner[0] + (size - 1) / 2 - margin,
        )
        window = np.s_[corner[0] : corner[0] + size, corner[1] : corner[1] + size]
        parts = _subtract_block(
            [a[window] for a in (inputs.science, inputs.template,
                                 inputs.science_variance, inputs.template_variance)],
            science_psf.kernel.at(*centre),
            template_psf.kernel.at(*centre),
            power,
        )  # fmt: skip
        high, wide = weight.shape
        out = np.s_[corner[0] : corner[0] + high, corner[1] : corner[1] + wide]
        inner = np.s_[margin : margin + high, margin : margin + wide]
        for total, part in zip((new, model, variance), parts, strict=True):
            total[out] += weight * part[inner]
    mask = _grown(science.mask | template.mask, science_psf.fwhm_px)
    return finish_difference(
        new - model + sky,
        variance,
        mask,
        model,
        stars=stars,
        fwhm_px=_difference_fwhm(science, template, science_psf, template_psf, scale),
        least_shift_px=registration_error_px,
        method="proper",
        settings=settings,
    )


def _prepare(
    science: Plane, template: Plane, scale: float, margin: int
) -> tuple[_Inputs, PixelArray]:
    """Remove the skies, fill bad pixels, pad; also return the skies' difference."""
    light, skies = [], []
    for plane in (science, template):
        ny, nx = plane.pixels.shape
        sky = sep.Background(
            plane.pixels,
            mask=plane.mask != 0,
            bw=min(_SKY_BOX, nx),
            bh=min(_SKY_BOX, ny),
        ).back(dtype=np.float32)
        light.append(plane.pixels - sky)
        skies.append(sky)
    # In science counts throughout: F_n = F_r = 1.
    s, t = light[0], light[1] * np.float32(scale)
    bad_s, bad_t = science.mask != 0, template.mask != 0
    filled_s = np.where(bad_s & ~bad_t, t, s)
    filled_t = np.where(bad_t & ~bad_s, s, t)
    return (
        _Inputs(
            science=np.pad(filled_s, margin),
            template=np.pad(filled_t, margin),
            science_variance=_padded_variance(science, margin, 1.0),
            template_variance=_padded_variance(template, margin, scale**2),
        ),
        skies[0] - np.float32(scale) * skies[1],
    )


def _padded_variance(plane: Plane, margin: int, factor: float) -> PixelArray:
    good = plane.mask == 0
    typical = np.float32(np.median(plane.variance[good])) if good.any() else 1.0
    filled = np.where(good, plane.variance, typical) * np.float32(factor)
    return np.pad(filled.astype(np.float32), margin, mode="edge")


def _block_side(shape: tuple[int, int], margin: int, block_px: int) -> int:
    """Return the side of the square blocks: one block if the frame is small."""
    least = 4 * margin + 2 * _JOIN
    whole = max(shape) + 2 * margin
    side = min(max(block_px, least), whole)
    return int(fft.next_fast_len(side, real=True)) if side < whole else whole


def _blocks(
    shape: tuple[int, int], size: int, margin: int
) -> Iterator[tuple[tuple[int, int], PixelArray]]:
    """Yield each block's corner and its share of the pixels it may fill."""
    useful = size - 2 * margin
    rows, cols = (_ramps(n, useful) for n in shape)
    for y, along_y in rows:
        for x, along_x in cols:
            yield (y, x), np.outer(along_y, along_x).astype(np.float32)


def _ramps(n: int, useful: int) -> list[tuple[int, FloatArray]]:
    """Return starts and weights along one axis; the weights sum to 1 everywhere."""
    if n <= useful:
        return [(0, np.ones(n))]
    count = -(-(n - _JOIN) // (useful - _JOIN))
    starts = np.linspace(0, n - useful, count).round().astype(int)
    place = np.arange(n, dtype=float)
    # Each block hands over to the next in the middle of their overlap: a wide join
    # would average two versions of the noise.
    joins = [0.5 * (b + a + useful) for a, b in pairwise(starts)]
    up = [np.ones(n)] + [np.clip((place - j) / _JOIN + 0.5, 0, 1) for j in joins]
    down = [1.0 - u for u in up[1:]] + [np.ones(n)]
    return [
        (int(start), (rise * fall)[start : start + useful])
        for start, rise, fall in zip(starts, up, down, strict=True)
    ]


def _subtract_block(
    block: list[PixelArray],
    science_psf: FloatArray,
    template_psf: FloatArray,
    power: FloatArray | None,
) -> tuple[PixelArray, PixelArray, PixelArray]:
    """Return the science and template parts of D / F_D, and its variance."""
    high, wide = block[0].shape
    size = max(high, wide)
    if (high, wide) != (size, size):  # a whole frame that is not square
        block = [
            np.pad(b, ((0, size - high), (0, size - wide)), mode="edge") for b in block
        ]
    science, template, v_science, v_template = block
    workers = n_threads()
    filters = _filters(science_psf, template_psf, v_science, v_template, power, size)
    shape = (size, size)
    spectra = fft.rfft2(
        np.stack([science, template, v_science, v_template]), workers=workers
    )
    kernels = np.stack([filters.new, filters.reference]) / filters.flux
    kernels = kernels.astype(np.complex64)
    images = fft.irfft2(spectra[:2] * kernels, shape, workers=workers)
    squared = fft.irfft2(kernels, shape, workers=workers) ** 2
    # Correlated template noise passes a different share than white noise does.
    share = np.ones((2, 1, 1), dtype=np.float32)
    if power is not None:
        share[1] = _colour(kernels[1], power, size)
    noise = fft.rfft2(squared * share, workers=workers) * spectra[2:]
    variance = fft.irfft2(noise.sum(axis=0), shape, workers=workers)
    floor = min(float(v_science.min()), float(v_template.min()))
    return images[0], images[1], np.maximum(variance, 1e-3 * floor)


def _filters(
    science_psf: FloatArray,
    template_psf: FloatArray,
    v_science: PixelArray,
    v_template: PixelArray,
    power: FloatArray | None,
    size: int,
) -> ProperFilters:
    return proper_filters(
        origin_transform(science_psf.astype(np.float32), size),
        origin_transform(template_psf.astype(np.float32), size),
        new_sigma=np.sqrt(np.median(v_science[::4, ::4])),
        reference_sigma=np.sqrt(np.median(v_template[::4, ::4])),
        new_flux=1.0,
        reference_flux=1.0,
        reference_noise=noise_spectrum(power, size),
    )


def _colour(kernel: np.ndarray, power: FloatArray, size: int) -> float:
    """Return the noise a kernel passes from coloured over that from white noise."""
    transfer = np.abs(kernel) ** 2
    # Columns but the first and the last of a half transform stand for two.
    twice = np.full(transfer.shape[1], 2.0)
    twice[0] = 1.0
    if size % 2 == 0:
        twice[-1] = 1.0
    spectrum = noise_spectrum(power, size)
    return float(np.sum(transfer * spectrum * twice) / np.sum(transfer * twice))


def _grown(mask: MaskArray, fwhm_px: float) -> MaskArray:
    """Grow the mask by what the filters spread."""
    unknown = (mask & np.uint16(_UNKNOWN)).astype(np.uint16)
    return grow_mask(unknown, footprint=disc(_UNKNOWN_FWHM * fwhm_px)) | grow_mask(
        mask & ~np.uint16(_UNKNOWN), footprint=disc(_FILLED_FWHM * fwhm_px)
    )


def _difference_fwhm(
    science: Plane,
    template: Plane,
    science_psf: SpatialPsf,
    template_psf: SpatialPsf,
    scale: float,
) -> float:
    """Return the width of P_D in the middle of the frame."""
    size = 2 * max(p.kernel.planes.shape[1] for p in (science_psf, template_psf)) + 1
    ny, nx = science.pixels.shape
    middle = ((nx - 1) / 2, (ny - 1) / 2)
    filters = _filters(
        science_psf.kernel.at(*middle),
        template_psf.kernel.at(*middle),
        science.variance,
        template.variance * np.float32(scale**2),
        template.noise_power,
        size,
    )
    return fwhm_of(fft.fftshift(fft.irfft2(filters.psf, (size, size))).astype(float))
