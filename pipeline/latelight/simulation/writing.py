"""Write simulated frames as FITS, the same bytes every time."""

from __future__ import annotations

import gzip
import io
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.time import Time

from latelight.errors import ProductError
from latelight.simulation.exposures import Exposure

__all__ = [
    "STANDARD_WORDS",
    "ImageExtension",
    "chip_words",
    "exposure_words",
    "write_extensions",
    "write_image",
]

SECONDS_PER_DAY = 86_400.0
MJD_TO_JD = 2_400_000.5

STANDARD_WORDS = {
    "mjd": "MJD-OBS",
    "exposure": "EXPTIME",
    "filter": "FILTER",
    "field": "OBJECT",
    "gain": "GAIN",
    "read_noise": "RDNOISE",
    "saturation": "SATURATE",
    "zero_point": "MAGZERO",
}


@dataclass(frozen=True, slots=True)
class ImageExtension:
    """One image of a file.

    Attributes
    ----------
    name : str
        EXTNAME; empty for none.
    version : int
        EXTVER: chip number; 0 for none.
    pixels : uint16 or uint8 array, shape (ny, nx)
        Counts, or a mask.
    header : astropy.io.fits.Header
        Its own words.
    """

    name: str
    version: int
    pixels: np.ndarray
    header: fits.Header


def exposure_words(
    exposure: Exposure, *, words: dict[str, str], observatory: str
) -> fits.Header:
    """Return the header words that hold for a whole exposure.

    Parameters
    ----------
    exposure : Exposure
        The exposure.
    words : dict
        The observatory's word for each of the keys of ``STANDARD_WORDS``.  A word
        for the time that contains ``JD`` but not ``MJD`` gets a Julian date alone,
        any other an MJD, with DATE-OBS beside it.
    observatory : str
        Its name.
    """
    start = exposure.mjd - 0.5 * exposure.exposure_s / SECONDS_PER_DAY
    word = words["mjd"]
    scale = "MJD" if "MJD" in word or "JD" not in word else "JD"
    header = fits.Header()
    header["TELESCOP"] = (observatory, "invented: a simulated frame")
    header[words["field"]] = (exposure.field, "field")
    header[words["filter"]] = (exposure.filter, "filter")
    header[word] = (
        round(start if scale == "MJD" else start + MJD_TO_JD, 7),
        f"start of exposure, {scale} UTC",
    )
    if scale == "MJD":
        date = Time(round(start, 7), format="mjd").isot
        header["DATE-OBS"] = (date, "start of exposure, UTC")
    header[words["exposure"]] = (exposure.exposure_s, "[s] exposure time")
    return header


def chip_words(exposure: Exposure, *, words: dict[str, str]) -> fits.Header:
    """Return the header words of one detector, with the WCS as it is stated."""
    camera = exposure.camera
    header = fits.Header()
    header[words["gain"]] = (camera.gain, "[electron/adu]")
    header[words["read_noise"]] = (camera.read_noise, "[electron] 1 sigma")
    header[words["saturation"]] = (camera.saturation, "[adu] full well")
    header[words["zero_point"]] = (round(exposure.zero_point, 3), "[mag] of one count")
    header["BUNIT"] = "adu"
    header.update(_world_words(exposure.stated_wcs))
    return header


def write_image(path: Path, pixels: np.ndarray, header: fits.Header) -> Path:
    """Write one 16-bit image: primary HDU, or first extension of a ``.fits.fz``.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    if path.suffix == ".fz":
        image = ImageExtension(name="", version=0, pixels=pixels, header=header)
        return write_extensions(path, [image], primary=fits.Header())
    return _write(path, [fits.PrimaryHDU(pixels, header)])


def write_extensions(
    path: Path, images: list[ImageExtension], *, primary: fits.Header
) -> Path:
    """Write images as extensions.

    Parameters
    ----------
    path : Path
        ``.fits``, ``.fits.gz`` or ``.fits.fz`` (tile-compressed, lossless).
    images : list of ImageExtension
        The images, in order.
    primary : astropy.io.fits.Header
        Words that hold for all of them.

    Returns
    -------
    Path
        ``path``.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    hdus: list[Any] = [fits.PrimaryHDU(header=primary)]
    for image in images:
        header = image.header.copy()
        if image.name:
            header["EXTNAME"] = image.name
        if image.version:
            header["EXTVER"] = image.version
        if path.suffix == ".fz":
            hdus.append(
                fits.CompImageHDU(image.pixels, header, compression_type="RICE_1")
            )
        else:
            hdus.append(fits.ImageHDU(image.pixels, header))
    return _write(path, hdus)


def _write(path: Path, hdus: list[Any]) -> Path:
    buffer = io.BytesIO()
    fits.HDUList(hdus).writeto(buffer)
    data = buffer.getvalue()
    if path.suffix == ".gz":
        # No file name and no time in the gzip header: the bytes are the content's.
        data = gzip.compress(data, compresslevel=9, mtime=0)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(data)
    except OSError as error:
        reason = f"{error.strerror or error}; choose a folder that can be written"
        raise ProductError(path, reason) from None
    return path


def _world_words(wcs: Any) -> fits.Header:
    """Return a WCS as header words, with a CD matrix."""
    words = wcs.to_header(relax=True)
    matrix = {
        (i, j): words.pop(f"PC{i}_{j}", float(i == j)) for i in (1, 2) for j in (1, 2)
    }
    for axis in (1, 2):
        step = words.pop(f"CDELT{axis}")
        for j in (1, 2):
            words[f"CD{axis}_{j}"] = (step * matrix[axis, j], "[deg/pixel]")
    for word in ("MJDREF", "LONPOLE", "LATPOLE"):
        words.pop(word, None)
    return words
