"""The common origins of all arcs of one or many nights: tables, map and picture."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from latelight.echo.constants import DAYS_PER_YEAR
from latelight.origin.joint import JointOrigin, JointOrigins, Unclaimed, find_origins
from latelight.origin.joint_age import AgeEstimate, estimate_age
from latelight.origin.joint_arcs import MovingArcs, moving_arcs, sky_of, unit_vectors
from latelight.origin.joint_laws import turns
from latelight.origin.joint_region import Ellipse, Ridge
from latelight.origin.joint_sources import ArcMotions, SourceMatch, match_source
from latelight.origin.settings import OriginSettings
from latelight.origin.sources import age_yr
from latelight.products.atomic import make_folder, write_bytes
from latelight.products.origin_columns import ORIGIN_ARC_COLUMNS, ORIGIN_COLUMNS
from latelight.products.origin_rows import OriginArcRow, OriginRow
from latelight.products.tables import make_table, to_ecsv
from latelight.records import BoolArray, FloatArray, Source
from latelight.reports.origin_arcs import (
    SeenArc,
    read_nights,
    recorded_settings,
)
from latelight.reports.origin_map import make_map, map_bytes
from latelight.reports.origin_picture import draw_origins
from latelight.sky import offset_position, position_angle, separation_deg

__all__ = ["OriginsResult", "trace_origins"]

_FEW_ARCS = 4
_DOUBTFUL_ODDS = 1.0
# A map shows a ridge to so many times its least distance.
_RIDGE_SHOWN = 1.5


@dataclass(frozen=True, slots=True)
class OriginsResult:
    """What tracing the arcs of nights gave.

    Attributes
    ----------
    origins : tuple of OriginRow
        Claimed origins, best first.
    arcs : tuple of OriginArcRow
        Arcs, each once.
    rest : Unclaimed or None
        The best further origin, which random directions may mimic.
    n_rows : int
        Tracks and candidates read.
    left_out : tuple of (str, str)
        Ids and reasons of those that cannot be traced.
    files : tuple of Path
        What was written; no map and picture without an arc.
    """

    origins: tuple[OriginRow, ...]
    arcs: tuple[OriginArcRow, ...]
    rest: Unclaimed | None
    n_rows: int
    left_out: tuple[tuple[str, str], ...]
    files: tuple[Path, ...]


def trace_origins(
    outputs: Sequence[Path],
    *,
    folder: Path | None = None,
    settings: OriginSettings | None = None,
    sources: Sequence[Source] = (),
) -> OriginsResult:
    """Trace the arcs of nights back to common origins and write what is found.

    Parameters
    ----------
    outputs : sequence of Path
        Output folders of ``latelight run``, at least one.
    folder : Path or None
        Where the products go; the first output by default.
    settings : OriginSettings or None
        Priors; those recorded in the first night's ``run.json`` by default, and with
        them the sources listed there.
    sources : sequence of Source
        Listed sources that go with ``settings``.

    Returns
    -------
    OriginsResult
        Files: ``origins.ecsv``, ``origin_arcs.ecsv``, ``origin_map.fits`` and
        ``origins.png``.

    Raises
    ------
    ProductError
        If a table or ``run.json`` cannot be read, or a product not be written.
    SettingsError
        If the recorded table of sources cannot be read.
    """
    nights = read_nights(outputs)
    if settings is None:
        settings, sources = recorded_settings(outputs)
    arcs = nights.arcs
    joint = find_origins(_moving(arcs, settings), settings=settings, sources=sources)
    motions = _motions(arcs)
    matches = [
        match_source(
            origin, sources, motions, likelihood=joint.likelihood, settings=settings
        )
        for origin in joint.origins
    ]
    rows = tuple(
        _origin_row(f"O{number}", origin, match, joint, motions, settings)
        for number, (origin, match) in enumerate(
            zip(joint.origins, matches, strict=True), start=1
        )
    )
    arc_rows = _arc_rows(arcs, joint, rows)
    folder = outputs[0] if folder is None else folder
    files = _write(folder, joint, rows, arc_rows, sources)
    return OriginsResult(
        rows, arc_rows, joint.rest, nights.n_rows, nights.left_out, files
    )


def _write(
    folder: Path,
    joint: JointOrigins,
    rows: tuple[OriginRow, ...],
    arc_rows: tuple[OriginArcRow, ...],
    sources: Sequence[Source],
) -> tuple[Path, ...]:
    make_folder(folder)
    made = {
        "origins.ecsv": to_ecsv(make_table("origins", rows, ORIGIN_COLUMNS)),
        "origin_arcs.ecsv": to_ecsv(
            make_table("origin_arcs", arc_rows, ORIGIN_ARC_COLUMNS)
        ),
    }
    if arc_rows:
        places = [joint.likelihood.arcs.frames[:, 0]]
        places += [_shown(origin)[None] for origin in joint.origins]
        sky_map = make_map(joint.likelihood, np.concatenate(places))
        made["origin_map.fits"] = map_bytes(sky_map)
        made["origins.png"] = draw_origins(sky_map, rows, arc_rows, sources)
    for name, data in made.items():
        write_bytes(folder / name, data)
    if not arc_rows:
        # What an earlier run left would not go with the empty tables.
        for name in ("origin_map.fits", "origins.png"):
            (folder / name).unlink(missing_ok=True)
    return tuple(folder / name for name in made)


def _shown(origin: JointOrigin) -> FloatArray:
    """Return the place of an origin that a map must show; where a ridge begins."""
    region = origin.region
    if not isinstance(region, Ridge):
        return origin.direction
    reach = min(_RIDGE_SHOWN * region.near, region.far)
    return unit_vectors(
        *offset_position(region.from_ra, region.from_dec, region.pa, reach)
    )


# --- from rows to arrays and back --------------------------------------------


def _moving(arcs: Sequence[SeenArc], settings: OriginSettings) -> MovingArcs:
    return moving_arcs(
        [arc.ra for arc in arcs],
        [arc.dec for arc in arcs],
        [arc.pa for arc in arcs],
        pa_err=[arc.pa_err for arc in arcs],
        sense_odds=[arc.sense_odds or 0.0 for arc in arcs],
        speed=_known([arc.speed for arc in arcs]),
        speed_err=_known([arc.speed_err for arc in arcs]),
        correlation_arcmin=settings.tilt_correlation_arcmin,
    )


def _known(values: Sequence[float | None]) -> FloatArray:
    return np.array([np.nan if v is None else v for v in values], dtype=float)


def _motions(arcs: Sequence[SeenArc]) -> ArcMotions:
    def column(name: str) -> FloatArray:
        return _known([getattr(arc, name) for arc in arcs])

    return ArcMotions(
        ra=column("ra"),
        dec=column("dec"),
        mjd=column("mjd"),
        pa=column("pa"),
        pa_err=column("pa_err"),
        speed=column("speed"),
        speed_err=column("speed_err"),
        sense_odds=np.nan_to_num(column("sense_odds"), nan=0.0),
    )


def _origin_row(
    name: str,
    origin: JointOrigin,
    match: SourceMatch | None,
    joint: JointOrigins,
    motions: ArcMotions,
    settings: OriginSettings,
) -> OriginRow:
    region = origin.region
    if region is None:
        ra, dec = (float(v) for v in sky_of(origin.direction))
        kind, major, minor, pa = "listed", None, None, None
    elif isinstance(region, Ellipse):
        ra, dec, kind, pa = region.ra, region.dec, "peak", region.pa
        major, minor = region.major, region.minor
    else:
        ra, dec, kind = region.ra, region.dec, "ridge"
        major, minor, pa = None, region.minor, _pa_there(region)
    own = origin.membership > 0.5
    weight = origin.membership * joint.likelihood.arcs.weight
    turn = turns(joint.likelihood.arcs, origin.direction)
    age = _age(match, motions, weight, settings)
    return OriginRow(
        ra=ra,
        dec=dec,
        err_major=major,
        err_minor=minor,
        err_pa=pa,
        n_arcs=int(own.sum()),
        score=origin.score,
        source="" if match is None else match.source.name,
        name=name,
        kind=kind,
        chance=origin.chance,
        scatter=origin.scatter_deg,
        away_rms=float(np.sqrt(np.mean(turn[own] ** 2))) if own.any() else None,
        near=region.near if isinstance(region, Ridge) else None,
        far=region.far if isinstance(region, Ridge) else None,
        source_score=None if match is None else match.score,
        source_separation=None
        if match is None
        else float(separation_deg(ra, dec, match.source.ra, match.source.dec)),
        implied_age=None if age is None else age.age_yr,
        implied_age_low=None if age is None else age.low_yr,
        implied_age_high=None if age is None else age.high_yr,
        remark="; ".join(_remarks(origin, own, motions, age)),
    )


def _pa_there(ridge: Ridge) -> float:
    """Return the position angle of a ridge's great circle at its place, 0-180."""
    back = position_angle(ridge.ra, ridge.dec, ridge.from_ra, ridge.from_dec)
    return float(back % 180.0)


