"""A whole difference: as a compressed FITS file and as a picture."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from PIL import Image, ImageDraw

import latelight
from latelight.products.atomic import write_bytes
from latelight.products.cutouts import mask_cards
from latelight.products.drawing import (
    INK,
    OVERSAMPLING,
    PAPER,
    QUIET,
    RULE,
    Canvas,
    text_width,
    write,
)
from latelight.products.fits_file import fits_bytes
from latelight.products.panels import colour_difference, difference_scale, enlarge
from latelight.products.picture import draw_colour_bar, png_bytes
from latelight.products.rows import CandidateRow
from latelight.products.settings import ProductSettings
from latelight.records import Difference

__all__ = ["draw_difference", "write_difference", "write_difference_picture"]

# A step of sigma / 16 adds a twelfth of its square, 0.03 %, to the variance (Pence,
# White & Seaman 2010, PASP 122, 1065, DOI 10.1086/656249).
_QUANTIZE_LEVEL = 16
_DITHER_SEED = 1
_TILE = (64, 64)

_LONGEST_PX = 1000
_EDGE, _HEAD, _FOOT = 18, 60, 34
_BOX_MARGIN_PX = 14.0
_SMALL, _TEXT, _NAME = 14, 17, 24


def write_difference(path: Path, difference: Difference, *, wcs: Any) -> None:
    """Write a difference as tile-compressed FITS with checksums.

    DIFFERENCE is quantised to 1/16 of its noise with subtractive dithering (fixed
    seed) that keeps zeros, so masked pixels, exact; MASK is lossless, its bits
    explained in its header.

    Parameters
    ----------
    path : Path
        The file.
    difference : Difference
        What to write.
    wcs : astropy.wcs.WCS or None
        WCS of the science frame.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    header = fits.Header() if wcs is None else wcs.to_header(relax=True)
    image = fits.CompImageHDU(
        difference.pixels,
        header=header.copy(),
        name="DIFFERENCE",
        compression_type="RICE_1",
        tile_shape=_TILE,
        quantize_level=_QUANTIZE_LEVEL,
        quantize_method=fits.hdu.compressed.SUBTRACTIVE_DITHER_2,
        dither_seed=_DITHER_SEED,
    )
    image.header["BUNIT"] = "count"
    image.header["METHOD"] = (difference.method, "of the subtraction")
    image.header["FWHMPIX"] = (round(difference.fwhm_px, 4), "[pix] width of the PSF")
    if np.isfinite(difference.noise_ratio):
        ratio = round(difference.noise_ratio, 5)
        image.header["NOISERAT"] = (ratio, "measured over predicted noise")
    mask = fits.CompImageHDU(
        difference.mask,
        header=header.copy(),
        name="MASK",
        compression_type="RICE_1",
        tile_shape=_TILE,
    )
    mask.header.extend(mask_cards(), end=True)
    primary = fits.PrimaryHDU()
    primary.header["CREATOR"] = f"latelight {latelight.__version__}"
    write_bytes(path, fits_bytes([primary, image, mask]))


def write_difference_picture(
    path: Path,
    difference: Difference,
    *,
    pair: str,
    rows: Sequence[CandidateRow],
    settings: ProductSettings,
) -> None:
    """Write :func:`draw_difference` as PNG.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    picture = draw_difference(difference, pair=pair, rows=rows, settings=settings)
    write_bytes(path, png_bytes(picture))


def draw_difference(
    difference: Difference,
    *,
    pair: str,
    rows: Sequence[CandidateRow],
    settings: ProductSettings,
) -> Image.Image:
    """Draw a whole difference with its candidates boxed and numbered.

    Parameters
    ----------
    difference : Difference
        What to draw.
    pair : str
        Name of the pair.
    rows : sequence of CandidateRow
        The pair's candidates; the most significant is number 1.
    settings : ProductSettings
        Table ``[products]``.

    Returns
    -------
    PIL.Image.Image
        RGB; the longer side of the difference takes 1000 pixels.
    """
    ny, nx = difference.pixels.shape
    zoom = _LONGEST_PX / max(ny, nx)
    width, height = max(1, round(nx * zoom)), max(1, round(ny * zoom))
    # Shrinking averages pixels: smooth to the scale of the picture first.
    smoothing = settings.smoothing_px
    if smoothing > 0.0:
        smoothing = max(smoothing, 0.5 / zoom)
    scale = difference_scale(difference.pixels, difference.mask, smoothing_px=smoothing)
    panel = enlarge(
        colour_difference(scale),
        difference.mask != 0,
        width=width * OVERSAMPLING,
        height=height * OVERSAMPLING,
        smooth=smoothing > 0.0,
    )
    ordered = sorted(rows, key=lambda row: (-row.snr, row.x, row.y))
    boxed = _boxed(panel, ordered, zoom=zoom)
    # Narrow frames still leave room for the words.
    size = (max(width, 640) + 2 * _EDGE, height + _HEAD + _FOOT)
    picture = Image.new("RGB", size, PAPER)
    picture.paste(boxed, (_EDGE, _HEAD))
    draw = ImageDraw.Draw(picture)
    frame = (_EDGE - 1, _HEAD - 1, _EDGE + width, _HEAD + height)
    draw.rectangle(frame, outline=RULE)
    _write_words(picture, pair, len(ordered), smoothing)
    y = _HEAD + height + 6
    draw_colour_bar(picture, x=_EDGE + 44, y=y, width=120, limit=scale.limit)
    place = (size[0] - _EDGE, y + 9)
    text = f"hatched: masked; {nx} x {ny} pixels, x to the right, y up"
    write(draw, place, text, size=_SMALL, colour=QUIET, anchor="rm")
    return picture


def _write_words(
    picture: Image.Image, pair: str, n_candidates: int, smoothing_px: float
) -> None:
    draw = ImageDraw.Draw(picture)
    write(draw, (_EDGE, 14), pair, size=_NAME)
    count = "1 candidate" if n_candidates == 1 else f"{n_candidates} candidates"
    how = f", smoothed by {smoothing_px:.2g} px" if smoothing_px > 0.0 else ""
    place = (picture.width - _EDGE, 20)
    text = f"science minus template{how} · {count}"
    write(draw, place, text, size=_TEXT - 1, colour=QUIET, anchor="ra")


def _boxed(
    panel: Image.Image, rows: Sequence[CandidateRow], *, zoom: float
) -> Image.Image:
    canvas = Canvas(panel)
    height, width = panel.height // OVERSAMPLING, panel.width // OVERSAMPLING
    boxes = []
    for row in rows:
        half = (0.5 * row.length_px + _BOX_MARGIN_PX) * zoom
        x, y = (row.x + 0.5) * zoom, height - (row.y + 0.5) * zoom
        left, right = max(x - half, 2.0), min(x + half, width - 3.0)
        top, bottom = max(y - half, 2.0), min(y + half, height - 3.0)
        corners = [(left, top), (right, top), (right, bottom), (left, bottom)]
        canvas.line([*corners, corners[0]], INK, width=1.5)
        boxes.append((left, top, bottom))
    drawn = canvas.finished()
    draw = ImageDraw.Draw(drawn)
    for number, (row, (left, top, bottom)) in enumerate(
        zip(rows, boxes, strict=True), start=1
    ):
        text = f"{number}  S/N {row.snr:.0f}"
        left = min(left, width - text_width(text, size=_TEXT) - 4.0)
        # Above the box, or below it where the frame ends.
        above = top > _TEXT + 6.0
        place = (left, top - 4.0) if above else (left, bottom + 4.0)
        write(draw, place, text, size=_TEXT, anchor="ld" if above else "la", halo=True)
    return drawn
