"""The picture of a plan: for each source its rings, the likely cells and the fields."""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from latelight.planning.cells import Cells, cell_corners
from latelight.planning.extent import PlannedField
from latelight.planning.rings import Ring
from latelight.products.drawing import INK, PAPER, QUIET, RULE
from latelight.records import FloatArray, Source
from latelight.reports.dates import date_words
from latelight.sky import offset_position, position_angle, separation_deg

__all__ = ["SourcePanel", "draw_plan"]

# Panels of a picture at most, and in a line; inches of one.
_MOST, _ACROSS, _INCHES = 9, 3, 4.6
# Fields are shown out to this many times the largest ring; degrees without a ring.
_FIELDS_WITHIN, _ALONE_WITHIN = 2.0, 20.0
_WIDEST = 85.0
_RING_COLOURS = ((176, 78, 0), (22, 74, 160), (0, 118, 98), (122, 32, 142))
_CELL_COLOUR = (240, 160, 72)


@dataclass(frozen=True, slots=True)
class SourcePanel:
    """A source with what is drawn of it.

    Attributes
    ----------
    source : Source
        The outburst.
    age_yr : float or None
        Its age at the date.
    rings : tuple of (str, Ring)
        Names of layers, and where they echo.
    cells : Cells or None
        The likeliest cells of all layers.
    """

    source: Source
    age_yr: float | None
    rings: tuple[tuple[str, Ring], ...]
    cells: Cells | None


def draw_plan(
    panels: Sequence[SourcePanel], fields: Sequence[PlannedField], *, mjd: float
) -> bytes:
    """Draw a plan.

    Each panel is centred on its source, in degrees east and north of it (the zenithal
    equidistant projection), north up and east to the left, so that poles and RA = 0
    are places like others.

    Parameters
    ----------
    panels : sequence of SourcePanel
        The sources; the first nine with something to show are drawn.
    fields : sequence of PlannedField
        The fields.
    mjd : float
        Date of the plan, MJD.

    Returns
    -------
    bytes
        PNG.
    """
    from matplotlib.figure import Figure

    reaches = [_reach(panel, fields) for panel in panels]
    shown = [
        (panel, reach)
        for panel, reach in zip(panels, reaches, strict=True)
        if reach > 0.0
    ]
    drawn = shown[:_MOST]
    columns = min(max(len(drawn), 1), _ACROSS)
    lines = math.ceil(max(len(drawn), 1) / columns)
    figure = Figure(
        figsize=(_INCHES * columns, (_INCHES + 0.35) * lines + 0.55),
        facecolor=_shade(PAPER),
        layout="constrained",
    )
    # A layer has one colour in all panels.
    layers = dict.fromkeys(name for panel, _ in drawn for name, _ in panel.rings)
    colours = {
        name: _shade(_RING_COLOURS[number % len(_RING_COLOURS)])
        for number, name in enumerate(layers)
    }
    title = f"Echoes expected on {date_words(mjd)[:10]}"
    if len(shown) > len(drawn):
        title += f" (the first {len(drawn)} of {len(shown)} sources)"
    figure.suptitle(title, x=0.01, ha="left", color=_shade(INK), fontsize=13)
    for number, (panel, reach) in enumerate(drawn):
        axes = figure.add_subplot(lines, columns, number + 1)
        others = [p.source for p in panels if p is not panel]
        _draw_panel(axes, panel, fields, others, reach, colours)
    if not drawn:
        figure.text(
            0.5, 0.5, "nothing to show: see the remarks in the tables", ha="center"
        )
    stream = io.BytesIO()
    figure.savefig(stream, format="png", dpi=110, metadata={"Software": "latelight"})
    return stream.getvalue()


def _reach(panel: SourcePanel, fields: Sequence[PlannedField]) -> float:
    """Return half the width of a source's panel, degrees; 0 with nothing to show."""
    source = panel.source
    rings = [
        ring.shift_deg + ring.radius_deg + min(ring.radius_err_deg, ring.radius_deg)
        for _, ring in panel.rings
    ]
    within = _FIELDS_WITHIN * max(rings) if rings else _ALONE_WITHIN
    far = [
        float(separation_deg(source.ra, source.dec, *field.outline()).max())
        for field in fields
    ]
    seen = [*rings, *(angle for angle in far if angle <= within)]
    return min(1.12 * max(seen, default=0.0), _WIDEST)


