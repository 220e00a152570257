"""Ink for pictures: smooth lines with a halo, and text that any ground carries."""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Sequence

from PIL import Image, ImageDraw, ImageFont

__all__ = [
    "ARC",
    "INK",
    "MOTION",
    "ORIGIN",
    "OVERSAMPLING",
    "PAPER",
    "QUIET",
    "RULE",
    "Canvas",
    "Colour",
    "Point",
    "nice_step",
    "text_width",
    "write",
]

Colour = tuple[int, int, int]
Point = tuple[float, float]

PAPER: Colour = (251, 250, 247)
INK: Colour = (28, 32, 38)
QUIET: Colour = (104, 110, 118)
RULE: Colour = (206, 206, 202)
ARC: Colour = (0, 118, 98)
MOTION: Colour = INK
ORIGIN: Colour = (122, 32, 142)
_HALO = (255, 255, 255)

OVERSAMPLING = 2
"""Pillow draws lines without smoothing: draw this many times larger, then shrink."""


class Canvas:
    """A panel to draw on with smooth lines; coordinates are the finished panel's.

    Parameters
    ----------
    image : PIL.Image.Image
        RGB, :data:`OVERSAMPLING` times as large as the finished panel; it is
        drawn upon.
    """

    def __init__(self, image: Image.Image) -> None:
        self._image = image
        self._draw = ImageDraw.Draw(image)

    def finished(self) -> Image.Image:
        """Return the panel at its final size."""
        return self._image.reduce(OVERSAMPLING)

    def line(
        self, points: Sequence[Point], colour: Colour, *, width: float = 1.5
    ) -> None:
        """Draw a line through points, with a light rim that any ground carries."""
        where = [(x * OVERSAMPLING, y * OVERSAMPLING) for x, y in points]
        for ink, extra in ((_HALO, 2.0), (colour, 0.0)):
            pen = round((width + extra) * OVERSAMPLING)
            self._draw.line(where, fill=ink, width=pen, joint="curve")

    def dashes(
        self,
        start: Point,
        end: Point,
        colour: Colour,
        *,
        width: float = 1.5,
        dash: float = 6.0,
        gap: float = 5.0,
    ) -> None:
        """Draw a broken straight line."""
        length = math.dist(start, end)
        at = 0.0
        while at < length:
            stop = min(at + dash, length)
            ends = [
                (
                    start[0] + (end[0] - start[0]) * along / length,
                    start[1] + (end[1] - start[1]) * along / length,
                )
                for along in (at, stop)
            ]
            self.line(ends, colour, width=width)
            at += dash + gap

    def dots(self, points: Sequence[Point], colour: Colour, *, radius: float) -> None:
        """Draw round dots."""
        for ink, extra in ((_HALO, 0.8), (colour, 0.0)):
            size = (radius + extra) * OVERSAMPLING
            for x, y in points:
                cx, cy = x * OVERSAMPLING, y * OVERSAMPLING
                box = (cx - size, cy - size, cx + size, cy + size)
                self._draw.ellipse(box, fill=ink)

    def arrow(self, start: Point, end: Point, colour: Colour, *, width: float) -> None:
        """Draw an arrow from start to end."""
        angle = math.atan2(end[1] - start[1], end[0] - start[0])
        head = 6.0 * width
        neck = (end[0] - head * math.cos(angle), end[1] - head * math.sin(angle))
        barbs = [
            (
                neck[0] + side * 0.36 * head * math.sin(angle),
                neck[1] - side * 0.36 * head * math.cos(angle),
            )
            for side in (-1.0, 1.0)
        ]
        self.line([start, neck], colour, width=width)
        self.line([end, barbs[0], barbs[1], end], _HALO, width=0.5)
        self.fill([end, *barbs], colour)

    def fill(
        self, points: Sequence[Point], colour: Colour, *, opacity: float = 1.0
    ) -> None:
        """Fill a polygon; opacity 0-1."""
        where = [(x * OVERSAMPLING, y * OVERSAMPLING) for x, y in points]
        if opacity >= 1.0:
            self._draw.polygon(where, fill=colour)
            return
        # Only the polygon's neighbourhood is mixed, which is several times faster.
        left, top = (math.floor(min(point[axis] for point in where)) for axis in (0, 1))
        right, bottom = (
            math.ceil(max(point[axis] for point in where)) + 1 for axis in (0, 1)
        )
        mask = Image.new("L", (right - left, bottom - top))
        moved = [(x - left, y - top) for x, y in where]
        ImageDraw.Draw(mask).polygon(moved, fill=round(255 * opacity))
        self._image.paste(colour, (left, top, right, bottom), mask)


def write(
    draw: ImageDraw.ImageDraw,
    place: Point,
    text: str,
    *,
    size: int,
    colour: Colour = INK,
    anchor: str = "la",
    halo: bool = False,
) -> None:
    """Write a line of text.

    Parameters
    ----------
    draw : ImageDraw
        Of the picture.
    place : (float, float)
        Where the anchor goes.
    text : str
        Letters the font lacks are spelled out or become ``?``.
    size : int
        Height of the font, pixels.
    colour : Colour
        Of the ink.
    anchor : str
        Pillow's two letters: l, m, r and a (top), m, s (baseline), d (bottom).
    halo : bool
        Surround the letters with a light rim, for text over an image.
    """
    draw.text(
        place,
        _known(text),
        font=ImageFont.load_default(size),
        fill=colour,
        anchor=anchor,
        stroke_width=2 if halo else 0,
        stroke_fill=_HALO,
    )


def text_width(text: str, *, size: int) -> float:
    """Return the width of a line of text, pixels."""
    font = ImageFont.load_default(size)
    return float(font.getlength(_known(text)))


def nice_step(largest: float) -> float:
    """Return the largest of 1, 2, 5 x 10^n that is not above a positive number."""
    power = 10.0 ** math.floor(math.log10(largest))
    step = max(factor for factor in (1.0, 2.0, 5.0) if factor * power <= largest)
    return step * power


def _known(text: str) -> str:
    return "".join(map(_spelled, text))


def _spelled(letter: str) -> str:
    # Pillow's own font holds ASCII and little else.
    if letter.isascii() or letter in "±°·":
        return letter
    name = unicodedata.name(letter, "")
    if name.startswith("GREEK"):
        return name.split()[3].lower() if len(name.split()) > 3 else "?"
    plain = unicodedata.normalize("NFKD", letter).encode("ascii", "ignore").decode()
    return plain or "?"