def _age(
    match: SourceMatch | None,
    motions: ArcMotions,
    weight: FloatArray,
    settings: OriginSettings,
) -> AgeEstimate | None:
    """Return the age of a listed source of known distance and unknown age."""
    if match is None or not motions.mjd.size:
        return None
    if age_yr(match.source, float(motions.mjd[0])) is not None:
        return None
    return estimate_age(
        match.source,
        ra=motions.ra,
        dec=motions.dec,
        pa=motions.pa,
        speed=motions.speed,
        speed_err=motions.speed_err,
        years=(motions.mjd - motions.mjd.max()) / DAYS_PER_YEAR,
        weight=np.where(weight > 0.05, weight, 0.0),
        settings=settings,
    )


def _remarks(
    origin: JointOrigin,
    own: BoolArray,
    motions: ArcMotions,
    age: AgeEstimate | None,
) -> list[str]:
    found = []
    region = origin.region
    if isinstance(region, Ridge):
        found.append(
            "arcs all but parallel: the origin lies on the great circle through RA "
            f"{region.from_ra:.4f} Dec {region.from_dec:+.4f} towards position angle "
            f"{region.pa:.0f} there, {region.near:.2g} degrees away or more; ra and "
            "dec are a place on that line, no position"
        )
    if origin.listed:
        found.append("too few arcs for an origin of their own: claimed at its place")
    if own.sum() < _FEW_ARCS:
        found.append(f"only {int(own.sum())} arcs")
    if own.any() and np.median(motions.sense_odds[own]) < _DOUBTFUL_ODDS:
        found.append("the sense of most motions is unsure: may lie on the other side")
    if age is not None:
        found.append(f"age from {age.n_arcs} arcs, at the last epoch of all arcs")
    return found


