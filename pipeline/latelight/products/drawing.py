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
    "PAPER",
    "QUIET",
    "RULE",
    "Colour",
    "Layer",
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

# Pillow draws lines without smoothing: draw twice as large, then halve.
_OVERSAMPLING = 2


class Layer:
    """A transparent sheet for lines over a picture.

    Parameters
    ----------
    width, height : int
        Size, pixels of the picture.
    """

    def __init__(self, width: int, height: int) -> None:
        size = (width * _OVERSAMPLING, height * _OVERSAMPLING)
        self._image = Image.new("RGBA", size, (255, 255, 255, 0))
        self._draw = ImageDraw.Draw(self._image)

    def line(
        self, points: Sequence[Point], colour: Colour, *, width: float = 1.5
    ) -> None:
        """Draw a line through points, with a light rim that any ground carries."""
        where = [(x * _OVERSAMPLING, y * _OVERSAMPLING) for x, y in points]
        for ink, extra in ((_HALO, 2.0), (colour, 0.0)):
            pen = round((width + extra) * _OVERSAMPLING)
            self._draw.line(where, fill=(*ink, 255), width=pen, joint="curve")

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
            size = (radius + extra) * _OVERSAMPLING
            for x, y in points:
                cx, cy = x * _OVERSAMPLING, y * _OVERSAMPLING
                box = (cx - size, cy - size, cx + size, cy + size)
                self._draw.ellipse(box, fill=(*ink, 255))

    def arrow(self, start: Point, end: Point, colour: Colour, *, width: float) -> None:
        """Draw an arrow from start to end."""
        angle = math.atan2(end[1] - start[1], end[0] - start[0])
        head = 5.0 * width
        neck = (end[0] - head * math.cos(angle), end[1] - head * math.sin(angle))
        barbs = [
            (
                neck[0] + side * 0.5 * head * math.sin(angle),
                neck[1] - side * 0.5 * head * math.cos(angle),
            )
            for side in (-1.0, 1.0)
        ]
        self.line([start, neck], colour, width=width)
        self.line([end, barbs[0], barbs[1], end], _HALO, width=0.5)
        self.fill([end, *barbs], colour, opacity=255)

    def fill(self, points: Sequence[Point], colour: Colour, *, opacity: int) -> None:
        """Fill a polygon; opacity 0-255."""
        where = [(x * _OVERSAMPLING, y * _OVERSAMPLING) for x, y in points]
        if opacity == 255:
            self._draw.polygon(where, fill=(*colour, 255))
            return
        # Pillow replaces pixels instead of mixing them: mix on a sheet of its own.
        sheet = Image.new("RGBA", self._image.size, (*colour, 0))
        ImageDraw.Draw(sheet).polygon(where, fill=(*colour, opacity))
        self._image.alpha_composite(sheet)

    def lay_on(self, picture: Image.Image, x: int, y: int) -> None:
        """Put the sheet on an RGB picture with its corner at x, y."""
        sheet = self._image.reduce(_OVERSAMPLING)
        picture.paste(sheet, (x, y), sheet)


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
