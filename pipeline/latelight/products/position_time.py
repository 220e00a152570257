"""The position-time panel of a track: its brightness along the motion, epoch by epoch.

A strip an epoch, earliest on top, shows the mean profile along the motion; an arc that
moves steps to the right from strip to strip, along the line of the fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from PIL import Image, ImageDraw

from latelight.products.captions import calendar_date
from latelight.products.drawing import (
    ARC,
    INK,
    OVERSAMPLING,
    PAPER,
    QUIET,
    RULE,
    Canvas,
    nice_step,
    write,
)
from latelight.products.panels import diverging_colours, enlarge
from latelight.products.track_cutouts import TrackCutout
from latelight.records import FloatArray, Track

__all__ = ["draw_position_time", "place_strips"]

DAYS_PER_YEAR = 365.25

# Room for the dates on the left and the ticks below, pixels of the picture.
_DATES, _TICKS = 108, 24
_SMALL, _TEXT = 14, 15
# Strips: least and greatest height, and their share of the way to the next.
_THIN, _THICK, _SHARE = 26.0, 72.0, 0.84
# The profile shown to either side of the track: PSF widths, and at least px.
_REACH_FWHM, _REACH_PX = 4.0, 10.0
_BRIGHT = 1.2


@dataclass(frozen=True, slots=True)
class _Axes:
    """Turns pixels of the grid along the motion, and dates, into panel pixels."""

    first: float
    last: float
    width: int
    mjd: FloatArray
    y: FloatArray

    def across(self, offset: float) -> float:
        return (offset - self.first) / (self.last - self.first) * self.width

    def down(self, mjd: FloatArray) -> FloatArray:
        """Return heights: linear between the strips, and on beyond the outer two."""
        inner = np.interp(mjd, self.mjd, self.y)
        per_day = (self.y[-1] - self.y[0]) / (self.mjd[-1] - self.mjd[0])
        return inner + per_day * (mjd - np.clip(mjd, self.mjd[0], self.mjd[-1]))


def draw_position_time(
    picture: Image.Image,
    cutout: TrackCutout,
    *,
    corner: tuple[int, int],
    size: tuple[int, int],
) -> float:
    """Draw the panel and return the counts at full colour.

    Parameters
    ----------
    picture : PIL.Image.Image
        The RGB picture.
    cutout : TrackCutout
        The track, of two epochs or more.
    corner, size : (int, int)
        Upper left corner of the panel, and its width and height with dates and
        ticks.
    """
    width, height = size[0] - _DATES, size[1] - _TICKS
    track = cutout.track
    shown = _shown(cutout)
    y, thick = place_strips(cutout.mjd, height)
    step = _step(track)
    offsets = track.profile_offsets[shown]
    axes = _Axes(
        float(offsets[0] - step / 2), float(offsets[-1] + step / 2), width,
        cutout.mjd, y,
    )  # fmt: skip
    limit = _limit(track, track.profiles[:, shown])
    panel = Image.new("RGB", (width * OVERSAMPLING, height * OVERSAMPLING), PAPER)
    for profile, middle in zip(track.profiles[:, shown], y, strict=True):
        strip = enlarge(
            diverging_colours(np.nan_to_num(profile[None]) / limit),
            ~np.isfinite(profile[None]),
            width=width * OVERSAMPLING,
            height=round(thick * OVERSAMPLING),
            smooth=True,
        )
        top = round((middle - thick / 2) * OVERSAMPLING)
        panel.paste(strip, (0, top))
        box = (0, top, strip.width - 1, top + strip.height - 1)
        ImageDraw.Draw(panel).rectangle(box, outline=RULE, width=OVERSAMPLING)
    canvas = Canvas(panel)
    _draw_fit(canvas, axes, cutout, height)
    _draw_points(canvas, axes, track)
    x0, y0 = corner[0] + _DATES, corner[1]
    picture.paste(canvas.finished(), (x0, y0))
    draw = ImageDraw.Draw(picture)
    draw.rectangle((x0 - 1, y0 - 1, x0 + width, y0 + height), outline=RULE)
    _write_dates(draw, cutout, y + y0, corner[0], thick)
    _write_significances(draw, track, y + y0, x0 + width)
    _draw_ticks(draw, axes, cutout.scale, x0, y0 + height)
    return limit


def place_strips(mjd: FloatArray, height: float) -> tuple[FloatArray, float]:
    """Return where the strips of the epochs lie and how thick they are.

    Heights go with time, as far as no two strips come too near.

    Parameters
    ----------
    mjd : float64 array, shape (n,)
        Epochs, rising, n >= 2.
    height : float
        Of the panel, pixels.

    Returns
    -------
    middle : float64 array, shape (n,)
        Pixels from the top, rising.
    thick : float
        Pixels.
    """
    n = mjd.size
    least = min(_THIN / _SHARE, height / n)
    # The thickest strips that leave the outer ones inside.
    share = (mjd - mjd[0]) / (mjd[-1] - mjd[0])
    margin = 0.5 * min(_THICK / _SHARE, height / n)
    ideal = margin + share * (height - 2.0 * margin)
    middle = ideal.copy()
    for i in range(1, n):
        middle[i] = max(middle[i], middle[i - 1] + least)
    middle[-1] = min(middle[-1], height - margin)
    for i in range(n - 2, -1, -1):
        middle[i] = min(middle[i], middle[i + 1] - least)
    return middle, min(_THICK, _SHARE * float(np.diff(middle).min()), 2.0 * margin)


def _step(track: Track) -> float:
    return float(track.profile_offsets[1] - track.profile_offsets[0])


def _shown(cutout: TrackCutout) -> slice:
    """Return the part of the profiles around the track."""
    track = cutout.track
    fitted, _ = cutout.offsets(cutout.mjd)
    reach = max(_REACH_FWHM * cutout.fwhm_px + 0.5 * track.width_px, _REACH_PX)
    first, last = np.searchsorted(
        track.profile_offsets, [fitted.min() - reach, fitted.max() + reach]
    )
    return slice(int(first), max(int(last), int(first) + 2))


def _limit(track: Track, profiles: FloatArray) -> float:
    """Return the counts at full colour: above the arc, and far above the noise."""
    heights = [p.height_counts for p in track.points if np.isfinite(p.height_counts)]
    finite = profiles[np.isfinite(profiles)]
    noise = 2.0 * float(np.median(np.abs(finite))) if finite.size else 0.0
    return max([noise, *(_BRIGHT * height for height in heights)]) or 1.0


def _draw_fit(canvas: Canvas, axes: _Axes, cutout: TrackCutout, height: int) -> None:
    """Draw the fitted motion as a line, and its 1 sigma as a band."""
    span = axes.mjd[-1] - axes.mjd[0]
    dates = np.linspace(axes.mjd[0] - span, axes.mjd[-1] + span, 301)
    down = axes.down(dates)
    inside = (down > -20.0) & (down < height + 20.0)
    dates, down = dates[inside], down[inside]
    offset, err = cutout.offsets(dates)
    left = [(axes.across(o - e), y) for o, e, y in zip(offset, err, down, strict=True)]
    right = [(axes.across(o + e), y) for o, e, y in zip(offset, err, down, strict=True)]
    canvas.fill(left + right[::-1], ARC, opacity=0.25)
    line = [(axes.across(o), y) for o, y in zip(offset, down, strict=True)]
    canvas.line(line, ARC, width=1.5)


def _draw_points(canvas: Canvas, axes: _Axes, track: Track) -> None:
    """Draw the place fitted to each epoch alone, with its error."""
    for point, y in zip(track.points, axes.y, strict=True):
        if not np.isfinite(point.offset_px):
            continue
        x = axes.across(point.offset_px)
        if np.isfinite(point.offset_err_px):
            ends = [
                (axes.across(point.offset_px + side * point.offset_err_px), y)
                for side in (-1.0, 1.0)
            ]
            canvas.line(ends, INK, width=1.6)
            for end, _ in ends:
                canvas.line([(end, y - 4.0), (end, y + 4.0)], INK, width=1.6)
        canvas.dots([(x, y)], INK, radius=3.2)


def _write_dates(
    draw: ImageDraw.ImageDraw,
    cutout: TrackCutout,
    y: FloatArray,
    left: int,
    thick: float,
) -> None:
    """Write each epoch's date and, where there is room, the time since the first."""
    first = cutout.mjd[0]
    two = thick >= 2.0 * _SMALL + 4.0
    for mjd, middle in zip(cutout.mjd, y, strict=True):
        date = calendar_date(float(mjd))
        if not two:
            write(draw, (left, middle), date, size=_TEXT, anchor="lm")
            continue
        write(draw, (left, middle - 9), date, size=_TEXT, anchor="lm")
        since = _since(float(mjd - first))
        write(draw, (left, middle + 9), since, size=_SMALL, colour=QUIET, anchor="lm")


