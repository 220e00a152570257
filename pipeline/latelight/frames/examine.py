"""From raw pixels to a plane: what is bad, and how noisy the rest is."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from latelight.errors import FrameError
from latelight.frames._kernels import fill_layers
from latelight.frames.background import sky_map
from latelight.frames.flags.bits import has_bit, set_bit
from latelight.frames.flags.columns import find_bad_lines, find_flat_areas
from latelight.frames.flags.cosmic_rays import find_cosmic_rays, measure_sharpness
from latelight.frames.flags.saturation import (
    SaturatedStars,
    estimate_saturation,
    flag_saturated,
)
from latelight.frames.flags.spikes import flag_spikes
from latelight.frames.noise import (
    NoiseModel,
    difference_sigma,
    noise_model,
    variance_plane,
)
from latelight.frames.settings import FrameSettings
from latelight.frames.trails.find import find_trails, trail_mask
from latelight.masks import MaskBit
from latelight.records import BoolArray, MaskArray, PixelArray, Plane

__all__ = ["Examined", "examine"]

# Less of a frame than this is good: nothing can be done with it.
MIN_GOOD = 0.02
# More of it than this is saturated: it was overexposed.
MAX_SATURATED = 0.5
# Faults that leave a pixel's value worthless, to be filled in.
WORTHLESS = (
    MaskBit.NO_DATA
    | MaskBit.SATURATED
    | MaskBit.BLEED
    | MaskBit.COSMIC_RAY
    | MaskBit.BAD_COLUMN
    | MaskBit.TRAIL
    | MaskBit.DECLARED
)
FILL_LAYERS = 16


@dataclass(frozen=True, slots=True)
class Examined:
    """What the pixels of a frame told.

    Attributes
    ----------
    plane : Plane
        Bad pixels filled in, variance, mask.
    gain, read_noise, saturation : float
        Electrons per count, electrons, counts; from the header or estimated.
    notes : tuple of str
        What was estimated.
    """

    plane: Plane
    gain: float
    read_noise: float
    saturation: float
    notes: tuple[str, ...]


def examine(
    path: Path,
    pixels: PixelArray,
    *,
    declared: BoolArray | None,
    variance: PixelArray | None,
    gain: float | None,
    read_noise: float | None,
    saturation: float | None,
    ceiling: float,
    settings: FrameSettings,
) -> Examined:
    """Flag the bad pixels of a frame, fill them in, and give each its variance.

    Parameters
    ----------
    path : Path
        The file, for messages.
    pixels : float32 array, shape (ny, nx)
        Counts; NaN or infinite where there are none.
    declared : bool array, shape (ny, nx), or None
        Pixels the file itself calls bad.
    variance : float32 array, shape (ny, nx), or None
        Variance the file gives, counts squared; None to build it.
    gain, read_noise, saturation : float or None
        What the header says.
    ceiling : float
        Largest count of the data type; ``inf`` for floating point.
    settings : FrameSettings
        Levels of the flags.

    Raises
    ------
    FrameError
        If the frame is blank, constant or saturated.
    """
    mask, counts = _start(path, pixels, declared, variance)
    sky_level, sigma = _rough_sky(counts, mask)
    notes: tuple[str, ...] = ()
    if saturation is None:
        saturation, notes = estimate_saturation(
            counts, sky=sky_level, sigma=sigma, ceiling=ceiling
        )
    _refuse_saturated(path, counts, mask, saturation)
    stars = flag_saturated(
        counts,
        mask,
        level=saturation,
        rim=settings.saturation_rim_px,
        core_factor=settings.core_factor,
        sky=sky_level,
        sigma=sigma,
        along_rows=settings.readout == "rows",
    )
    try:
        sky = sky_map(counts, mask, cell=settings.sky_cell_px)
        bad = find_bad_lines(
            counts,
            sky,
            mask,
            sigma=difference_sigma(counts, mask),
            n_sigma=settings.bad_column_sigma,
        )
        set_bit(mask, bad, MaskBit.BAD_COLUMN)
        noise = noise_model(counts, sky, mask, gain=gain, read_noise=read_noise)
    except ValueError as error:
        reason = (
            f"no noise can be measured ({error}): constant or hardly any good pixel"
        )
        raise FrameError(path, reason) from error
    _flag_artefacts(counts, sky, mask, stars, noise, settings)
    _flag_edge(mask, settings.edge_px)
    filled = _filled(counts, sky, mask)
    built = variance_plane(filled, sky, noise=noise)
    if variance is not None:
        built = np.where((variance > 0) & np.isfinite(variance), variance, built)
    return Examined(
        plane=Plane(filled, built, mask),
        gain=noise.gain,
        read_noise=noise.read_noise,
        saturation=saturation,
        notes=notes + noise.notes,
    )


def _start(
    path: Path,
    pixels: PixelArray,
    declared: BoolArray | None,
    variance: PixelArray | None,
) -> tuple[MaskArray, PixelArray]:
    """Return the first mask, and the pixels with a finite value everywhere."""
    finite = np.isfinite(pixels)
    mask = np.zeros(pixels.shape, dtype=np.uint16)
    counts = pixels
    if not finite.all():
        if not finite.any():
            reason = "every pixel is NaN or blank: copy the file again or leave it out"
            raise FrameError(path, reason)
        set_bit(mask, ~finite, MaskBit.NO_DATA)
        counts = np.where(finite, pixels, np.median(pixels[finite]))
    lowest, highest = float(counts.min()), float(counts.max())
    if lowest == highest:
        reason = f"every pixel is {lowest:g}: a constant frame shows nothing"
        raise FrameError(path, reason)
    set_bit(mask, find_flat_areas(counts), MaskBit.NO_DATA)
    if declared is not None:
        set_bit(mask, declared, MaskBit.DECLARED)
    if variance is not None:
        set_bit(mask, ~((variance > 0) & np.isfinite(variance)), MaskBit.NO_DATA)
    if np.count_nonzero(mask == 0) < MIN_GOOD * mask.size:
        reason = "hardly any pixel is good: check the frame and its mask plane"
        raise FrameError(path, reason)
    return mask, counts


def _rough_sky(counts: PixelArray, mask: MaskArray) -> tuple[float, float]:
    """Return the median of the good pixels, and sigma from below it."""
    good = counts[::5, ::5][mask[::5, ::5] == 0]
    if good.size == 0:
        good = counts[mask == 0]
    low, middle = np.quantile(good, [0.1587, 0.5])
    return float(middle), max(float(middle - low), 1e-6)


def _refuse_saturated(
    path: Path, counts: PixelArray, mask: MaskArray, saturation: float
) -> None:
    over = np.count_nonzero((counts >= saturation) & (mask == 0))
    share = over / np.count_nonzero(mask == 0)
    if share > MAX_SATURATED:
        reason = (
            f"{100.0 * share:.0f} % of the pixels are saturated (at {saturation:g} "
            "counts or above): overexposed, or check the word in [header] saturation"
        )
        raise FrameError(path, reason)


def _flag_artefacts(
    counts: PixelArray,
    sky: PixelArray,
    mask: MaskArray,
    stars: SaturatedStars,
    noise: NoiseModel,
    settings: FrameSettings,
) -> None:
    """Flag cosmic rays, spikes and trails in ``mask``, in place."""
    sigma = float(np.sqrt(noise.sky_variance))
    sharpness = measure_sharpness(counts, sky, mask, noise=noise)
    rays = find_cosmic_rays(
        counts,
        sky,
        mask,
        noise=noise,
        sharpness=sharpness,
        n_sigma=settings.cosmic_ray_sigma,
        margin=settings.cosmic_ray_margin,
    )
    set_bit(mask, rays, MaskBit.COSMIC_RAY)
    # Before trails, for which long spikes would be taken.
    flag_spikes(
        counts, sky, mask, stars=stars, core_factor=settings.core_factor, sigma=sigma
    )
    trails = find_trails(
        counts,
        sky,
        mask,
        sigma=sigma,
        fwhm=sharpness.fwhm_px,
        n_sigma=settings.trail_sigma,
        min_length=settings.trail_min_length,
    )
    if trails:
        set_bit(mask, trail_mask(trails, shape=mask.shape), MaskBit.TRAIL)


def _flag_edge(mask: MaskArray, width: int) -> None:
    if width > 0:
        for edge in (np.s_[:width], np.s_[-width:]):
            set_bit(mask, edge, MaskBit.EDGE)
            set_bit(mask, (slice(None), edge), MaskBit.EDGE)


def _filled(counts: PixelArray, sky: PixelArray, mask: MaskArray) -> PixelArray:
    """Return the pixels with worthless ones filled from their rims, or the sky."""
    todo = has_bit(mask, WORTHLESS)
    ys, xs = np.nonzero(todo)
    filled = counts.copy()
    if ys.size:
        fill_layers(filled, todo, ys, xs, FILL_LAYERS)
        filled[todo] = sky[todo]
    return filled
