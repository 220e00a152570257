"""A finder chart: where to point the slit, on one sheet for the telescope."""

from __future__ import annotations

from PIL import Image, ImageDraw

from latelight.forecast.predict import predict
from latelight.products.captions import measured, shortened
from latelight.products.drawing import (
    ARC,
    INK,
    OVERSAMPLING,
    PAPER,
    QUIET,
    RULE,
    Canvas,
    Colour,
    text_width,
    write,
)
from latelight.products.forecast_rows import ForecastRow
from latelight.reports.dates import date_words
from latelight.reports.finder_chart import PREDICTED, SLIT, draw_chart
from latelight.reports.finder_ground import ArcShape, Ground
from latelight.reports.moving_arcs import FollowedArc

__all__ = ["draw_finder", "sexagesimal"]

_SIDE, _EDGE, _HEAD, _FACTS = 820, 24, 70, 380
_WIDTH, _HEIGHT = _SIDE + _FACTS + 3 * _EDGE, _HEAD + _SIDE + _EDGE
_LEFT = _SIDE + 2 * _EDGE
_SMALL, _TEXT, _LARGE, _NAME = 15, 19, 23, 28
_KINDS = {
    "track": "track, not a confirmed echo",
    "candidate": "candidate, not confirmed",
}
_WARNING: Colour = (160, 30, 20)


def draw_finder(
    ground: Ground, shape: ArcShape, row: ForecastRow, followed: FollowedArc
) -> Image.Image:
    """Draw the chart of one arc.

    Parameters
    ----------
    ground : Ground
        The image: a whole frame or a cutout.
    shape : ArcShape
        The arc's ridge.
    row : ForecastRow
        The forecast.
    followed : FollowedArc
        The arc.

    Returns
    -------
    PIL.Image.Image
        RGB, on a light ground.
    """
    last = predict(followed.arc, followed.mjd_last)
    chart = draw_chart(ground, shape, row=row, last=last, side=_SIDE)
    picture = Image.new("RGB", (_WIDTH, _HEIGHT), PAPER)
    picture.paste(chart, (_EDGE, _HEAD))
    draw = ImageDraw.Draw(picture)
    box = (_EDGE - 1, _HEAD - 1, _EDGE + _SIDE, _HEAD + _SIDE)
    draw.rectangle(box, outline=RULE)
    _write_heading(draw, row)
    bottom = _write_facts(draw, row)
    _write_remark(draw, row.remark, top=bottom)
    _draw_legend(picture, row, ground.note)
    return picture


def sexagesimal(ra: float, dec: float) -> tuple[str, str]:
    """Return a place as hours to 0.01 s and degrees to 0.1 arcsec, rounded."""
    time = round(ra * 24_000.0) % 8_640_000
    arc = round(abs(dec) * 36_000.0)
    sign = "-" if dec < 0.0 and arc else "+"
    hours = (
        f"{time // 360_000:02d} {time // 6_000 % 60:02d} {time % 6_000 / 100.0:05.2f}"
    )
    degrees = f"{arc // 36_000:02d} {arc // 600 % 60:02d} {arc % 600 / 10.0:04.1f}"
    return hours, sign + degrees


def _write_heading(draw: ImageDraw.ImageDraw, row: ForecastRow) -> None:
    write(draw, (_EDGE, 16), row.id, size=_NAME)
    words = [row.field, f"filter {row.filter}" if row.filter else "", _KINDS[row.kind]]
    context = shortened(" · ".join(word for word in words if word), 60)
    place = (_WIDTH - _EDGE, 26)
    write(draw, place, context, size=_SMALL, colour=QUIET, anchor="ra")
    draw.line([(_EDGE, 56), (_WIDTH - _EDGE, 56)], fill=RULE)


def _write_facts(draw: ImageDraw.ImageDraw, row: ForecastRow) -> int:
    """Write what is needed at the telescope; return where the text ends."""
    y = _HEAD - 2
    for label, values, size in _facts(row):
        write(draw, (_LEFT, y), label, size=_SMALL, colour=QUIET)
        y += 19
        for value in values:
            write(draw, (_LEFT, y), value, size=size)
            y += size + 6
        y += 7
    return y