def _arc_rows(
    arcs: Sequence[SeenArc], joint: JointOrigins, rows: Sequence[OriginRow]
) -> tuple[OriginArcRow, ...]:
    membership = np.array([origin.membership for origin in joint.origins])
    turn = [turns(joint.likelihood.arcs, origin.direction) for origin in joint.origins]
    made = []
    for index, arc in enumerate(arcs):
        best = int(np.argmax(membership[:, index])) if rows else -1
        belongs = best >= 0 and membership[best, index] > 0.5
        own = rows[best] if best >= 0 else None
        gap = None
        if own is not None:
            gap = float(separation_deg(arc.ra, arc.dec, own.ra, own.dec))
        made.append(
            OriginArcRow(
                id=arc.id,
                kind=arc.kind,
                output=arc.output,
                field=arc.field,
                mjd=arc.mjd,
                ra=arc.ra,
                dec=arc.dec,
                normal_pa=arc.pa,
                normal_pa_err=arc.pa_err,
                speed=arc.speed,
                speed_err=arc.speed_err,
                sense_odds=arc.sense_odds,
                weight=float(joint.likelihood.arcs.weight[index]),
                origin=own.name if own is not None and belongs else "",
                membership=float(membership[best, index]) if best >= 0 else None,
                away_angle=float(turn[best][index]) if best >= 0 else None,
                separation=gap,
                same=" ".join(arc.same),
            )
        )
    return tuple(made)
