"""The panel of a finder chart: the sky about a slit, north up, drawn upon."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from astropy.wcs import WCS
from PIL import Image, ImageDraw
from scipy import ndimage

from latelight.forecast.predict import Forecast
from latelight.products.drawing import (
    ARC,
    INK,
    OVERSAMPLING,
    PAPER,
    Canvas,
    Colour,
    Point,
    nice_step,
    text_width,
    write,
)
from latelight.products.forecast_rows import ForecastRow
from latelight.products.panels import colour_epochs, enlarge
from latelight.records import FloatArray, PixelArray
from latelight.reports.finder_ground import ArcShape, Ground
from latelight.sky import pixel_scale_arcsec, position_angle, separation_deg

__all__ = ["PREDICTED", "SLIT", "draw_chart"]

PREDICTED: Colour = (176, 78, 0)
SLIT: Colour = (22, 74, 160)

_TEXT, _INSET = 17, 14.0
# Sky around everything drawn, as a factor; the narrowest and widest chart, arcsec to
# either side; and how much of it an error band may claim, in lengths of the rest.
_MARGIN, _NARROWEST, _WIDEST, _LARGEST_BAND = 1.2, 90.0, 900.0, 1.5
_BAND_OPACITY, _PLATE_OPACITY = 0.28, 0.85


def draw_chart(
    ground: Ground, shape: ArcShape, *, row: ForecastRow, last: Forecast, side: int
) -> Image.Image:
    """Draw the sky about the predicted place with the arc, its error and both slits.

    Parameters
    ----------
    ground : Ground
        The image.
    shape : ArcShape
        The arc's ridge.
    row : ForecastRow
        The forecast; its place is the middle of the chart.
    last : Forecast
        The arc at its last epoch.
    side : int
        Of the panel, pixels.

    Returns
    -------
    PIL.Image.Image
        RGB: the tangent plane about the middle, north up, east to the left.
    """
    around = _reach(ground.pixels, ground.wcs)
    return _Chart(row, last, shape, side=side, around=around).drawn(ground)


class _Chart:
    """A square of sky; places on it are arcsec east and north of its middle."""

    def __init__(
        self,
        row: ForecastRow,
        last: Forecast,
        shape: ArcShape,
        *,
        side: int,
        around: float,
    ) -> None:
        self._row, self._last, self._side = row, last, side
        self._shape = _resampled(shape)
        self._length = row.length or 0.0
        # Without bound the band of a hopeless forecast would leave nothing to see.
        away = math.hypot(*self._place(last.ra, last.dec))
        extent = max(away + 0.5 * self._length, 0.5 * row.slit_length)
        extent += min(row.offset_err, _LARGEST_BAND * extent)
        least = min(around, _NARROWEST)
        self._half = min(max(_MARGIN * extent, least), _WIDEST)
        self._scale = 0.5 * side / self._half

    def drawn(self, ground: Ground) -> Image.Image:
        """Return the panel with everything on it."""
        row, here = self._row, (0.0, 0.0)
        there = self._place(self._last.ra, self._last.dec)
        canvas = Canvas(self._sky(ground.pixels, ground.wcs))
        self._band(canvas)
        for pa in (row.slit_pa_along, row.slit_pa_motion):
            self._slit(canvas, pa)
        self._dots(canvas, there, self._last.pa, ARC)
        self._dots(canvas, here, row.motion_pa, PREDICTED)
        self._motion(canvas)
        self._compass(canvas)
        self._bar(canvas)
        panel = canvas.finished()
        self._write(ImageDraw.Draw(panel))
        return panel

    def _sky(self, pixels: PixelArray, wcs: Any) -> Image.Image:
        """Return the image on the chart's grid, dark is bright."""
        native = pixel_scale_arcsec(wcs, *_middle(pixels))
        n = int(min(max(2.0 * self._half / native, 64.0), float(self._side)))
        grid = WCS(naxis=2)
        grid.wcs.ctype = ["RA---TAN", "DEC--TAN"]
        grid.wcs.crval = [self._row.ra, self._row.dec]
        grid.wcs.crpix = [0.5 * (n + 1), 0.5 * (n + 1)]
        step = 2.0 * self._half / n / 3600.0
        grid.wcs.cdelt = [-step, step]
        y, x = np.mgrid[:n, :n]
        ra, dec = grid.all_pix2world(x.ravel(), y.ravel(), 0)
        # Far outside the image distortions run away: the linear part will do there.
        column, line = wcs.wcs_world2pix(ra, dec, 0)
        near = _within(pixels, column, line)
        if near.any():
            column[near], line[near] = wcs.all_world2pix(ra[near], dec[near], 0)
        sky = ndimage.map_coordinates(
            pixels, [line, column], order=1, mode="constant", cval=np.nan
        ).reshape(n, n)
        (colours,) = colour_epochs(sky)
        side = self._side * OVERSAMPLING
        # Off the image the paper stays bare: a chart is printed.
        colours[np.isnan(sky)] = PAPER
        bare = np.zeros(sky.shape, dtype=bool)
        return enlarge(colours, bare, width=side, height=side, smooth=True)

    def _band(self, canvas: Canvas) -> None:
        """Shade 1 sigma along the motion, over the arc and 1 sigma beyond its ends."""
        row, shape = self._row, self._shape
        ahead = min(row.offset_err, 2.0 * self._half)
        beyond = min(row.across_err, 2.0 * self._half)
        along = shape.along + beyond * np.sign(shape.along)
        edge = [*zip(along, shape.ahead + ahead, strict=True)]
        edge += [*zip(along, shape.ahead - ahead, strict=True)][::-1]
        corners = [
            self._panel(
                *_add(_polar(row.motion_pa + 90.0, a), _polar(row.motion_pa, b))
            )
            for a, b in edge
        ]
        canvas.fill(_clipped(corners, self._side), PREDICTED, opacity=_BAND_OPACITY)

    def _slit(self, canvas: Canvas, pa: float) -> None:
        half, wide = 0.5 * self._row.slit_length, 0.5 * self._row.slit_width
        corners = [
            self._panel(*_add(_polar(pa, a), _polar(pa + 90.0, b)))
            for a, b in ((half, wide), (half, -wide), (-half, -wide), (-half, wide))
        ]
        canvas.line([*corners, corners[0]], SLIT, width=1.3)

    def _dots(self, canvas: Canvas, place: Point, pa: float, colour: Colour) -> None:
        """Dot the arc that moves towards a position angle; what is under it shows."""
        shape = self._shape
        n = max(round(np.ptp(shape.along) * self._scale / 9.0), 2)
        along = np.linspace(shape.along[0], shape.along[-1], n)
        ahead = np.interp(along, shape.along, shape.ahead)
        dots = [
            self._panel(*_add(place, _add(_polar(pa + 90.0, a), _polar(pa, b))))
            for a, b in zip(along, ahead, strict=True)
        ]
        canvas.dots(dots, colour, radius=2.2)

    def _motion(self, canvas: Canvas) -> None:
        """Draw an arrow ahead of the arc, clear of the slit across it."""
        row = self._row
        tail = _add(_polar(row.motion_pa + 90.0, 0.36 * self._length), (0.0, 0.0))
        start = _add(tail, _polar(row.motion_pa, 14.0 / self._scale))
        end = _add(tail, _polar(row.motion_pa, 70.0 / self._scale))
        canvas.arrow(self._panel(*start), self._panel(*end), INK, width=2.4)

    def _compass(self, canvas: Canvas) -> None:
        self._plate(canvas, self._side - 104.0, _INSET, 90.0, 92.0)
        foot = (self._side - 30.0, _INSET + 80.0)
        canvas.arrow(foot, (foot[0], foot[1] - 52.0), INK, width=1.8)
        canvas.arrow(foot, (foot[0] - 52.0, foot[1]), INK, width=1.8)

    def _bar(self, canvas: Canvas) -> None:
        width, _ = self._bar_size()
        self._plate(canvas, _INSET, self._side - 60.0, width + 20.0, 46.0)
        y = self._side - 26.0
        canvas.line([(_INSET + 10.0, y), (_INSET + 10.0 + width, y)], INK, width=3.0)

    def _bar_size(self) -> tuple[float, str]:
        """Return the length of the scale bar on the panel, and what it stands for."""
        arcsec = nice_step(0.45 * self._half)
        text = f"{arcsec:g} arcsec" if arcsec < 60.0 else f"{arcsec / 60.0:g} arcmin"
        return max(arcsec * self._scale, text_width(text, size=_TEXT)), text

    def _write(self, draw: ImageDraw.ImageDraw) -> None:
        width, text = self._bar_size()
        place = (_INSET + 10.0 + width / 2.0, self._side - 34.0)
        write(draw, place, text, size=_TEXT, anchor="md")
        foot = (self._side - 30.0, _INSET + 80.0)
        for name, x, y in (("N", 0.0, -64.0), ("E", -63.0, 0.0)):
            write(draw, (foot[0] + x, foot[1] + y), name, size=_TEXT, anchor="mm")

    def _plate(
        self, canvas: Canvas, left: float, top: float, width: float, height: float
    ) -> None:
        right, bottom = left + width, top + height
        box = [(left, top), (right, top), (right, bottom), (left, bottom)]
        canvas.fill(box, PAPER, opacity=_PLATE_OPACITY)

    def _place(self, ra: float, dec: float) -> Point:
        """Return arcsec east and north of the middle."""
        distance = float(separation_deg(self._row.ra, self._row.dec, ra, dec)) * 3600.0
        pa = float(position_angle(self._row.ra, self._row.dec, ra, dec))
        return _polar(pa, distance)

    def _panel(self, east: float, north: float) -> Point:
        middle = 0.5 * self._side
        return middle - east * self._scale, middle - north * self._scale


