"""The picture of a candidate: what a person needs to judge it at a glance.

From left to right: the two epochs on one scale of greys, their difference with
what was measured drawn over it, and its mean profile along the motion.
"""

from __future__ import annotations

import io
import math
from pathlib import Path

import numpy as np
from PIL import Image, ImageDraw

from latelight.products.atomic import write_bytes
from latelight.products.captions import calendar_date, facts, interval
from latelight.products.cutouts import Cutout, template_offset_px
from latelight.products.drawing import (
    INK,
    OVERSAMPLING,
    PAPER,
    QUIET,
    RULE,
    write,
)
from latelight.products.heading import draw_heading
from latelight.products.marks import Marks, marked_candidate
from latelight.products.panels import (
    BoolArray,
    ColourArray,
    colour_difference,
    colour_epochs,
    difference_scale,
    diverging_colours,
    enlarge,
)
from latelight.products.profile import measure_profile
from latelight.products.profile_panel import draw_profile
from latelight.products.settings import ProductSettings
from latelight.sky import pixel_scale_arcsec

__all__ = ["draw_colour_bar", "draw_picture", "png_bytes", "write_picture"]

_SIDE, _GAP, _EDGE = 336, 14, 18
_HEAD, _CAPTION, _FOOT = 112, 28, 34
_WIDTH = 2 * _EDGE + 4 * _SIDE + 3 * _GAP
_HEIGHT = _HEAD + _CAPTION + _SIDE + _FOOT
_TOP = _HEAD + _CAPTION
_SMALL, _TEXT = 14, 18
# Profile to either side of the middle of the lobes: PSF widths, and at least px.
_REACH_FWHM, _REACH_PX = 5.0, 12.0
# Sigma of the smoothing of a difference, in FWHM of the arc.
_SMOOTHING_WIDTHS = 0.3


