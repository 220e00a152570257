"""The headers of a file without its pixels, for planning pairs."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from latelight.frames.celestial import checked_wcs, footprint
from latelight.frames.files import (
    ImageUnit,
    find_images,
    frame_stem,
    open_fits,
    refuse_truncated,
)
from latelight.frames.settings import HeaderWords
from latelight.frames.words import HeaderValues, read_words
from latelight.records import FloatArray

__all__ = ["FrameHeader", "describe", "read_headers"]


@dataclass(frozen=True, slots=True)
class FrameHeader:
    """What the header of one image says; its pixels were not read.

    Attributes
    ----------
    name : str
        The name its frame will have.
    path : Path
        The file.
    chip : str
        Extension name or number; empty for a file with one image.
    shape : (int, int)
        Rows and columns.
    mjd : float
        Middle of the exposure, MJD (UTC).
    exposure_s : float
        Exposure time, seconds.
    filter, field : str
        Empty when the header has none.
    gain, read_noise, saturation, zero_point : float or None
        Electrons per count, electrons, counts and magnitudes; None when the
        header has none.
    footprint : float64 array, shape (4, 2), or None
        Outer corners, RA and Dec, degrees (ICRS); None without a WCS.
    notes : tuple of str
        What was assumed or is missing.
    """

    name: str
    path: Path
    chip: str
    shape: tuple[int, int]
    mjd: float
    exposure_s: float
    filter: str
    field: str
    gain: float | None
    read_noise: float | None
    saturation: float | None
    zero_point: float | None
    footprint: FloatArray | None
    notes: tuple[str, ...]


def read_headers(path: Path, words: HeaderWords) -> tuple[FrameHeader, ...]:
    """Read the headers of every image of a file.

    Parameters
    ----------
    path : Path
        Plain, gzipped or tile-compressed FITS file.
    words : HeaderWords
        Names of the header words and extensions.

    Raises
    ------
    FrameError
        If the file cannot be read, is shorter than its headers say, or its words,
        extensions or WCS are faulty.
    """
    with open_fits(path) as file:
        units = find_images(path, file, words=words)
        return tuple(_header(path, unit, words) for unit in units)


def describe(path: Path, chip: str) -> str:
    """Return the name of a frame: the file's stem, and the chip if any."""
    return f"{frame_stem(path)}_{chip}" if chip else frame_stem(path)


def _header(path: Path, unit: ImageUnit, words: HeaderWords) -> FrameHeader:
    refuse_truncated(path, unit.hdu)
    values: HeaderValues = read_words(path, unit.headers, words=words)
    wcs, notes = checked_wcs(path, unit.headers, shape=unit.shape)
    return FrameHeader(
        name=describe(path, unit.chip),
        path=path,
        chip=unit.chip,
        shape=unit.shape,
        mjd=values.mjd,
        exposure_s=values.exposure_s,
        filter=values.filter,
        field=values.field,
        gain=values.gain,
        read_noise=values.read_noise,
        saturation=values.saturation,
        zero_point=values.zero_point,
        footprint=footprint(wcs, shape=unit.shape),
        notes=values.notes + notes,
    )
