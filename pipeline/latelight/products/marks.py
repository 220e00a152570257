"""What is drawn over the panels: the arc, its motion, its origin, north, scale."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from PIL import Image, ImageDraw

from latelight.products.captions import shortened
from latelight.products.cutouts import Cutout, template_offset_px
from latelight.products.drawing import (
    ARC,
    INK,
    MOTION,
    ORIGIN,
    OVERSAMPLING,
    PAPER,
    Canvas,
    Colour,
    Point,
    nice_step,
    text_width,
    write,
)
from latelight.products.profile import ridge_offset
from latelight.records import ArcTrace, FloatArray
from latelight.sky import pixel_scale_arcsec, position_angle_to_pixel_angle

__all__ = ["MarkedArc", "Marks", "marked_candidate"]

_TEXT = 16
# Lengths on the panel, as fractions of its side.
_ARROW, _WEDGE, _ORIGIN_LINE, _COMPASS, _SCALE_BAR = 0.20, 0.30, 0.24, 0.11, 0.30
_MARGIN = 10
_LONGEST_NAME = 20
_PLATE_OPACITY = 0.8


@dataclass(frozen=True, slots=True)
class MarkedArc:
    """What the marks of an arc need to know of it; pixels are those of its cutout.

    Attributes
    ----------
    side_px : int
        Side of the cutout.
    wcs : astropy.wcs.WCS or None
        Of the cutout.
    fwhm_px, width_px : float
        PSF width, and width of the arc with the PSF taken out.
    trace : ArcTrace
        Centre line of the arc.
    x, y : float
        A place on the ridge.
    places : tuple of float
        Where the ridge lay at the epochs, ahead of that place along the motion.
    angle, angle_err : float
        Pixel angle of the motion and 1 sigma, degrees.
    source : str
        Best source, or empty.
    away_angle, normal_pa : float or None
        Motion minus the way from the source, and position angle of the motion,
        degrees.
    """

    side_px: int
    wcs: Any
    fwhm_px: float
    width_px: float
    trace: ArcTrace
    x: float
    y: float
    places: tuple[float, ...]
    angle: float
    angle_err: float
    source: str
    away_angle: float | None
    normal_pa: float | None


def marked_candidate(cutout: Cutout) -> MarkedArc:
    """Return what the marks of a candidate need; it lay in two places."""
    row = cutout.row
    return MarkedArc(
        side_px=cutout.science.shape[0],
        wcs=cutout.wcs,
        fwhm_px=cutout.fwhm_px,
        width_px=row.width_px,
        trace=cutout.trace,
        x=row.x - cutout.x0,
        y=row.y - cutout.y0,
        places=(0.0, template_offset_px(row)),
        angle=row.normal_angle,
        angle_err=row.normal_angle_err,
        source=row.source,
        away_angle=row.away_angle,
        normal_pa=row.normal_pa,
    )


class Marks:
    """Draws over one panel of an arc's picture.

    Parameters
    ----------
    panel : PIL.Image.Image
        The square panel, RGB, ``OVERSAMPLING`` times as large as it will be.
    arc : MarkedArc
        The arc.
    """

    def __init__(self, panel: Image.Image, arc: MarkedArc) -> None:
        self._arc = arc
        self._canvas = Canvas(panel)
        self._side = panel.width // OVERSAMPLING
        self._zoom = self._side / arc.side_px
        self._texts: list[tuple[Point, str, str, Colour]] = []
        # The trace may follow the ridge at any epoch: this leads to the place.
        self._ahead_of_trace = ridge_offset(
            arc.trace, x=arc.x, y=arc.y, angle=arc.angle
        )

    def finished(self) -> Image.Image:
        """Return the panel at its final size, with its texts."""
        panel = self._canvas.finished()
        draw = ImageDraw.Draw(panel)
        for place, text, anchor, colour in self._texts:
            write(
                draw, place, text, size=_TEXT, colour=colour, anchor=anchor, halo=True
            )
        return panel

    def ends(self, ahead: float) -> None:
        """Mark the ends of the arc when it was so far ahead, clear of the arc."""
        x, y = self._ridge(ahead)
        for end, inward in ((0, 1), (-1, -2)):
            along = math.atan2(y[end] - y[inward], x[end] - x[inward])
            foot = self._panel(
                x[end] + 3.0 * math.cos(along), y[end] + 3.0 * math.sin(along)
            )
            across = along + math.pi / 2.0
            tick = 11.0 * math.cos(across), -11.0 * math.sin(across)
            stroke = [
                (foot[0] + side * tick[0], foot[1] + side * tick[1])
                for side in (-1.0, 1.0)
            ]
            self._canvas.line(stroke, ARC, width=2.5)

    def trace(self, ahead: float) -> None:
        """Dot the ridge when it was so far ahead; the arc shows between the dots."""
        x, y = self._ridge(ahead)
        path = np.array([self._panel(*point) for point in zip(x, y, strict=True)])
        along = np.append(0.0, np.cumsum(np.hypot(*np.diff(path, axis=0).T)))
        places = np.arange(0.0, along[-1] + 1e-9, 11.0)
        dots = np.stack([np.interp(places, along, axis) for axis in path.T], axis=1)
        self._canvas.dots([(float(u), float(v)) for u, v in dots], ARC, radius=1.3)

    def motion(self) -> None:
        """Draw the motion as an arrow ahead of the arc, its error as a wedge."""
        arc = self._arc
        tail = self._along_motion(max(arc.places) + self._clearance())
        err = max(arc.angle_err, 0.5)
        fan = [
            self._off(tail, arc.angle + turn, _WEDGE)
            for turn in np.linspace(-err, err, 9)
        ]
        self._canvas.fill([tail, *fan], MOTION, opacity=0.35)
        tip = self._off(tail, arc.angle, _ARROW)
        self._canvas.arrow(tail, tip, MOTION, width=2.5)

    def origin(self) -> None:
        """Draw a broken line from behind the arc towards the best source."""
        arc = self._arc
        if not arc.source or arc.away_angle is None or arc.normal_pa is None:
            return
        towards = position_angle_to_pixel_angle(
            arc.wcs, arc.x, arc.y, arc.normal_pa - arc.away_angle + 180.0
        )
        start = self._along_motion(min(arc.places) - self._clearance())
        end = self._off(start, towards, _ORIGIN_LINE)
        self._canvas.dashes(start, end, ORIGIN, width=2.0)
        self._label(
            self._off(end, towards, 0.03),
            f"to {shortened(arc.source, _LONGEST_NAME)}",
            towards,
        )

    def compass(self) -> None:
        """Draw north and east in a clear corner, or +x and +y without a WCS."""
        wcs = self._arc.wcs
        if wcs is None:
            arms = {"x": 0.0, "y": 90.0}
        else:
            arms = {
                name: position_angle_to_pixel_angle(wcs, *self._middle(), pa)
                for name, pa in (("N", 0.0), ("E", 90.0))
            }
        reach = _COMPASS * self._side + 18.0
        tips = [(0.0, 0.0)]
        for angle in arms.values():
            turn = math.radians(angle)
            tips.append((reach * math.cos(turn), -reach * math.sin(turn)))
        low = [min(tip[axis] for tip in tips) for axis in (0, 1)]
        size = [max(tip[axis] for tip in tips) - low[axis] + 20.0 for axis in (0, 1)]
        left, top = self._clear_corner(size[0], size[1])
        self._plate(left, top, size[0], size[1])
        foot = (left + 10.0 - low[0], top + 10.0 - low[1])
        for name, angle in arms.items():
            end = self._off(foot, angle, _COMPASS)
            self._canvas.arrow(foot, end, INK, width=1.8)
            self._texts.append(
                (self._off(end, angle, 9.0 / self._side), name, "mm", INK)
            )

    def scale_bar(self) -> None:
        """Draw a bar of a round length in arcsec, or pixels without a WCS."""
        wcs = self._arc.wcs
        unit = 1.0 if wcs is None else pixel_scale_arcsec(wcs, *self._middle())
        length = nice_step(_SCALE_BAR * self._side / self._zoom * unit)
        bar = length / unit * self._zoom
        label = f"{length:g} px" if wcs is None else f"{length:g} arcsec"
        width = max(bar, text_width(label, size=_TEXT)) + 16.0
        left, top = self._clear_corner(width, 34.0)
        self._plate(left, top, width, 34.0)
        middle = left + width / 2.0
        ends = [(middle - bar / 2.0, top + 27.0), (middle + bar / 2.0, top + 27.0)]
        self._canvas.line(ends, INK, width=3.0)
        self._texts.append(((middle, top + 20.0), label, "md", INK))

    def _ridge(self, ahead: float) -> tuple[FloatArray, FloatArray]:
        """Return the ridge when it was so far ahead of the place, cutout pixels."""
        trace, total = self._arc.trace, self._ahead_of_trace + ahead
        angle = math.radians(self._arc.angle)
        return trace.x + total * math.cos(angle), trace.y + total * math.sin(angle)

    def _clearance(self) -> float:
        """Return how far from a ridge its light is gone, pixels."""
        return 0.5 * self._arc.width_px + 1.5 * self._arc.fwhm_px

    def _along_motion(self, distance: float) -> Point:
        """Return the place on the panel that far ahead of the arc's, cutout pixels."""
        arc, angle = self._arc, math.radians(self._arc.angle)
        return self._panel(
            arc.x + distance * math.cos(angle), arc.y + distance * math.sin(angle)
        )

    def _middle(self) -> Point:
        centre = (self._arc.side_px - 1) / 2
        return centre, centre

    def _panel(self, x: float, y: float) -> Point:
        """Turn cutout pixels into panel pixels, y downwards."""
        return (x + 0.5) * self._zoom, self._side - (y + 0.5) * self._zoom

    def _off(self, start: Point, angle: float, fraction: float) -> Point:
        """Return the place a fraction of the side away, in a pixel direction."""
        radians = math.radians(angle)
        return (
            start[0] + fraction * self._side * math.cos(radians),
            start[1] - fraction * self._side * math.sin(radians),
        )

    def _clear_corner(self, width: float, height: float) -> Point:
        """Return the corner for a box of that size that is farthest from the arc."""
        ridges = [self._ridge(ahead) for ahead in self._arc.places]
        x = np.concatenate([ridge[0] for ridge in ridges])
        y = np.concatenate([ridge[1] for ridge in ridges])
        arc_u, arc_v = self._panel(x, y)  # type: ignore[arg-type]
        right, bottom = (self._side - _MARGIN - size for size in (width, height))
        corners = [
            (left, top) for top in (bottom, _MARGIN) for left in (_MARGIN, right)
        ]

        def distance(corner: tuple[float, float]) -> float:
            across = arc_u - corner[0] - width / 2.0
            down = arc_v - corner[1] - height / 2.0
            return float(np.hypot(across, down).min())

        # Prefer the lower left as long as the arc stays out of it.
        if distance(corners[0]) > 0.75 * max(width, height):
            return corners[0]
        return max(corners, key=distance)

    def _plate(self, left: float, top: float, width: float, height: float) -> None:
        right, bottom = left + width, top + height
        box = [(left, top), (right, top), (right, bottom), (left, bottom)]
        self._canvas.fill(box, PAPER, opacity=_PLATE_OPACITY)

    def _label(self, place: Point, text: str, angle: float) -> None:
        """Write at the far end of the origin's line, inside the panel."""
        width = text_width(text, size=_TEXT)
        left = place[0] if math.cos(math.radians(angle)) >= 0.0 else place[0] - width
        left = min(max(left, _MARGIN), max(_MARGIN, self._side - _MARGIN - width))
        y = min(max(place[1], 2.0 * _MARGIN), self._side - 2.0 * _MARGIN)
        self._texts.append(((left, y), text, "lm", ORIGIN))
