"""The panel that plots a candidate's mean profile along its motion."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from PIL import Image, ImageDraw

from latelight.products.drawing import (
    INK,
    OVERSAMPLING,
    PAPER,
    QUIET,
    RULE,
    Canvas,
    Colour,
    nice_step,
    write,
)
from latelight.products.profile import NormalProfile

__all__ = ["draw_profile"]

_TEXT = 14
_LEFT, _BOTTOM, _TOP, _RIGHT = 46, 24, 10, 8
_POSITIVE: Colour = (196, 98, 20)
_NEGATIVE: Colour = (40, 96, 168)


@dataclass(frozen=True, slots=True)
class _Axes:
    """Turns data into panel pixels."""

    x: tuple[float, float]
    y: tuple[float, float]
    width: int
    height: int

    def at(self, x: float, y: float) -> tuple[float, float]:
        across = (x - self.x[0]) / (self.x[1] - self.x[0])
        up = (y - self.y[0]) / (self.y[1] - self.y[0])
        return (
            _LEFT + across * (self.width - _LEFT - _RIGHT),
            self.height - _BOTTOM - up * (self.height - _BOTTOM - _TOP),
        )


def draw_profile(
    picture: Image.Image,
    profile: NormalProfile,
    *,
    corner: tuple[int, int],
    side: int,
    unit: float,
    template_px: float | None,
) -> None:
    """Plot a profile with its 1-sigma band and the ridges of both epochs.

    Parameters
    ----------
    picture : PIL.Image.Image
        The RGB picture.
    profile : NormalProfile
        What to plot.
    corner : (int, int)
        Upper left corner of the panel.
    side : int
        Its side, pixels.
    unit : float
        Axis units (arcsec) per pixel; 1 to label pixels.
    template_px : float or None
        The template's ridge ahead of the science's, pixels; None when not seen.
    """
    good = np.isfinite(profile.value)
    offset, value, err = (a[good] for a in (profile.offset, profile.value, profile.err))
    if offset.size < 2:
        return
    low, high = float((value - err).min()), float((value + err).max())
    pad = 0.08 * (high - low)
    axes = _Axes(
        (float(profile.offset[0] * unit), float(profile.offset[-1] * unit)),
        (min(low, 0.0) - pad, max(high, 0.0) + pad),
        side,
        side,
    )
    size = (side * OVERSAMPLING, side * OVERSAMPLING)
    canvas = Canvas(Image.new("RGB", size, PAPER))
    _draw_frame(canvas, axes)
    where = offset * unit
    upper = [axes.at(*p) for p in zip(where, value + err, strict=True)]
    lower = [axes.at(*p) for p in zip(where, value - err, strict=True)]
    canvas.fill(upper + lower[::-1], QUIET, opacity=0.24)
    canvas.line([axes.at(*p) for p in zip(where, value, strict=True)], INK, width=2.0)
    epochs = [("science", 0.0, _POSITIVE)]
    if template_px is not None:
        epochs.append(("template", template_px * unit, _NEGATIVE))
    for _, place, colour in epochs:
        canvas.dashes(
            axes.at(place, axes.y[0]), axes.at(place, axes.y[1]), colour, width=1.2
        )
    picture.paste(canvas.finished(), corner)
    draw = ImageDraw.Draw(picture)
    _number_ticks(draw, axes, corner)
    for name, place, colour in epochs:
        # Words on the outer side of the two lines, at the end where they are free.
        left = place < max(line[1] for line in epochs)
        top = name == "science"
        ends = axes.at(place, axes.y[1] if top else axes.y[0])
        spot = (
            corner[0] + ends[0] + (-6 if left else 6),
            corner[1] + ends[1] + (4 if top else -4),
        )
        anchor = ("r" if left else "l") + ("a" if top else "d")
        write(draw, spot, name, size=_TEXT, colour=colour, anchor=anchor, halo=True)


def _draw_frame(canvas: Canvas, axes: _Axes) -> None:
    """Draw the zero line and the ticks."""
    canvas.line([axes.at(axes.x[0], 0.0), axes.at(axes.x[1], 0.0)], RULE, width=1.0)
    for tick in _ticks(axes.x):
        x, y = axes.at(tick, axes.y[0])
        canvas.line([(x, y), (x, y + 4)], QUIET, width=1.0)
    for tick in _ticks(axes.y):
        x, y = axes.at(axes.x[0], tick)
        canvas.line([(x - 4, y), (x, y)], QUIET, width=1.0)


def _number_ticks(
    draw: ImageDraw.ImageDraw, axes: _Axes, corner: tuple[int, int]
) -> None:
    for tick in _ticks(axes.x):
        x, y = axes.at(tick, axes.y[0])
        spot = (corner[0] + x, corner[1] + y + 6)
        write(draw, spot, f"{tick:g}", size=_TEXT, colour=QUIET, anchor="ma")
    for tick in _ticks(axes.y):
        x, y = axes.at(axes.x[0], tick)
        spot = (corner[0] + x - 7, corner[1] + y)
        write(draw, spot, f"{tick:g}", size=_TEXT, colour=QUIET, anchor="rm")


def _ticks(span: tuple[float, float]) -> list[float]:
    step = nice_step((span[1] - span[0]) / 3.0)
    first, last = int(np.ceil(span[0] / step)), int(np.floor(span[1] / step))
    # Rounded, so that three steps of 0.1 read 0.3.
    return [float(f"{index * step:.6g}") for index in range(first, last + 1)]
