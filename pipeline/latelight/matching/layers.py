"""A frame taken apart for convolution: light, sky, noise and mask."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import sep

from latelight.masks import MaskBit
from latelight.matching._kernels import fill_bad
from latelight.matching.convolution import (
    convolve,
    convolve_mask,
    convolve_variance,
    convolved_power,
    gaussian_kernel,
    kernel_sum,
)
from latelight.records import FloatArray, MaskArray, PixelArray, Plane, SpatialKernel
from latelight.threads import over_rows

__all__ = [
    "KEEP_VALUE",
    "Layer",
    "convolved",
    "layer_of",
    "plane_of",
    "scaled",
    "smooth",
    "smoothed",
]

_SKY_BOX = 128
# Pixels whose own value still says most about a bright star's light.
KEEP_VALUE = MaskBit.SATURATED | MaskBit.BLEED | MaskBit.SPIKE


@dataclass(frozen=True, slots=True)
class Layer:
    """A frame ready for convolution: sky removed, bad pixels filled."""

    light: PixelArray
    sky: PixelArray
    variance: PixelArray
    mask: MaskArray
    noise_power: FloatArray | None


def layer_of(plane: Plane) -> Layer:
    """Take the sky off and fill the pixels that must not be spread."""
    bad = plane.mask != 0
    height, width = plane.pixels.shape
    sky = sep.Background(
        plane.pixels, mask=bad, bw=min(_SKY_BOX, width), bh=min(_SKY_BOX, height)
    ).back(dtype=np.float32)
    light = plane.pixels - sky
    lost = (plane.mask & ~np.uint16(KEEP_VALUE)) != 0
    over_rows(lambda first, last: fill_bad(light, lost, 2, first, last), height)
    return Layer(light, sky, plane.variance, plane.mask, plane.noise_power)


def convolved(layer: Layer, kernel: SpatialKernel) -> Layer:
    """Return a layer convolved with a kernel, its sky scaled by the kernel's sum."""
    total = kernel_sum(kernel)
    return Layer(
        light=convolve(layer.light, kernel),
        sky=layer.sky * total,
        variance=convolve_variance(
            layer.variance, layer.mask, kernel, noise_power=layer.noise_power
        ),
        mask=convolve_mask(layer.mask, kernel),
        noise_power=convolved_power(kernel.at(*_middle(kernel)), layer.noise_power),
    )


def _middle(kernel: SpatialKernel) -> tuple[float, float]:
    ny, nx = kernel.shape
    return (nx - 1) / 2, (ny - 1) / 2


def smoothed(layer: Layer, sigma: float) -> Layer:
    """Return a layer convolved with a Gaussian; sigma 0 changes nothing."""
    if sigma == 0.0:
        return layer
    ny, nx = layer.light.shape
    return convolved(layer, gaussian_kernel(sigma, shape=(ny, nx)))


def scaled(layer: Layer, factor: PixelArray) -> Layer:
    """Return a layer on another flux scale."""
    return Layer(
        layer.light * factor,
        layer.sky * factor,
        layer.variance * factor**2,
        layer.mask,
        layer.noise_power,
    )


def plane_of(layer: Layer) -> Plane:
    """Put a layer together again."""
    light, sky = layer.light, layer.sky
    return Plane(light + sky, layer.variance, layer.mask, layer.noise_power)


def smooth(plane: Plane, sigma_px: float) -> Plane:
    """Return a plane smoothed by a Gaussian, its sky level kept.

    Parameters
    ----------
    plane : Plane
        Pixels with their noise.
    sigma_px : float
        Sigma, pixels; 0 changes nothing.
    """
    return plane if sigma_px == 0.0 else plane_of(smoothed(layer_of(plane), sigma_px))
