"""The picture of a track: what a person needs to judge it at a glance.

On the left the position-time panel; on the right the epochs co-added along the motion
and the differences of single epochs, with what was measured drawn over them.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
from PIL import Image, ImageDraw

from latelight.products.atomic import write_bytes
from latelight.products.captions import calendar_date, shortened, track_facts
from latelight.products.drawing import (
    INK,
    OVERSAMPLING,
    PAPER,
    QUIET,
    RULE,
    write,
)
from latelight.products.heading import draw_heading
from latelight.products.marks import MarkedArc, Marks
from latelight.products.panels import (
    DifferenceScale,
    colour_difference,
    difference_scale,
    enlarge,
)
from latelight.products.picture import draw_colour_bar, png_bytes
from latelight.products.position_time import draw_position_time
from latelight.products.settings import ProductSettings
from latelight.products.track_cutouts import TrackCutout
from latelight.products.track_rows import TrackRow
from latelight.records import PixelArray

__all__ = ["draw_track_picture", "write_track_picture"]

_WIDTH, _EDGE, _GAP = 1422, 18, 14
_HEAD, _CAPTION, _FOOT = 112, 28, 40
_SIDE, _COLUMNS, _ROWS = 238, 3, 2
_BODY = _ROWS * _SIDE + (_ROWS - 1) * _CAPTION
_TOP = _HEAD + _CAPTION
_HEIGHT = _TOP + _BODY + _FOOT
_RIGHT = _WIDTH - _EDGE - _COLUMNS * _SIDE - (_COLUMNS - 1) * _GAP
_SMALL, _TEXT = 14, 16
# Sigma of the smoothing of a difference, in FWHM of the arc.
_SMOOTHING_WIDTHS = 0.3


def write_track_picture(
    path: Path, cutout: TrackCutout, *, settings: ProductSettings
) -> None:
    """Write the picture of a track as PNG.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    picture = draw_track_picture(cutout, settings=settings)
    write_bytes(path, png_bytes(picture, few_colours=False))


def draw_track_picture(
    cutout: TrackCutout, *, settings: ProductSettings
) -> Image.Image:
    """Draw a track.

    Parameters
    ----------
    cutout : TrackCutout
        Its pixels, profiles and row.
    settings : ProductSettings
        Table ``[products]``.

    Returns
    -------
    PIL.Image.Image
        RGB.
    """
    picture = Image.new("RGB", (_WIDTH, _HEIGHT), PAPER)
    row = cutout.row
    draw_heading(picture, name=row.id, context=_context(row), facts=track_facts(row))
    _draw_position_time(picture, cutout)
    smoothing = _smoothing_px(cutout, settings.smoothing_px)
    arc = _marked(cutout)
    _draw_moving(picture, cutout, arc, smoothing)
    _draw_epochs(picture, cutout, arc, smoothing)
    return picture


def _context(row: TrackRow) -> list[str]:
    how = {
        "stack": "found in the sum of all epochs",
        "pairs": "found in pairs",
        "both": "found in pairs and in the sum of all epochs",
    }
    return [
        row.field,
        f"filter {row.filter}" if row.filter else "",
        how.get(row.found_in, row.found_in),
    ]


def _draw_position_time(picture: Image.Image, cutout: TrackCutout) -> None:
    width = _RIGHT - 2 * _GAP - _EDGE
    limit = draw_position_time(
        picture, cutout, corner=(_EDGE, _TOP), size=(width, _BODY)
    )
    draw = ImageDraw.Draw(picture)
    text = "brightness along the motion at each epoch, the fit and its 1 sigma"
    write(draw, (_EDGE, _TOP - 7), text, size=_TEXT, colour=INK, anchor="ls")
    y = _TOP + _BODY + 6
    draw_colour_bar(picture, x=_EDGE + 44, y=y, width=84, limit=limit)
    unit = "pixels" if cutout.scale is None else "arcsec"
    since = calendar_date(cutout.track.mjd)
    text = f"{unit} along the motion from the ridge on {since}"
    place = (_EDGE + width, y + 9)
    write(draw, place, text, size=_SMALL, colour=QUIET, anchor="rm")


