"""Read frames: the one door by which FITS images come in."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from latelight.errors import FrameError
from latelight.frames.celestial import checked_wcs
from latelight.frames.examine import examine
from latelight.frames.files import ImageUnit, find_images, open_fits, pixels_of
from latelight.frames.headers import describe
from latelight.frames.settings import FrameSettings, HeaderWords
from latelight.frames.words import HeaderValues, read_words
from latelight.records import BoolArray, Frame, PixelArray

__all__ = ["read_frames"]


@dataclass(frozen=True, slots=True)
class _Loaded:
    """All that is taken from the file before it is closed."""

    chip: str
    pixels: PixelArray
    declared: BoolArray | None
    variance: PixelArray | None
    values: HeaderValues
    wcs: Any
    ceiling: float
    notes: tuple[str, ...]


def read_frames(
    path: Path,
    words: HeaderWords,
    settings: FrameSettings,
    *,
    chip: str | None = None,
) -> tuple[Frame, ...]:
    """Read every image of a FITS file, with variance, flags, WCS and words.

    Parameters
    ----------
    path : Path
        Plain, gzipped or tile-compressed FITS file.
    words : HeaderWords
        Names of the header words and extensions.
    settings : FrameSettings
        Levels of the flags.
    chip : str or None
        Read only the image of this name (``FrameHeader.chip``); all by default.

    Returns
    -------
    tuple of Frame
        In the order of the file.

    Raises
    ------
    FrameError
        If the file cannot be read, its words or WCS are faulty, or its pixels
        show nothing.
    """
    with open_fits(path) as file:
        units = find_images(path, file, words=words)
        if chip is not None:
            units = _only(path, units, chip)
        loaded = [_load(path, unit, words) for unit in units]
    return tuple(_frame(path, image, settings) for image in loaded)


def _only(path: Path, units: tuple[ImageUnit, ...], chip: str) -> tuple[ImageUnit, ...]:
    chosen = tuple(unit for unit in units if unit.chip == chip)
    if not chosen:
        have = ", ".join(repr(unit.chip) for unit in units)
        raise FrameError(path, f"no chip {chip!r}; the file has {have}")
    return chosen


def _load(path: Path, unit: ImageUnit, words: HeaderWords) -> _Loaded:
    values = read_words(path, unit.headers, words=words)
    wcs, notes = checked_wcs(path, unit.headers, shape=unit.shape)
    declared = None
    if unit.mask is not None:
        # NaN in a mask is as good as bad.
        declared = pixels_of(path, unit.mask) != 0
    return _Loaded(
        chip=unit.chip,
        pixels=pixels_of(path, unit.hdu),
        declared=declared,
        variance=None if unit.variance is None else pixels_of(path, unit.variance),
        values=values,
        wcs=wcs,
        ceiling=_ceiling(unit.headers[0]),
        notes=notes,
    )


def _ceiling(header: Any) -> float:
    """Return the largest count the data type of an image can hold."""
    bits = int(header.get("BITPIX", 0))
    if bits not in (8, 16, 32):
        return math.inf
    stored = 255 if bits == 8 else 2 ** (bits - 1) - 1
    scale, zero = float(header.get("BSCALE", 1.0)), float(header.get("BZERO", 0.0))
    # Beyond 24 bits no detector converts, and float32 would not hold it.
    return scale * stored + zero if bits < 32 and scale > 0.0 else math.inf


def _frame(path: Path, image: _Loaded, settings: FrameSettings) -> Frame:
    values = image.values
    seen = examine(
        path,
        image.pixels,
        declared=image.declared,
        variance=image.variance,
        gain=values.gain,
        read_noise=values.read_noise,
        saturation=values.saturation,
        ceiling=image.ceiling,
        settings=settings,
    )
    return Frame(
        name=describe(path, image.chip),
        path=path,
        chip=image.chip,
        plane=seen.plane,
        wcs=image.wcs,
        mjd=values.mjd,
        exposure_s=values.exposure_s,
        filter=values.filter,
        field=values.field,
        gain=seen.gain,
        read_noise=seen.read_noise,
        saturation=seen.saturation,
        zero_point=values.zero_point,
        notes=values.notes + image.notes + seen.notes,
    )
