"""The camera and the conditions of one simulated exposure."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latelight.records import FloatArray, PixelArray
from latelight.simulation.optics import MoffatField

__all__ = ["BadColumn", "Camera", "Exposure", "Patch"]


@dataclass(frozen=True, slots=True)
class BadColumn:
    """A faulty stretch of one detector column.

    Attributes
    ----------
    col, first, last : int
        Column, and rows ``first <= row < last``.
    gain : float
        What is left of the true signal, 0-1.
    excess : float
        Added counts.
    """

    col: int
    first: int
    last: int
    gain: float
    excess: float


@dataclass(frozen=True, slots=True)
class Camera:
    """The detector and the telescope's optical habits, the same at every epoch.

    Attributes
    ----------
    shape : (int, int)
        Pixels (ny, nx).
    scale_arcsec : float
        Arcsec per pixel.
    gain : float
        Electrons per count.
    read_noise : float
        Electrons, 1 sigma.
    saturation : float
        Counts of a full well.
    spike_angle : float
        Pixel angle of one of the four diffraction spikes, degrees.
    axis_x, axis_y : float
        Where the optical axis meets the detector, pixels.
    bad_columns : tuple of BadColumn
        Faulty columns.
    """

    shape: tuple[int, int]
    scale_arcsec: float = 0.4
    gain: float = 1.5
    read_noise: float = 7.0
    saturation: float = 58_000.0
    spike_angle: float = 40.0
    axis_x: float = 512.0
    axis_y: float = 512.0
    bad_columns: tuple[BadColumn, ...] = ()


@dataclass(frozen=True, slots=True)
class Exposure:
    """Everything about one exposure but the sky itself.

    Attributes
    ----------
    camera : Camera
        Who took it.
    mjd : float
        Middle of the exposure.
    exposure_s : float
        Seconds.
    filter, field : str
        Words for the header.
    wcs, stated_wcs : astropy.wcs.WCS
        The true world coordinates, and those its header will state.
    psf : MoffatField
        Point-spread function.
    zero_point : float
        Magnitude of one count, transparency included.
    sky_counts : float
        Sky level at the centre, counts per pixel.
    sky_terms : tuple of 5 float
        Relative change of the sky: coefficients of u, v, u^2, uv, v^2.
    """

    camera: Camera
    mjd: float
    exposure_s: float
    filter: str
    field: str
    wcs: Any
    stated_wcs: Any
    psf: MoffatField
    zero_point: float
    sky_counts: float
    sky_terms: tuple[float, ...]

    def counts(self, mag: FloatArray) -> FloatArray:
        """Return the counts of magnitudes."""
        return 10.0 ** (0.4 * (self.zero_point - np.asarray(mag, dtype=float)))

    def sky(self) -> FloatArray:
        """Return the sky, counts, shape of the camera."""
        ny, nx = self.camera.shape
        v, u = np.ogrid[-1.0 : 1.0 : ny * 1j, -1.0 : 1.0 : nx * 1j]
        a, b, c, d, e = self.sky_terms
        relative = 1.0 + a * u + b * v + c * u * u + d * u * v + e * v * v
        return self.sky_counts * relative


@dataclass(frozen=True, slots=True)
class Patch:
    """A rectangle of pixels that may overhang the frame.

    Attributes
    ----------
    row, col : int
        Frame coordinates of its first pixel.
    pixels : float32 array
        Counts.
    """

    row: int
    col: int
    pixels: PixelArray

    def overlap(self, shape: tuple[int, int]) -> tuple[tuple[slice, slice], PixelArray]:
        """Return the frame's slices under the patch and the pixels that fall there."""
        ny, nx = self.pixels.shape
        r0, r1 = max(self.row, 0), max(min(self.row + ny, shape[0]), 0)
        c0, c1 = max(self.col, 0), max(min(self.col + nx, shape[1]), 0)
        inside = self.pixels[
            max(r0 - self.row, 0) : max(r1 - self.row, 0),
            max(c0 - self.col, 0) : max(c1 - self.col, 0),
        ]
        return (slice(r0, max(r1, r0)), slice(c0, max(c1, c0))), inside

    def add_to(self, image: FloatArray) -> None:
        """Add the pixels to a frame in place."""
        where, inside = self.overlap((image.shape[0], image.shape[1]))
        if inside.size:
            image[where] += inside
