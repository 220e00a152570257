"""The picture of common origins: arcs, where they point back to, and the peaks."""

from __future__ import annotations

import io
from collections.abc import Sequence
from typing import Any

import numpy as np

from latelight.origin.joint_arcs import sky_of, unit_vectors
from latelight.products.drawing import ARC, INK, ORIGIN, PAPER, QUIET, RULE
from latelight.products.origin_rows import OriginArcRow, OriginRow
from latelight.records import FloatArray, Source
from latelight.reports.origin_map import OriginMap
from latelight.sky import offset_position, position_angle, separation_deg

__all__ = ["draw_origins"]

# The scale of an error ellipse that holds 95 %.
SIGMA_95 = 2.4477468306808166
_MOST_ARCS = 250
_BLUE = (38, 92, 166)
_ORANGE = (214, 118, 28)
# Dex below the best that are shaded.
_DEPTH_DEX = 4.0


def draw_origins(
    made: OriginMap,
    origins: Sequence[OriginRow],
    arcs: Sequence[OriginArcRow],
    sources: Sequence[Source],
) -> bytes:
    """Draw the map as PNG.

    Parameters
    ----------
    made : OriginMap
        The likelihood, as shading.
    origins : sequence of OriginRow
        Peaks with their 95 % ellipses, and ridges.
    arcs : sequence of OriginArcRow
        Bars along the arcs with an arrow of their motion, and the wedge in which
        they point back; the surest 250 of them.
    sources : sequence of Source
        Listed sources.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9.6, 8.6), dpi=100, facecolor=_tint(PAPER))
    FigureCanvasAgg(figure)
    axes = figure.add_axes((0.085, 0.075, 0.885, 0.82))
    page = _Page(axes, made)
    page.shade()
    drawn = sorted(arcs, key=lambda row: (-(row.membership or 0.0), row.id))
    drawn = drawn[:_MOST_ARCS]
    places = {row.name: row for row in origins}
    for row in drawn:
        page.wedge(row, places.get(row.origin))
    for row in drawn:
        page.arc(row)
    for source in sources:
        page.source(source)
    for origin in origins:
        if origin.kind == "ridge":
            page.ridge(origin, arcs)
        else:
            page.origin(origin)
    page.frame(_title(origins, arcs), _caption(len(drawn), len(arcs)))
    stream = io.BytesIO()
    # No date, no version: the same arcs give the same bytes.
    figure.savefig(stream, format="png", metadata={"Software": None})
    return stream.getvalue()


class _Page:
    """The map's plane in degrees from its middle, east to the left."""

    def __init__(self, axes: Any, made: OriginMap) -> None:
        self._axes = axes
        self._map = made
        self._unit = made.radius
        axes.set_facecolor("white")
        axes.set_xlim(made.radius, -made.radius)
        axes.set_ylim(-made.radius, made.radius)
        axes.set_aspect("equal")

    def at(self, ra: Any, dec: Any) -> tuple[FloatArray, FloatArray]:
        """Return places on the page."""
        shape = np.shape(ra)
        x, y = self._map.wcs.all_world2pix(np.ravel(ra), np.ravel(dec), 0)
        side = self._map.image.shape[0]
        scale = 2.0 * self._map.radius / side
        middle = 0.5 * (side - 1)
        return (
            ((middle - x) * scale).reshape(shape),
            ((y - middle) * scale).reshape(shape),
        )

    def shade(self) -> None:
        from matplotlib.colors import LinearSegmentedColormap

        image = self._map.image
        if not np.isfinite(image).any():
            return
        best = float(np.nanmax(image))
        colours = LinearSegmentedColormap.from_list(
            "likelihood", ["#ffffff", "#dce7f5", "#9dbde3", _tint(_BLUE)]
        )
        extent = (self._unit, -self._unit, -self._unit, self._unit)
        style = {"origin": "lower", "extent": extent, "zorder": 0}
        self._axes.imshow(
            image,
            cmap=colours,
            vmin=best - _DEPTH_DEX,
            vmax=best,
            interpolation="bilinear",
            alpha=0.85,
            **style,
        )

    def wedge(self, row: OriginArcRow, origin: OriginRow | None) -> None:
        """Draw where an arc points back to, as far as its origin."""
        if origin is None or origin.kind == "ridge" or row.separation is None:
            reach, width = 0.25 * self._unit, 4.0
        else:
            reach, width = 1.06 * row.separation, 4.0
        back = row.normal_pa + 180.0
        half = np.hypot(row.normal_pa_err, width)
        turn = np.array([-half, 0.0, half])
        ra, dec = offset_position(row.ra, row.dec, back + turn, reach)
        x, y = self.at(np.append(row.ra, ra), np.append(row.dec, dec))
        colour = _tint(_ORANGE if row.origin else QUIET)
        self._axes.fill(x, y, color=colour, alpha=0.10, lw=0, zorder=2)

    def arc(self, row: OriginArcRow) -> None:
        """Draw a bar along the arc and an arrow of its motion."""
        bar, arrow = 0.013 * self._unit, 0.05 * self._unit
        ends = offset_position(
            row.ra, row.dec, row.normal_pa + np.array([90.0, -90.0]), bar
        )
        colour = _tint(ARC if row.origin else QUIET)
        self._axes.plot(
            *self.at(*ends), color=colour, lw=2.2, zorder=5, solid_capstyle="butt"
        )
        tip = offset_position(row.ra, row.dec, row.normal_pa, arrow)
        x, y = self.at(np.array([row.ra, tip[0]]), np.array([row.dec, tip[1]]))
        style = {"arrowstyle": "-|>,head_width=0.16,head_length=0.32", "lw": 1.0}
        self._axes.annotate(
            "",
            (x[1], y[1]),
            (x[0], y[0]),
            arrowprops={**style, "color": colour, "shrinkA": 0, "shrinkB": 0},
            zorder=5,
        )

    def source(self, source: Source) -> None:
        """Draw a listed source, where it lies on the map."""
        if separation_deg(self._map.ra, self._map.dec, source.ra, source.dec) > 89.0:
            return
        x, y = self.at(source.ra, source.dec)
        if max(abs(x), abs(y)) > self._unit:
            return
        self._axes.plot(x, y, "D", ms=6, mfc="white", mec=_tint(INK), mew=1.2, zorder=6)
        self._label(float(x), float(y), source.name, INK, size=8.5, down=True)

    def origin(self, row: OriginRow) -> None:
        """Draw a peak and its 95 % ellipse."""
        purple = _tint(ORIGIN)
        x, y = self.at(row.ra, row.dec)
        if row.err_major is not None and row.err_minor is not None:
            angle = np.radians(np.linspace(0.0, 360.0, 181))
            along = SIGMA_95 * row.err_major * np.cos(angle)
            beside = SIGMA_95 * row.err_minor * np.sin(angle)
            pa = (row.err_pa or 0.0) + np.degrees(np.arctan2(beside, along))
            edge = offset_position(row.ra, row.dec, pa, np.hypot(along, beside))
            self._axes.plot(*self.at(*edge), color=purple, lw=1.8, zorder=7)
        self._axes.plot(x, y, "+", ms=12, mew=2.0, color=purple, zorder=7)
        name = f"{row.name} = {row.source}?" if row.source else row.name
        self._label(float(x), float(y), name, ORIGIN, size=11)

    def ridge(self, row: OriginRow, arcs: Sequence[OriginArcRow]) -> None:
        """Draw the line on which an origin lies, from its arcs outwards."""
        own = [arc for arc in arcs if arc.origin == row.name]
        if row.near is None or row.far is None or not own:
            return
        middle = unit_vectors([a.ra for a in own], [a.dec for a in own]).sum(axis=0)
        ra0, dec0 = sky_of(middle)
        pa = position_angle(ra0, dec0, row.ra, row.dec)
        along = np.geomspace(max(row.near, 1e-3), row.far, 400)
        ra, dec = offset_position(ra0, dec0, pa, along)
        near = separation_deg(self._map.ra, self._map.dec, ra, dec) < 85.0
        x, y = self.at(ra[near], dec[near])
        inside = (np.abs(x) < self._unit) & (np.abs(y) < self._unit)
        x, y = x[inside], y[inside]
        self._axes.plot(x, y, color=_tint(ORIGIN), lw=1.8, ls=(0, (5, 3)), zorder=7)
        if x.size:
            text = f"{row.name}: somewhere on this line"
            half = x.size // 2
            self._label(float(x[half]), float(y[half]), text, ORIGIN, size=11)

    def _label(
        self,
        x: float,
        y: float,
        text: str,
        colour: tuple[int, int, int],
        *,
        size: float,
        down: bool = False,
    ) -> None:
        from matplotlib import patheffects

        left = x > 0.55 * -self._unit
        self._axes.annotate(
            text,
            (x, y),
            xytext=(9 if left else -9, -4 if down else 4),
            textcoords="offset points",
            ha="left" if left else "right",
            va="top" if down else "bottom",
            fontsize=size,
            color=_tint(colour),
            fontweight="normal" if down else "bold",
            path_effects=[patheffects.withStroke(linewidth=3, foreground="white")],
            zorder=8,
        )

    def frame(self, title: str, caption: str) -> None:
        axes = self._axes
        for spine in axes.spines.values():
            spine.set_color(_tint(RULE))
        axes.tick_params(colors=_tint(QUIET), labelsize=9)
        place = f"RA {self._map.ra:.3f}° Dec {self._map.dec:+.3f}°"
        axes.set_xlabel(f"degrees east of {place}", color=_tint(QUIET), fontsize=9)
        axes.set_ylabel("degrees north", color=_tint(QUIET), fontsize=9)
        axes.set_title(title, loc="left", color=_tint(INK), fontsize=13, pad=36)
        axes.text(
            0.0, 1.012, caption, transform=axes.transAxes, fontsize=9,
            color=_tint(QUIET), va="bottom",
        )  # fmt: skip


def _title(origins: Sequence[OriginRow], arcs: Sequence[OriginArcRow]) -> str:
    if not origins:
        return f"No common origin claimed for {len(arcs)} arcs"
    parts = []
    for row in origins[:3]:
        what = f"{row.name}: {row.n_arcs} arcs, score {row.score:.1f}"
        parts.append(what + (f", {row.source}?" if row.source else ""))
    more = f"; {len(origins) - 3} more" if len(origins) > 3 else ""
    return "; ".join(parts) + more


def _caption(drawn: int, total: int) -> str:
    of_all = "" if drawn == total else f" ({drawn} of {total} drawn)"
    return (
        f"Bars with arrows: arcs and their motion{of_all}. Wedges: where they point "
        "back. Blue: likelihood of one origin, 4 dex.\nPurple: 95 % ellipse. "
        "Diamonds: listed sources. Grey arcs belong to no origin."
    )


def _tint(colour: tuple[int, int, int]) -> str:
    return "#{:02x}{:02x}{:02x}".format(*colour)