def write_picture(path: Path, cutout: Cutout, *, settings: ProductSettings) -> None:
    """Write the picture of a candidate as PNG.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    write_bytes(path, png_bytes(draw_picture(cutout, settings=settings)))


def draw_picture(cutout: Cutout, *, settings: ProductSettings) -> Image.Image:
    """Draw a candidate.

    Parameters
    ----------
    cutout : Cutout
        Its pixels, place and row.
    settings : ProductSettings
        Table ``[products]``.

    Returns
    -------
    PIL.Image.Image
        RGB.
    """
    picture = Image.new("RGB", (_WIDTH, _HEIGHT), PAPER)
    row = cutout.row
    draw_heading(
        picture,
        name=row.id,
        context=[row.field, f"filter {row.filter}" if row.filter else "", row.pair],
        facts=facts(row),
    )
    _draw_epochs(picture, cutout)
    _draw_difference(picture, cutout, settings.smoothing_px)
    _draw_profile(picture, cutout)
    return picture


def png_bytes(picture: Image.Image, *, few_colours: bool = True) -> bytes:
    """Return a picture as PNG; the same picture gives the same bytes.

    Parameters
    ----------
    picture : PIL.Image.Image
        RGB.
    few_colours : bool
        Keep 256 colours: in images full of noise they cannot be told from all of
        them by eye, and take half the time and a third of the bytes.  Smooth
        gradients need all.
    """
    stream = io.BytesIO()
    if few_colours:
        way = Image.Quantize.FASTOCTREE
        picture = picture.quantize(256, way, dither=Image.Dither.NONE)
    picture.save(stream, format="PNG", compress_level=3)
    return stream.getvalue()


def draw_colour_bar(
    picture: Image.Image, *, x: int, y: int, width: int, limit: float
) -> None:
    """Draw the colours of a difference with their counts at both ends and 0."""
    bar = np.repeat(diverging_colours(np.linspace(-1.0, 1.0, width))[None], 8, axis=0)
    picture.paste(Image.fromarray(bar), (x, y + 5))
    draw = ImageDraw.Draw(picture)
    # Two digits without an exponent, for all but extreme units.
    end = f"{limit:.0f}" if 10.0 <= limit < 1e6 else f"{limit:.2g}"
    for text, place, anchor in (
        (f"-{end}", x - 6, "rm"),
        (f"+{end} counts", x + width + 6, "lm"),
    ):
        write(draw, (place, y + 9), text, size=_SMALL, colour=QUIET, anchor=anchor)


def _left(panel: int) -> int:
    return _EDGE + panel * (_SIDE + _GAP)


def _draw_epochs(picture: Image.Image, cutout: Cutout) -> None:
    row, arc = cutout.row, marked_candidate(cutout)
    epochs = (cutout.template, cutout.science)
    later = interval(row.mjd_science - row.mjd_template)
    captions = (
        f"template {calendar_date(row.mjd_template)}",
        f"science {calendar_date(row.mjd_science)}, {later}",
    )
    for panel, (pixels, colours) in enumerate(
        zip(epochs, colour_epochs(*epochs), strict=True)
    ):
        marks = Marks(_enlarged(colours, np.isnan(pixels), smooth=False), arc)
        if panel == 0:
            marks.scale_bar()
        else:
            marks.compass()
        marks.ends(arc.places[1 - panel])
        _place(picture, panel, marks.finished(), captions[panel])
    draw = ImageDraw.Draw(picture)
    place = (_left(0), _TOP + _SIDE + 6)
    text = "one scale for both epochs, sky taken out; dark is bright"
    write(draw, place, text, size=_SMALL, colour=QUIET)


def _draw_difference(picture: Image.Image, cutout: Cutout, smoothing_px: float) -> None:
    if smoothing_px > 0.0:
        # A wide arc shows best when smoothed by about its own width.
        across = math.hypot(cutout.row.width_px, cutout.fwhm_px)
        smoothing_px = max(smoothing_px, round(_SMOOTHING_WIDTHS * across, 1))
    scale = difference_scale(
        cutout.difference,
        cutout.mask,
        smoothing_px=smoothing_px,
        brightness=cutout.row.surface_brightness_counts,
    )
    hatched = (cutout.mask != 0) | np.isnan(cutout.difference)
    colours = colour_difference(scale)
    arc = marked_candidate(cutout)
    marks = Marks(_enlarged(colours, hatched, smooth=smoothing_px > 0.0), arc)
    marks.origin()
    marks.motion()
    marks.trace(0.0)
    caption = "science minus template"
    if smoothing_px > 0.0:
        caption += f", smoothed by {smoothing_px:g} px"
    _place(picture, 2, marks.finished(), caption)
    y = _TOP + _SIDE + 4
    draw_colour_bar(picture, x=_left(2) + 44, y=y, width=84, limit=scale.limit)
    place = (_left(2) + _SIDE, y + 9)
    text = "hatched: masked"
    draw = ImageDraw.Draw(picture)
    write(draw, place, text, size=_SMALL, colour=QUIET, anchor="rm")


def _draw_profile(picture: Image.Image, cutout: Cutout) -> None:
    row = cutout.row
    reach = 0.5 * abs(template_offset_px(row)) + max(
        _REACH_FWHM * cutout.fwhm_px, row.width_px + _REACH_FWHM, _REACH_PX
    )
    middle = (cutout.science.shape[0] - 1) / 2
    wcs = cutout.wcs
    unit = 1.0 if wcs is None else pixel_scale_arcsec(wcs, middle, middle)
    draw_profile(
        picture,
        measure_profile(cutout, reach_px=reach),
        corner=(_left(3), _TOP),
        side=_SIDE,
        unit=unit,
        template_px=None if row.shift_px is None else template_offset_px(row),
    )
    _write_caption(picture, 3, "difference averaged along the arc")
    name = "pixels" if wcs is None else "arcsec"
    draw = ImageDraw.Draw(picture)
    place = (_left(3) + _SIDE, _TOP + _SIDE + 6)
    text = f"counts/pixel against {name} along the motion"
    write(draw, place, text, size=_SMALL, colour=QUIET, anchor="ra")


def _enlarged(colours: ColourArray, hatched: BoolArray, *, smooth: bool) -> Image.Image:
    side = _SIDE * OVERSAMPLING
    return enlarge(colours, hatched, width=side, height=side, smooth=smooth)


def _place(picture: Image.Image, panel: int, image: Image.Image, caption: str) -> None:
    x = _left(panel)
    picture.paste(image, (x, _TOP))
    draw = ImageDraw.Draw(picture)
    draw.rectangle((x - 1, _TOP - 1, x + _SIDE, _TOP + _SIDE), outline=RULE)
    _write_caption(picture, panel, caption)


def _write_caption(picture: Image.Image, panel: int, text: str) -> None:
    place = (_left(panel), _TOP - 7)
    write(ImageDraw.Draw(picture), place, text, size=_TEXT - 2, colour=INK, anchor="ls")
