"""The moving arcs of one or many finished nights, each counted once."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from pydantic import ValidationError

from latelight.errors import ProductError, SettingsError
from latelight.origin.joint_merge import Sightings, same_arcs
from latelight.origin.settings import OriginSettings, SourceSettings
from latelight.origin.sources import gather_sources
from latelight.products.reading import read_candidates, read_tracks
from latelight.products.rows import CandidateRow
from latelight.products.track_rows import TrackRow
from latelight.records import FloatArray, Source

__all__ = ["NightsArcs", "SeenArc", "read_nights", "recorded_settings"]

# log10 of odds at which the sense of a motion counts as certain.
_CERTAIN = 2.0
# Ids of the same arc that are named in the table at most.
_MOST_NAMED = 20


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenArc:
    """One physical arc, by the track or candidate that stands for it.

    Attributes
    ----------
    id, kind, output, field : str
        Designation, ``"track"`` or ``"candidate"``, folder of the night, field word.
    mjd : float
        Epoch of the place.
    ra, dec, pa, pa_err : float
        Place and direction of motion with 1 sigma, degrees.
    speed, speed_err : float or None
        arcsec per Julian year.
    sense_odds : float or None
        log10 of the odds that the sense of the motion is right.
    length, width : float
        arcsec.
    snr : float
        Significance.
    same : tuple of str
        Ids of other rows that show it.
    """

    id: str
    kind: str
    output: str
    field: str
    mjd: float
    ra: float
    dec: float
    pa: float
    pa_err: float
    speed: float | None
    speed_err: float | None
    sense_odds: float | None
    length: float
    width: float
    snr: float
    same: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class NightsArcs:
    """What the tables of nights hold.

    Attributes
    ----------
    arcs : tuple of SeenArc
        Each physical arc once, by place.
    n_rows : int
        Tracks and candidates that were read.
    left_out : tuple of (str, str)
        Id and reason of rows that cannot be traced back.
    """

    arcs: tuple[SeenArc, ...]
    n_rows: int
    left_out: tuple[tuple[str, str], ...]


def read_nights(outputs: Sequence[Path]) -> NightsArcs:
    """Read tracks, and the candidates that are on none, of all nights.

    Parameters
    ----------
    outputs : sequence of Path
        Output folders of ``latelight run``; one given twice counts once.

    Raises
    ------
    ProductError
        If a folder has no tables, or one of another version.
    """
    rows: list[SeenArc] = []
    left_out: list[tuple[str, str]] = []
    for folder in {path.resolve(): path for path in outputs}.values():
        tracks: tuple[TrackRow, ...] = ()
        if (folder / "tracks.ecsv").exists():
            tracks = read_tracks(folder)
        # A folder of tracks alone will do; one with neither is a mistake.
        candidates: tuple[CandidateRow, ...] = ()
        if not tracks or (folder / "candidates.ecsv").exists():
            candidates = read_candidates(folder)
        good = [track for track in tracks if track.verdict == "track"]
        left_out += [
            (track.id, f"set aside as {track.verdict!r}")
            for track in tracks
            if track.verdict != "track"
        ]
        on_track = {name for track in good for name in track.candidates.split()}
        free = [found for found in candidates if found.id not in on_track]
        arc_rows: list[TrackRow | CandidateRow] = [*good, *free]
        for row in arc_rows:
            seen = _seen(row, str(folder))
            if isinstance(seen, str):
                left_out.append((row.id, seen))
            else:
                rows.append(seen)
    n_rows = len(rows) + len(left_out)
    return NightsArcs(_merged(rows), n_rows, tuple(left_out))


def recorded_settings(
    outputs: Sequence[Path],
) -> tuple[OriginSettings, tuple[Source, ...]]:
    """Return the priors of the first night and the sources of all.

    Parameters
    ----------
    outputs : sequence of Path
        Output folders; their ``run.json`` hold the settings of the runs.

    Raises
    ------
    ProductError
        If a ``run.json`` is not there or holds no settings this version understands.
    SettingsError
        If a table of sources cannot be read.
    """
    settings: OriginSettings | None = None
    sources: dict[str, Source] = {}
    for folder in outputs:
        record = folder / "run.json"
        origin, entries = _record(record)
        settings = origin if settings is None else settings
        table = Path(origin.source_table) if origin.source_table else None
        try:
            listed = gather_sources(entries, table=table)
        except SettingsError as error:
            faults = [
                f"{fault}; or give --settings NIGHT.toml" for fault in error.faults
            ]
            raise SettingsError(error.path or record, faults) from None
        for source in listed:
            # Later nights may list the same source with better numbers: the first
            # night's priors go with the first night's numbers.
            sources.setdefault(source.name, source)
    if settings is None:
        settings = OriginSettings()
    return settings, tuple(sources.values())


def _record(path: Path) -> tuple[OriginSettings, tuple[SourceSettings, ...]]:
    cure = "give --settings NIGHT.toml, or run the night again with this version"
    try:
        settings: dict[str, Any] = json.loads(path.read_text("utf-8"))["settings"]
        origin = OriginSettings.model_validate_json(json.dumps(settings["origin"]))
        entries = tuple(
            SourceSettings.model_validate_json(json.dumps(entry))
            for entry in settings.get("sources", ())
        )
    except FileNotFoundError:
        raise ProductError(path, f"does not exist: {cure}") from None
    except OSError as error:
        reason = f"cannot be read ({error.strerror or error}): check its permissions"
        raise ProductError(path, reason) from None
    except ValidationError as error:
        first = error.errors(include_url=False)[0]
        key = ".".join(str(part) for part in first["loc"])
        reason = f"holds settings of another version ({key}: {first['msg']}): {cure}"
        raise ProductError(path, reason) from None
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        said = f"{type(error).__name__} {error}".strip()
        reason = f"holds no settings of a run ({said}): {cure}"
        raise ProductError(path, reason) from None
    return origin, entries


def _seen(row: TrackRow | CandidateRow, output: str) -> SeenArc | str:
    """Return a row as an arc, or why it cannot be traced back."""
    if row.ra is None or row.dec is None:
        return "its frames have no celestial WCS"
    if row.normal_pa is None or row.normal_pa_err is None:
        return "the direction of its motion is not known"
    track = isinstance(row, TrackRow)
    return SeenArc(
        id=row.id,
        kind="track" if track else "candidate",
        output=output,
        field=row.field,
        mjd=row.mjd if isinstance(row, TrackRow) else row.mjd_science,
        ra=row.ra,
        dec=row.dec,
        pa=row.normal_pa,
        pa_err=row.normal_pa_err,
        speed=row.speed,
        speed_err=row.speed_err,
        sense_odds=row.sense_odds,
        length=row.length or 0.0,
        width=row.width or 0.0,
        snr=row.snr,
    )


def _merged(rows: list[SeenArc]) -> tuple[SeenArc, ...]:
    """Return one row an arc, by place."""
    # Any order of the nights gives the same arcs.
    rows = sorted(rows, key=lambda r: (r.dec, r.ra, r.mjd, r.id, r.output))
    group, best = same_arcs(
        Sightings(
            ra=_column(rows, "ra"),
            dec=_column(rows, "dec"),
            mjd=_column(rows, "mjd"),
            pa=_column(rows, "pa"),
            pa_err=_column(rows, "pa_err"),
            speed=_column(rows, "speed"),
            speed_err=_column(rows, "speed_err"),
            length=_column(rows, "length"),
            width=_column(rows, "width"),
            snr=_column(rows, "snr"),
            sure=np.array([(r.sense_odds or 0.0) >= _CERTAIN for r in rows], bool),
            rank=np.array([r.kind != "track" for r in rows], np.int64),
        )
    )
    others: dict[int, list[str]] = {}
    for index, number in enumerate(group):
        if index != best[number]:
            others.setdefault(int(number), []).append(rows[index].id)
    return tuple(
        _with_others(rows[index], others.get(int(group[index]), []))
        for index in sorted(best)
    )


def _with_others(row: SeenArc, others: list[str]) -> SeenArc:
    return replace(row, same=tuple(others[:_MOST_NAMED]))


def _column(rows: list[SeenArc], name: str) -> FloatArray:
    values = (getattr(row, name) for row in rows)
    return np.array([np.nan if v is None else v for v in values], dtype=float)
