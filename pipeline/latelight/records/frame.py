"""A frame: its pixels, and what its header says."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from latelight.records.arrays import FloatArray, MaskArray, PixelArray

__all__ = ["Frame", "Plane"]


@dataclass(frozen=True, slots=True)
class Plane:
    """Pixels with their variance and mask, all of one shape.

    Attributes
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts, sky included.
    variance : float32 array, shape (ny, nx)
        Variance of one pixel, counts squared; finite and positive everywhere.
    mask : uint16 array, shape (ny, nx)
        Bits of :class:`latelight.masks.MaskBit`.
    noise_power : float64 array, shape (64, 64), or None
        Power spectrum of the noise on the FFT's frequency grid, mean 1, where
        resampling has correlated it; None for white noise.
    """

    pixels: PixelArray
    variance: PixelArray
    mask: MaskArray
    noise_power: FloatArray | None = None


@dataclass(frozen=True, slots=True)
class Frame:
    """One image of one exposure, with what its header says.

    Attributes
    ----------
    name : str
        Unique in a night: the file's stem, with the chip when there are several.
    path : Path
        The file it came from.
    chip : str
        Extension name or number; empty for a file with one image.
    plane : Plane
        Pixels, variance and mask.
    wcs : astropy.wcs.WCS or None
        Checked celestial WCS; None when the frame has none.
    mjd : float
        Middle of the exposure, MJD (UTC).
    exposure_s : float
        Exposure time, seconds.
    filter : str
        Filter word.
    field : str
        Field word; empty when the header has none.
    gain : float
        Electrons per count.
    read_noise : float
        Electrons, 1 sigma.
    saturation : float
        Counts at which the detector saturates; ``inf`` when unknown.
    zero_point : float or None
        Magnitude of one count per exposure; None when unknown.
    notes : tuple of str
        What was estimated, assumed or left out, in words for the log.
    """

    name: str
    path: Path
    chip: str
    plane: Plane
    wcs: Any
    mjd: float
    exposure_s: float
    filter: str
    field: str
    gain: float
    read_noise: float
    saturation: float
    zero_point: float | None
    notes: tuple[str, ...] = ()
