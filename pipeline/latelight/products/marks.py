"""What is drawn over the panels: the arc, its motion, its origin, north, scale."""

from __future__ import annotations

import math

import numpy as np
from PIL import Image, ImageDraw

from latelight.products.cutouts import Cutout
from latelight.products.drawing import (
    ARC,
    INK,
    MOTION,
    ORIGIN,
    Layer,
    nice_step,
    text_width,
    write,
)
from latelight.products.profile import ridge_offset
from latelight.sky import pixel_scale_arcsec, position_angle_to_pixel_angle

__all__ = ["Marks"]

_TEXT = 16
# Lengths on the panel, as fractions of its side.
_ARROW, _WEDGE, _ORIGIN_LINE, _COMPASS, _SCALE_BAR = 0.19, 0.24, 0.24, 0.12, 0.30
_MARGIN = 12


class Marks:
    """Draws over one panel of a picture.

    Parameters
    ----------
    picture : PIL.Image.Image
        The RGB picture.
    cutout : Cutout
        The candidate.
    x, y : int
        Upper left corner of the panel.
    side : int
        Its side, pixels.
    """

    def __init__(
        self, picture: Image.Image, cutout: Cutout, *, x: int, y: int, side: int
    ) -> None:
        self._picture = picture
        self._cutout = cutout
        self._corner = (x, y)
        self._side = side
        self._zoom = side / cutout.science.shape[0]
        self._layer = Layer(side, side)
        self._texts: list[tuple[tuple[float, float], str, str]] = []

    def finish(self) -> None:
        """Put what was drawn on the picture."""
        self._layer.lay_on(self._picture, *self._corner)
        draw = ImageDraw.Draw(self._picture)
        for (x, y), text, anchor in self._texts:
            place = (x + self._corner[0], y + self._corner[1])
            write(draw, place, text, size=_TEXT, anchor=anchor, halo=True)

    def ends(self, *, science: bool) -> None:
        """Mark where the arc begins and ends at one epoch, clear of the arc itself."""
        x, y, normal = self._ridge(science=science)
        for end, inward in ((0, 1), (-1, -2)):
            along = math.atan2(y[end] - y[inward], x[end] - x[inward])
            foot = self._panel(
                x[end] + 3.0 * math.cos(along), y[end] + 3.0 * math.sin(along)
            )
            angle = math.radians(normal[end])
            tick = 8.0 * math.cos(angle), -8.0 * math.sin(angle)
            self._layer.line(
                [
                    (foot[0] - tick[0], foot[1] - tick[1]),
                    (foot[0] + tick[0], foot[1] + tick[1]),
                ],
                ARC,
                width=2.0,
            )

    def trace(self) -> None:
        """Dot the ridge at the science epoch; the arc shows between the dots."""
        x, y, _ = self._ridge(science=True)
        path = np.array([self._panel(*point) for point in zip(x, y, strict=True)])
        steps = np.hypot(*np.diff(path, axis=0).T)
        along = np.append(0.0, np.cumsum(steps))
        places = np.arange(0.0, along[-1] + 1e-9, 11.0)
        dots = [
            (
                float(np.interp(s, along, path[:, 0])),
                float(np.interp(s, along, path[:, 1])),
            )
            for s in places
        ]
        self._layer.dots(dots, ARC, radius=1.3)

    def motion(self) -> None:
        """Draw the motion as an arrow ahead of the arc, its error as a wedge."""
        row = self._cutout.row
        tail = self._ahead(self._clearance())
        err = max(row.normal_angle_err, 0.5)
        fan = [
            self._off(tail, row.normal_angle + turn, _WEDGE)
            for turn in np.linspace(-err, err, 9)
        ]
        self._layer.fill([tail, *fan], MOTION, opacity=70)
        self._layer.arrow(
            tail, self._off(tail, row.normal_angle, _ARROW), MOTION, width=2.5
        )

    def origin(self) -> None:
        """Draw a broken line from behind the arc towards the best source."""
        row, wcs = self._cutout.row, self._cutout.wcs
        if not row.source or row.away_angle is None or row.normal_pa is None:
            return
        x, y = row.x - self._cutout.x0, row.y - self._cutout.y0
        towards = position_angle_to_pixel_angle(
            wcs, x, y, row.normal_pa - row.away_angle + 180.0
        )
        start = self._ahead(-(row.shift_px or 0.0) - self._clearance())
        end = self._off(start, towards, _ORIGIN_LINE)
        self._layer.dashes(start, end, ORIGIN, width=2.0)
        self._label(self._off(end, towards, 0.03), f"to {row.source}", towards)

    def compass(self) -> None:
        """Draw north and east in a corner, or +x and +y without a WCS."""
        wcs, side = self._cutout.wcs, self._side
        middle = (self._cutout.science.shape[0] - 1) / 2
        if wcs is None:
            arms = [("x", 0.0), ("y", 90.0)]
        else:
            arms = [
                (name, position_angle_to_pixel_angle(wcs, middle, middle, pa))
                for name, pa in (("N", 0.0), ("E", 90.0))
            ]
        reach = _COMPASS * side + 16
        # The corner of the cross, so that both arms and letters stay inside.
        room = [
            [max(0.0, sign * math.cos(math.radians(a))) for _, a in arms]
            for sign in (-1.0, 1.0)
        ]
        rise = [
            [max(0.0, sign * math.sin(math.radians(a))) for _, a in arms]
            for sign in (-1.0, 1.0)
        ]
        foot = (
            _MARGIN + max(room[0]) * reach,
            side - _MARGIN - max(rise[0]) * reach,
        )
        for name, angle in arms:
            end = self._off(foot, angle, _COMPASS)
            self._layer.arrow(foot, end, INK, width=1.8)
            x, y = self._off(end, angle, 9.0 / side)
            self._texts.append(((x, y), name, "mm"))

    def scale_bar(self) -> None:
        """Draw a bar of a round length in arcsec, or pixels without a WCS."""
        wcs, side = self._cutout.wcs, self._side
        middle = (self._cutout.science.shape[0] - 1) / 2
        unit = 1.0 if wcs is None else pixel_scale_arcsec(wcs, middle, middle)
        length = nice_step(_SCALE_BAR * side / self._zoom * unit)
        width = length / unit * self._zoom
        y = side - _MARGIN - 2
        self._layer.line([(_MARGIN, y), (_MARGIN + width, y)], INK, width=3.0)
        label = f"{length:g} px" if wcs is None else f"{length:g} arcsec"
        self._texts.append(((_MARGIN + width / 2, y - 6), label, "md"))

    def _ridge(self, *, science: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return the ridge at an epoch: x, y in cutout pixels and the normals."""
        row, trace = self._cutout.row, self._cutout.trace
        ahead = self._trace_to_row()
        if not science:
            ahead -= row.shift_px or 0.0
        angle = np.radians(row.normal_angle)
        return (
            trace.x + ahead * np.cos(angle),
            trace.y + ahead * np.sin(angle),
            trace.normal_angle,
        )

    def _trace_to_row(self) -> float:
        row, cutout = self._cutout.row, self._cutout
        return ridge_offset(
            cutout.trace,
            x=row.x - cutout.x0,
            y=row.y - cutout.y0,
            angle=row.normal_angle,
        )

    def _clearance(self) -> float:
        """Return how far from a ridge its light is gone, pixels."""
        return 0.5 * self._cutout.row.width_px + 1.5 * self._cutout.fwhm_px

    def _ahead(self, distance: float) -> tuple[float, float]:
        row, cutout = self._cutout.row, self._cutout
        angle = math.radians(row.normal_angle)
        return self._panel(
            row.x - cutout.x0 + distance * math.cos(angle),
            row.y - cutout.y0 + distance * math.sin(angle),
        )

    def _panel(self, x: float, y: float) -> tuple[float, float]:
        """Turn cutout pixels into panel pixels, y downwards."""
        return (x + 0.5) * self._zoom, self._side - (y + 0.5) * self._zoom

    def _off(
        self, start: tuple[float, float], angle: float, fraction: float
    ) -> tuple[float, float]:
        radians = math.radians(angle)
        return (
            start[0] + fraction * self._side * math.cos(radians),
            start[1] - fraction * self._side * math.sin(radians),
        )

    def _label(self, place: tuple[float, float], text: str, angle: float) -> None:
        """Write at the end of a line, on the side away from it, inside the panel."""
        width = text_width(text, size=_TEXT)
        left = place[0] if math.cos(math.radians(angle)) >= 0.0 else place[0] - width
        left = min(max(left, _MARGIN), max(_MARGIN, self._side - _MARGIN - width))
        y = min(max(place[1], 2 * _MARGIN), self._side - 2 * _MARGIN)
        self._texts.append(((left, y), text, "lm"))