def _since(days: float) -> str:
    if days == 0.0:
        return "first"
    if days < 100.0:
        return f"+{days:.1f} d"
    return f"+{days / DAYS_PER_YEAR:.2f} yr"


def _write_significances(
    draw: ImageDraw.ImageDraw, track: Track, y: FloatArray, right: int
) -> None:
    for point, middle in zip(track.points, y, strict=True):
        if not (np.isfinite(point.height_counts) and point.height_err_counts > 0.0):
            continue
        text = f"S/N {point.height_counts / point.height_err_counts:.1f}"
        place = (right - 6, middle)
        write(draw, place, text, size=_SMALL, colour=QUIET, anchor="rm", halo=True)


def _draw_ticks(
    draw: ImageDraw.ImageDraw, axes: _Axes, scale: float | None, x0: int, bottom: int
) -> None:
    unit = 1.0 if scale is None else scale
    low, high = axes.first * unit, axes.last * unit
    step = nice_step((high - low) / 5.0)
    for index in range(int(np.ceil(low / step)), int(np.floor(high / step)) + 1):
        x = x0 + axes.across(index * step / unit)
        draw.line([(x, bottom), (x, bottom + 4)], fill=QUIET)
        text = f"{float(f'{index * step:.6g}'):g}"
        write(draw, (x, bottom + 6), text, size=_SMALL, colour=QUIET, anchor="ma")
