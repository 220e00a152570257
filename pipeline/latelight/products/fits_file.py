"""Turn FITS units into the bytes of a file, with checksums and without dates."""

from __future__ import annotations

import io
from typing import Any

from astropy.io import fits

from latelight.products.column import Column

__all__ = ["ascii_text", "fits_bytes", "row_card"]


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
    units = fits.HDUList(hdus)
    # Cards of the file as a whole come first: they count in the sums.
    units.update_extend()
    if not any(isinstance(hdu, fits.CompImageHDU) for hdu in hdus):
        return _summed(units)
    plain = io.BytesIO()
    units.writeto(plain)
    plain.seek(0)
    # Read back as stored, so that the sums are those of the compressed tables
    # a verifying program sees and not of the images inside.
    with fits.open(plain, disable_image_compression=True) as stored:
        return _summed(stored)


def _summed(units: Any) -> bytes:
    """Return a file of units, with their sums."""
    stream = io.BytesIO()
    for hdu in units:
        hdu.add_checksum(when="of this unit")
    # They are our own: looking through every card takes as long as writing.
    units.writeto(stream, output_verify="ignore")
    return stream.getvalue()


def ascii_text(text: str) -> str:
    """Return a text with the letters FITS does not know as backslash escapes."""
    return text.encode("ascii", "backslashreplace").decode("ascii")


def row_card(column: Column, value: Any, keyword: str, meaning: str) -> fits.Card:
    """Return the header card of one field of a row.

    Parameters
    ----------
    column : Column
        Gives unit and format.
    value : str, int, float or None
        The field.
    keyword : str
        Eight letters at most.
    meaning : str
        Comment; the unit is put before it.
    """
    unit = f"[{column.unit}] " if column.unit else ""
    comment = unit + meaning
    if isinstance(value, str):
        value = ascii_text(value)
        # A card is 80 letters: a long name leaves no room for words about it.
        taken = len("KEYWORD = '' / ") + len(value.replace("'", "''"))
        comment = comment if taken + len(comment) <= 80 else ""
    elif value is not None and column.format:
        value = float(format(float(value), column.format))
    return fits.Card(keyword, value, comment)