def _draw_panel(
    axes: Any,
    panel: SourcePanel,
    fields: Sequence[PlannedField],
    others: Sequence[Source],
    reach: float,
    colours: dict[str, tuple[float, float, float]],
) -> None:
    source = panel.source
    _prepare(axes, panel, reach)
    if panel.cells is not None:
        _draw_cells(axes, source, panel.cells)
    for name, ring in panel.rings:
        colour = colours[name]
        pa = np.linspace(0.0, 360.0, 361)
        for radius, style, width in (
            (ring.radius_deg, "-", 1.6),
            (ring.radius_deg - ring.radius_err_deg, ":", 0.9),
            (ring.radius_deg + ring.radius_err_deg, ":", 0.9),
        ):
            if 0.0 < radius < 90.0:
                edge = offset_position(ring.ra, ring.dec, pa, radius)
                label = name if style == "-" else None
                axes.plot(
                    *_place(source, *edge), style, color=colour, lw=width, label=label
                )
    for field in fields:
        x, y = _place(source, *field.outline())
        if np.hypot(x, y).min() > 1.5 * reach:
            continue
        if x.size == 1:
            axes.plot(x, y, "s", color=_shade(INK), ms=3)
        else:
            axes.fill(x, y, fill=False, ec=_shade(INK), lw=1.2)
        axes.annotate(
            field.name,
            (float(x.mean()), float(y.max())),
            xytext=(0, 3),
            textcoords="offset points",
            ha="center",
            fontsize=8,
            color=_shade(INK),
            annotation_clip=True,
            clip_on=True,
        )
    for other in others:
        x, y = _place(source, np.array([other.ra]), np.array([other.dec]))
        if np.hypot(x, y)[0] < reach:
            axes.plot(x, y, "*", color=_shade(QUIET), ms=7)
    axes.plot(0.0, 0.0, "*", color=_shade((160, 30, 20)), ms=11)
    if panel.rings:
        axes.legend(fontsize=8, loc="lower left", framealpha=0.85, edgecolor="none")


def _prepare(axes: Any, panel: SourcePanel, reach: float) -> None:
    """Set up the axes of a panel: title, degrees, a quiet grid."""
    words = [panel.source.name]
    if panel.age_yr is not None:
        words.append(f"{panel.age_yr:.0f} yr")
    if panel.source.distance_pc is not None:
        words.append(f"{panel.source.distance_pc:.0f} pc")
    axes.set_title(" · ".join(words), fontsize=10, color=_shade(INK), loc="left")
    axes.set_xlim(reach, -reach)
    axes.set_ylim(-reach, reach)
    axes.set_aspect("equal")
    axes.set_facecolor("white")
    axes.grid(color=_shade(RULE), lw=0.5)
    axes.set_axisbelow(True)
    axes.tick_params(labelsize=8, colors=_shade(QUIET))
    for spine in axes.spines.values():
        spine.set_color(_shade(RULE))
    axes.set_xlabel("degrees east", fontsize=8, color=_shade(QUIET))
    axes.set_ylabel("degrees north", fontsize=8, color=_shade(QUIET))


def _draw_cells(axes: Any, source: Source, cells: Cells) -> None:
    from matplotlib.collections import PolyCollection

    ra, dec = cell_corners(cells.cell, cells.order)
    x, y = _place(source, ra, dec)
    # The likelier the darker, on a scale that keeps the rim of the region visible.
    depth = 0.25 + 0.75 * np.sqrt(cells.probability / cells.probability.max())
    colours = np.array([*(part / 255.0 for part in _CELL_COLOUR), 1.0])
    shades = np.repeat(colours[None], cells.cell.size, axis=0)
    shades[:, 3] = 0.55 * depth
    corners = np.stack([x, y], axis=-1)
    axes.add_collection(
        PolyCollection(list(corners), facecolors=shades, edgecolors="none")
    )


def _place(
    source: Source, ra: FloatArray, dec: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return degrees east and north of a source, zenithal equidistant."""
    distance = separation_deg(source.ra, source.dec, ra, dec)
    turn = np.radians(position_angle(source.ra, source.dec, ra, dec))
    return distance * np.sin(turn), distance * np.cos(turn)


def _shade(colour: tuple[int, int, int]) -> tuple[float, float, float]:
    return colour[0] / 255.0, colour[1] / 255.0, colour[2] / 255.0
