"""Write simulated frames as FITS, the same bytes every time."""

from __future__ import annotations

import gzip
import io
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.time import Time

from latelight.simulation.exposures import Exposure

__all__ = ["STANDARD_WORDS", "frame_header", "write_hdus"]

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


def frame_header(
    exposure: Exposure, *, words: dict[str, str], observatory: str
) -> fits.Header:
    """Return the header of a frame, with the WCS as it is stated.

    Parameters
    ----------
    exposure : Exposure
        The exposure.
    words : dict
        The observatory's word for each of the keys of ``STANDARD_WORDS``.
    observatory : str
        Its name.
    """
    camera = exposure.camera
    start = exposure.mjd - 0.5 * exposure.exposure_s / 86_400.0
    header = fits.Header()
    header["TELESCOP"] = (observatory, "invented; simulated frame")
    header[words["field"]] = (exposure.field, "field")
    header[words["filter"]] = (exposure.filter, "filter")
    header[words["mjd"]] = (round(start, 7), "start of exposure, MJD UTC")
    header["DATE-OBS"] = (Time(start, format="mjd").isot, "start of exposure, UTC")
    header[words["exposure"]] = (exposure.exposure_s, "[s] exposure time")
    header[words["gain"]] = (camera.gain, "[electron/adu]")
    header[words["read_noise"]] = (camera.read_noise, "[electron] 1 sigma")
    header[words["saturation"]] = (camera.saturation, "[adu] full well")
    header[words["zero_point"]] = (
        round(exposure.zero_point, 3),
        "[mag] of one count",
    )
    header["BUNIT"] = "adu"
    header.update(exposure.stated_wcs.to_header(relax=True))
    return header


def write_hdus(
    path: Path,
    images: list[tuple[str, np.ndarray, fits.Header]],
    *,
    primary: fits.Header,
) -> Path:
    """Write 16-bit images to a FITS file.

    Parameters
    ----------
    path : Path
        ``.fits``, ``.fits.gz`` or ``.fits.fz`` (tile-compressed, lossless).
    images : list of (name, pixels, header)
        With one image and no name, it is the primary HDU (an extension in
        ``.fits.fz``).
    primary : fits.Header
        Header of the primary HDU when the images are extensions.

    Returns
    -------
    Path
        ``path``.
    """
    compressed = path.suffix == ".fz"
    hdus: list[fits.hdu.base._BaseHDU]
    if len(images) == 1 and not images[0][0] and not compressed:
        hdus = [fits.PrimaryHDU(images[0][1], images[0][2])]
    else:
        hdus = [fits.PrimaryHDU(header=primary)]
        for name, pixels, header in images:
            # Masks, one byte a pixel, run in long rows of zeros: gzip suits them.
            algorithm = "RICE_1" if pixels.dtype == np.uint16 else "GZIP_1"
            hdus.append(
                fits.CompImageHDU(
                    pixels, header, name=name or None, compression_type=algorithm
                )
                if compressed
                else fits.ImageHDU(pixels, header, name=name or None)
            )
    buffer = io.BytesIO()
    fits.HDUList(hdus).writeto(buffer)
    data = buffer.getvalue()
    if path.suffix == ".gz":
        # No file name and no time in the gzip header: the bytes are the content's.
        data = gzip.compress(data, compresslevel=9, mtime=0)
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(data)
    return path