def _draw_moving(
    picture: Image.Image, cutout: TrackCutout, arc: MarkedArc, smoothing: float
) -> None:
    blank = np.isnan(cutout.moving).astype(np.uint16)
    heights = [p.height_counts for p in cutout.track.points]
    known = [height for height in heights if np.isfinite(height)]
    scale = difference_scale(
        cutout.moving,
        blank,
        smoothing_px=smoothing,
        brightness=float(np.mean(known)) if known else 0.0,
    )
    marks = Marks(_panel(scale, cutout.moving, smoothing), arc)
    marks.origin()
    marks.motion()
    marks.trace(0.0)
    marks.scale_bar()
    _place(picture, 0, marks.finished(), "added along the motion")


def _draw_epochs(
    picture: Image.Image, cutout: TrackCutout, arc: MarkedArc, smoothing: float
) -> None:
    n = len(cutout.epochs)
    chosen = np.unique(
        np.linspace(0, n - 1, min(n, _COLUMNS * _ROWS - 1)).round().astype(int)
    )
    heights = [p.height_counts for p in cutout.track.points]
    brightest = max((h for h in heights if np.isfinite(h)), default=0.0)
    # The template holds the arc too: without what stands still it shows but once.
    shown = cutout.epochs[chosen] - cutout.still
    scales = [
        difference_scale(
            pixels,
            np.isnan(pixels).astype(np.uint16),
            smoothing_px=smoothing,
            brightness=brightest,
        )
        for pixels in shown
    ]
    limit = max(scale.limit for scale in scales)
    for panel, (i, scale) in enumerate(zip(chosen, scales, strict=True), start=1):
        common = DifferenceScale(scale.pixels, limit)
        marks = Marks(_panel(common, shown[panel - 1], smoothing), arc)
        marks.ends(arc.places[i])
        if panel == 1:
            marks.compass()
        _place(picture, panel, marks.finished(), calendar_date(cutout.mjd[i]))
    y = _TOP + _BODY + 6
    draw_colour_bar(picture, x=_RIGHT + 44, y=y, width=84, limit=limit)
    words = ["epochs minus static sky, one scale"]
    if smoothing > 0.0:
        words.append(f"smoothed by {smoothing:g} px")
    words.append("hatched: masked")
    place = (_WIDTH - _EDGE, y + 9)
    draw = ImageDraw.Draw(picture)
    text = shortened("; ".join(words), 80)
    write(draw, place, text, size=_SMALL, colour=QUIET, anchor="rm")


def _marked(cutout: TrackCutout) -> MarkedArc:
    row, track = cutout.row, cutout.track
    places, _ = cutout.offsets(cutout.mjd)
    return MarkedArc(
        side_px=cutout.moving.shape[0],
        wcs=cutout.wcs,
        fwhm_px=cutout.fwhm_px,
        width_px=track.width_px,
        trace=track.trace,
        x=track.x,
        y=track.y,
        places=tuple(float(place) for place in places),
        angle=track.direction_angle,
        angle_err=track.direction_angle_err,
        source=row.source,
        away_angle=row.away_angle,
        normal_pa=row.normal_pa,
    )


def _smoothing_px(cutout: TrackCutout, least: float) -> float:
    if least == 0.0:
        return 0.0
    # A wide arc shows best when smoothed by about its own width.
    across = math.hypot(cutout.track.width_px, cutout.fwhm_px)
    return max(least, round(_SMOOTHING_WIDTHS * across, 1))


def _panel(scale: DifferenceScale, pixels: PixelArray, smoothing: float) -> Image.Image:
    side = _SIDE * OVERSAMPLING
    return enlarge(
        colour_difference(scale),
        np.isnan(pixels),
        width=side,
        height=side,
        smooth=smoothing > 0.0,
    )


def _place(picture: Image.Image, panel: int, image: Image.Image, caption: str) -> None:
    down, across = divmod(panel, _COLUMNS)
    x = _RIGHT + across * (_SIDE + _GAP)
    y = _TOP + down * (_SIDE + _CAPTION)
    picture.paste(image, (x, y))
    draw = ImageDraw.Draw(picture)
    draw.rectangle((x - 1, y - 1, x + _SIDE, y + _SIDE), outline=RULE)
    write(draw, (x, y - 7), caption, size=_TEXT, colour=INK, anchor="ls")
