"""Turn FITS units into the bytes of a file, with checksums and without dates."""

from __future__ import annotations

import io
from typing import Any

from astropy.io import fits

__all__ = ["ascii_text", "fits_bytes"]


def fits_bytes(hdus: list[Any]) -> bytes:
    """Return the file that a list of FITS units makes.

    Every unit gets DATASUM and CHECKSUM (FITS 4.0, section 4.4.2.7).  The same
    units give the same bytes: the library's own comment, which holds the time of
    writing, is replaced.

    Parameters
    ----------
    hdus : list of astropy HDU
        The first a primary one; compressed images are allowed.
    """
    plain = io.BytesIO()
    fits.HDUList(hdus).writeto(plain)
    plain.seek(0)
    summed = io.BytesIO()
    # Read back as stored, so that the sums are those of the compressed tables
    # a verifying program sees and not of the images inside.
    with fits.open(plain, disable_image_compression=True) as stored:
        for hdu in stored:
            hdu.add_checksum(when="of this unit")
        # They were verified when they were written first.
        stored.writeto(summed, output_verify="ignore")
    return summed.getvalue()


def ascii_text(text: str) -> str:
    """Return a text with the letters FITS does not know as backslash escapes."""
    return text.encode("ascii", "backslashreplace").decode("ascii")