def _facts(row: ForecastRow) -> list[tuple[str, tuple[str, ...], int]]:
    """Return labels, lines and sizes of letters, in reading order."""
    ra, dec = sexagesimal(row.ra, row.dec)
    sense = "since" if row.mjd >= row.mjd_last else "before"
    listed = [
        ("date (UTC)", (f"{date_words(row.mjd)}   MJD {row.mjd:.3f}",), _TEXT),
        ("slit centre, ICRS", (ra, dec), _LARGE),
        (
            f'slit {row.slit_width:g}" x {row.slit_length:g}": position angle',
            (
                f"{row.slit_pa_along:.1f}°  along the arc",
                f"{row.slit_pa_motion:.1f}°  along the motion",
            ),
            _TEXT,
        ),
        (
            "ridge inside the slit along the arc",
            (f"{100.0 * row.slit_chance:.0f} % likely",),
            _TEXT,
        ),
        (
            f"moved {sense} {date_words(row.mjd_last)[:10]}",
            (
                f"{measured(row.offset, row.offset_err)} arcsec",
                f"towards PA {measured(row.motion_pa, row.motion_pa_err)}°",
            ),
            _TEXT,
        ),
        ("speed", (f"{measured(row.speed, row.speed_err)} arcsec/yr",), _TEXT),
    ]
    if row.surface_brightness is not None:
        value = measured(row.surface_brightness, row.surface_brightness_err)
        listed.append(
            ("expected surface brightness", (f"{value} mag/arcsec^2",), _TEXT)
        )
    if row.length is not None and row.width is not None:
        size = f'{row.length:.0f}" x {row.width:.1f}"'
        listed.append(("length x width", (size,), _TEXT))
    if row.seeing is not None and row.mjd_moved_3 is not None:
        day = date_words(row.mjd_moved_3)[:10]
        text = f'{day}  (seeing {row.seeing:.2f}")'
        listed.append(("moved 3 seeing widths by", (text,), _TEXT))
    return listed


def _write_remark(draw: ImageDraw.ImageDraw, remark: str, *, top: int) -> None:
    line, y = "", top
    for word in remark.split():
        longer = f"{line} {word}".strip()
        if line and text_width(longer, size=_TEXT) > _FACTS:
            write(draw, (_LEFT, y), line, size=_TEXT, colour=_WARNING)
            line, y = word, y + _TEXT + 5
        else:
            line = longer
    write(draw, (_LEFT, y), line, size=_TEXT, colour=_WARNING)


def _draw_legend(picture: Image.Image, row: ForecastRow, note: str) -> None:
    """Explain the marks at the foot of the facts."""
    day = date_words(row.mjd_last)[:10]
    entries = (
        ("dots", ARC, f"arc at its last epoch, {day}"),
        ("dots", PREDICTED, "arc predicted; band: 1 sigma"),
        ("box", SLIT, "slits, along the arc and the motion"),
    )
    height = 26 * len(entries)
    top = _HEAD + _SIDE - height - 22
    key = Image.new("RGB", (46 * OVERSAMPLING, height * OVERSAMPLING), PAPER)
    canvas = Canvas(key)
    for number, (kind, colour, _) in enumerate(entries):
        y = 26.0 * number + 13.0
        if kind == "dots":
            canvas.dots([(x, y) for x in (6.0, 15.0, 24.0, 33.0)], colour, radius=2.2)
        else:
            box = [(3.0, y - 4.0), (37.0, y - 4.0), (37.0, y + 4.0), (3.0, y + 4.0)]
            canvas.line([*box, box[0]], colour, width=1.3)
    picture.paste(canvas.finished(), (_LEFT, top))
    draw = ImageDraw.Draw(picture)
    for number, (_, _, text) in enumerate(entries):
        place = (_LEFT + 48, top + 26 * number + 13)
        write(draw, place, text, size=_SMALL, colour=INK, anchor="lm")
    write(
        draw,
        (_LEFT, _HEAD + _SIDE),
        shortened(f"image: {note}; dark is bright", 56),
        size=_SMALL - 2,
        colour=QUIET,
        anchor="ld",
    )
