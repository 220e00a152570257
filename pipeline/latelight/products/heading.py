"""The head of a picture: a name, where it belongs, and its numbers in one line."""

from __future__ import annotations

from collections.abc import Sequence

from PIL import Image, ImageDraw

from latelight.products.captions import shortened
from latelight.products.drawing import QUIET, RULE, text_width, write

__all__ = ["draw_heading"]

_EDGE = 18
_SMALL, _TEXT, _NAME = 14, 18, 27


def draw_heading(
    picture: Image.Image,
    *,
    name: str,
    context: Sequence[str],
    facts: Sequence[tuple[str, str]],
) -> None:
    """Draw a heading over the whole width of a picture.

    Parameters
    ----------
    picture : PIL.Image.Image
        The RGB picture; the upper 104 pixels are used.
    name : str
        What it shows.
    context : sequence of str
        Where that belongs; empty words are left out.
    facts : sequence of (str, str)
        Labels and values, in reading order.
    """
    draw = ImageDraw.Draw(picture)
    write(draw, (_EDGE, 14), name, size=_NAME)
    words = shortened(" · ".join(word for word in context if word), 120)
    place = (picture.width - _EDGE, 22)
    write(draw, place, words, size=_SMALL, colour=QUIET, anchor="ra")
    draw.line([(_EDGE, 52), (picture.width - _EDGE, 52)], fill=RULE)
    widths = [
        max(text_width(value, size=_TEXT), text_width(label, size=_SMALL))
        for label, value in facts
    ]
    # Spread over the whole line, at most four letters apart.
    free = picture.width - 2 * _EDGE - sum(widths)
    apart = min(44.0, free / max(len(facts) - 1, 1))
    x = float(_EDGE)
    for (label, value), width in zip(facts, widths, strict=True):
        write(draw, (x, 60), label, size=_SMALL, colour=QUIET)
        write(draw, (x, 78), value, size=_TEXT)
        x += width + apart