def _resampled(shape: ArcShape) -> ArcShape:
    """Return a ridge from end to end in even steps, the coordinate along it rising."""
    order = np.argsort(shape.along)
    along = np.linspace(shape.along[order[0]], shape.along[order[-1]], 33)
    return ArcShape(along, np.interp(along, shape.along[order], shape.ahead[order]))


def _polar(pa: float, distance: float) -> Point:
    """Return arcsec east and north of a step along a position angle."""
    turn = math.radians(pa)
    return distance * math.sin(turn), distance * math.cos(turn)


def _add(a: Point, b: Point) -> Point:
    return a[0] + b[0], a[1] + b[1]


def _middle(pixels: PixelArray) -> Point:
    return 0.5 * (pixels.shape[1] - 1), 0.5 * (pixels.shape[0] - 1)


def _reach(pixels: PixelArray, wcs: Any) -> float:
    """Return half the shorter side of an image, arcsec."""
    return 0.5 * min(pixels.shape) * pixel_scale_arcsec(wcs, *_middle(pixels))


def _within(pixels: PixelArray, x: FloatArray, y: FloatArray) -> Any:
    """Whether places lie on an image or close to it."""
    ny, nx = pixels.shape
    return (x > -nx) & (x < 2 * nx) & (y > -ny) & (y < 2 * ny)


def _clipped(corners: list[Point], side: int) -> list[Point]:
    """Return the part of a polygon in the panel (Sutherland and Hodgman 1974)."""
    for axis, limit, sign in (
        (0, 0.0, 1.0),
        (0, float(side), -1.0),
        (1, 0.0, 1.0),
        (1, float(side), -1.0),
    ):
        kept: list[Point] = []
        for start, end in zip(corners, [*corners[1:], *corners[:1]], strict=True):
            a, b = sign * (start[axis] - limit), sign * (end[axis] - limit)
            if a >= 0.0:
                kept.append(start)
            if a * b < 0.0:
                part = a / (a - b)
                kept.append(
                    (
                        start[0] + part * (end[0] - start[0]),
                        start[1] + part * (end[1] - start[1]),
                    )
                )
        corners = kept
    return corners
