"""Turn pixels into colours: the two epochs on one scale, a difference about zero."""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PIL import Image
from scipy import ndimage

from latelight.records import FloatArray, MaskArray, PixelArray
from latelight.statistics import robust_sigma

__all__ = [
    "BoolArray",
    "ColourArray",
    "DifferenceScale",
    "colour_difference",
    "colour_epochs",
    "difference_scale",
    "diverging_colours",
    "enlarge",
    "smooth",
]

ColourArray = NDArray[np.uint8]
BoolArray = NDArray[np.bool_]

# Ends of the grey scale in sigmas of the sky, and where it turns logarithmic:
# an echo of half a sigma a pixel stands out, and stars do not swamp it.
_DARKEST, _LIGHTEST, _SOFTENING = 20.0, -2.5, 3.0

# Blue through near-white to orange: told apart by every common colour vision,
# and lightness alone gives the distance from zero.
_STOPS = np.array([-1.0, -0.5, 0.0, 0.5, 1.0])
_STOP_COLOURS = np.array(
    [(12, 44, 110), (88, 150, 208), (250, 249, 246), (240, 160, 72), (124, 48, 4)],
    dtype=float,
)
_HATCH_LIGHT, _HATCH_DARK = (205, 199, 212), (150, 141, 163)


@dataclass(frozen=True, slots=True)
class DifferenceScale:
    """How a difference is shown: smoothed pixels and the value of full colour.

    Attributes
    ----------
    pixels : float64 array, shape (ny, nx)
        Smoothed difference, counts; zero where masked.
    limit : float
        Counts at either end of the colours.
    """

    pixels: FloatArray
    limit: float


def colour_epochs(*epochs: PixelArray) -> tuple[ColourArray, ...]:
    """Return images of several epochs in greys, dark is bright, on one scale.

    Each epoch's own sky is taken out; the scale is the mean noise of all of them.

    Parameters
    ----------
    epochs : float32 arrays, shape (ny, nx)
        Counts, NaN without value.

    Returns
    -------
    tuple of uint8 arrays, shape (ny, nx, 3)
    """
    skies = [_location_scale(epoch) for epoch in epochs]
    sigma = float(np.mean([scale for _, scale in skies])) or 1.0
    ends = np.arcsinh(np.array([_LIGHTEST, _DARKEST]) / _SOFTENING)
    images = []
    for epoch, (sky, _) in zip(epochs, skies, strict=True):
        level = np.arcsinh((epoch - sky) / (_SOFTENING * sigma))
        grey = 1.0 - (level - ends[0]) / (ends[1] - ends[0])
        grey = np.nan_to_num(grey, nan=1.0).clip(0.0, 1.0) * 255.0
        images.append(np.repeat(grey.astype(np.uint8)[..., None], 3, axis=2))
    return tuple(images)


def smooth(
    pixels: PixelArray, mask: MaskArray | BoolArray, *, sigma_px: float
) -> FloatArray:
    """Smooth an image with a Gaussian that skips masked pixels.

    Parameters
    ----------
    pixels : float32 array, shape (ny, nx)
        Any values where masked, NaN included.
    mask : array, shape (ny, nx)
        Non-zero = skip.
    sigma_px : float
        Pixels; 0 leaves the good pixels alone.

    Returns
    -------
    float64 array, shape (ny, nx)
        Zero where masked.
    """
    good = (mask == 0) & np.isfinite(pixels)
    values = np.where(good, pixels, 0.0)
    if sigma_px == 0.0:
        return values
    weight = good.astype(float)
    values = ndimage.gaussian_filter(values, sigma_px, mode="constant", truncate=3)
    weight = ndimage.gaussian_filter(weight, sigma_px, mode="constant", truncate=3)
    # A masked pixel has no value of its own, however good its neighbours are.
    return np.where(good, values / np.maximum(weight, 1e-6), 0.0)


def difference_scale(
    pixels: PixelArray,
    mask: MaskArray,
    *,
    smoothing_px: float,
    brightness: float = 0.0,
) -> DifferenceScale:
    """Choose the colours' scale of a difference.

    Parameters
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts.
    mask : uint16 array, shape (ny, nx)
        Non-zero = not used.
    smoothing_px : float
        Sigma of the Gaussian, pixels.
    brightness : float
        Counts per pixel that should not saturate, for example an arc's.
    """
    smoothed = smooth(pixels, mask, sigma_px=smoothing_px)
    good = (mask == 0) & np.isfinite(pixels)
    sigma = _location_scale(smoothed[good])[1] if good.any() else 0.0
    return DifferenceScale(smoothed, max(6.0 * sigma, 1.2 * brightness) or 1.0)


def colour_difference(scale: DifferenceScale) -> ColourArray:
    """Return a difference in blue (negative), white and orange (positive)."""
    return diverging_colours(scale.pixels / scale.limit)


def diverging_colours(values: FloatArray) -> ColourArray:
    """Return the colours of values from -1 to 1; shape of values + (3,)."""
    steps = np.linspace(-1.0, 1.0, 255)
    table = np.stack(
        [np.interp(steps, _STOPS, _STOP_COLOURS[:, band]) for band in range(3)], axis=1
    )
    index = np.rint((np.clip(values, -1.0, 1.0) + 1.0) * 127.0).astype(np.intp)
    return table.round().astype(np.uint8)[index]


def enlarge(
    colours: ColourArray, hatched: BoolArray, *, width: int, height: int, smooth: bool
) -> Image.Image:
    """Scale an image to a panel, y upwards, and hatch some of its pixels.

    Parameters
    ----------
    colours : uint8 array, shape (ny, nx, 3)
        The image, row 0 at the bottom.
    hatched : bool array, shape (ny, nx)
        Pixels to hatch: those without a usable value.
    width, height : int
        Size of the panel; when smaller than the image, pixels are averaged.
    smooth : bool
        When larger, blend the pixels instead of showing each as a square.
    """
    image = Image.fromarray(np.ascontiguousarray(colours[::-1]))
    if colours.shape[1] > width or colours.shape[0] > height:
        way = Image.Resampling.BOX
    else:
        way = Image.Resampling.BILINEAR if smooth else Image.Resampling.NEAREST
    panel = image.resize((width, height), way)
    if hatched.any():
        area = Image.fromarray(np.where(hatched[::-1], 255, 0).astype(np.uint8))
        area = area.resize((width, height), Image.Resampling.NEAREST)
        panel.paste(_hatch(width, height), mask=area)
    return panel


@functools.cache
def _hatch(width: int, height: int) -> Image.Image:
    x, y = np.arange(width), np.arange(height)
    stripe = ((x[None, :] + y[:, None]) // 4 % 3 == 0)[..., None]
    return Image.fromarray(np.where(stripe, _HATCH_DARK, _HATCH_LIGHT).astype(np.uint8))


def _location_scale(values: FloatArray | PixelArray) -> tuple[float, float]:
    finite = values[np.isfinite(values)]
    if finite.size == 0:
        return 0.0, 0.0
    middle = float(np.median(finite))
    return middle, robust_sigma(finite, center=middle)
