"""All epochs of one field together: search, follow, score."""

from __future__ import annotations

import logging
import time
import traceback
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, replace

from latelight.config import NightConfig
from latelight.errors import LatelightError
from latelight.motion.tracks.build import build_tracks
from latelight.motion.velocity_stack.search import search_velocities
from latelight.night.record import Event, peak_memory_mb
from latelight.night.series import Grid, SeriesPart, build_series
from latelight.night.track_rows import (
    interpretation_rows,
    track_point_rows,
    track_row,
)
from latelight.origin.score import best_origin, score_origins
from latelight.products.series_rows import SeriesRow
from latelight.products.track_cutouts import TrackCutout, cut_out_track
from latelight.products.track_rows import InterpretationRow, TrackPointRow, TrackRow
from latelight.records import (
    EpochSeries,
    OriginScore,
    Source,
    Track,
    TrackSeed,
)

__all__ = [
    "SeriesOutcome",
    "SeriesTask",
    "TrackFinding",
    "failed_series",
    "process_series",
]


@dataclass(frozen=True, slots=True)
class SeriesTask:
    """What a worker needs to work on one series.

    Attributes
    ----------
    parts : tuple of SeriesPart
        Its epochs.
    config : NightConfig
        All settings.
    sources : tuple of Source
        Candidate origins.
    """

    parts: tuple[SeriesPart, ...]
    config: NightConfig
    sources: tuple[Source, ...]


@dataclass(frozen=True, slots=True)
class TrackFinding:
    """One track.

    Attributes
    ----------
    row : TrackRow
        Without its id, which only the whole night can give.
    points : tuple of TrackPointRow
        Its epochs.
    interpretations : tuple of InterpretationRow
        One a source.
    arcs : tuple of (str, int)
        Pair and index of the arcs that lie on it.
    cutout : TrackCutout or None
        Its pixels, when it is worth a look.
    """

    row: TrackRow
    points: tuple[TrackPointRow, ...]
    interpretations: tuple[InterpretationRow, ...]
    arcs: tuple[tuple[str, int], ...]
    cutout: TrackCutout | None

    def named(self, row: TrackRow) -> TrackFinding:
        """Return the track with a row that has its id, told to all of its parts."""
        cutout = None if self.cutout is None else replace(self.cutout, row=row)
        return TrackFinding(
            row=row,
            points=tuple(replace(p, track=row.id) for p in self.points),
            interpretations=tuple(replace(i, id=row.id) for i in self.interpretations),
            arcs=self.arcs,
            cutout=cutout,
        )


@dataclass(frozen=True, slots=True)
class SeriesOutcome:
    """All that came of one series.

    Attributes
    ----------
    row : SeriesRow
        How it went.
    tracks : tuple of TrackFinding
        Worth a look or not; empty for a failed series.
    events : tuple of Event
        Lines for the log, in order.
    """

    row: SeriesRow
    tracks: tuple[TrackFinding, ...] = ()
    events: tuple[Event, ...] = ()


def process_series(task: SeriesTask) -> SeriesOutcome:
    """Take the epochs of one field to its tracks.

    Whatever goes wrong becomes a failed row: an error raised on purpose with its
    reason, anything else with its kind, and its traceback in the log.
    """
    log = _Log(task.parts[0].grid.name)
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        try:
            outcome = _run(task, log)
        except LatelightError as error:
            outcome = _failed(task, log, str(error))
        except Exception as error:
            reason = f"unexpected {type(error).__name__}: {error}"
            outcome = _failed(task, log, reason, trace=traceback.format_exc())
    for text in dict.fromkeys(f"{w.category.__name__}: {w.message}" for w in caught):
        log.say(text, level=logging.WARNING)
    return replace(outcome, events=tuple(log.events))


class _Log:
    """Lines of the log about one series, each with the time since the last."""

    def __init__(self, name: str) -> None:
        self._name = name
        self._start = self._last = time.perf_counter()
        self.events: list[Event] = []

    def done(self, stage: str) -> None:
        """Say that a stage is over."""
        now = time.perf_counter()
        seconds, self._last = now - self._last, now
        memory = peak_memory_mb()
        self.events.append(
            Event(f"{stage} done", self._name, stage, seconds, memory, logging.DEBUG)
        )

    def say(self, message: str, *, level: int = logging.INFO, trace: str = "") -> None:
        """Say something about the series as a whole."""
        self.events.append(
            Event(message, self._name, seconds=self.seconds, level=level, trace=trace)
        )

    @property
    def seconds(self) -> float:
        """Time since the beginning."""
        return time.perf_counter() - self._start


def failed_series(parts: Sequence[SeriesPart], reason: str) -> SeriesRow:
    """Return the row of a series that could not be finished."""
    grid = parts[0].grid
    mjds = [part.mjd for part in parts]
    if parts[0].template_variance > 0.0:
        mjds.append(grid.mjd)
    return SeriesRow(
        grid=grid.name,
        field=grid.field,
        filter=grid.filter,
        n_epochs=len(mjds),
        mjd_first=min(mjds),
        mjd_last=max(mjds),
        status="failed",
        reason=reason,
    )


def _failed(
    task: SeriesTask, log: _Log, reason: str, *, trace: str = ""
) -> SeriesOutcome:
    log.say(f"failed: {reason}", level=logging.ERROR, trace=trace)
    row = failed_series(task.parts, reason)
    return SeriesOutcome(
        replace(row, seconds=log.seconds, peak_memory=peak_memory_mb())
    )


def _run(task: SeriesTask, log: _Log) -> SeriesOutcome:
    config, grid = task.config, task.parts[0].grid
    series = build_series(task.parts)
    log.done("series")
    stacked = search_velocities(series, settings=config.velocity_stack)
    log.done("velocities")
    seeds: list[TrackSeed] = [seed for part in task.parts for seed in part.seeds]
    tracks = build_tracks(
        series, [*seeds, *stacked], settings=config.tracks, motion=config.motion
    )
    log.done("tracks")
    found = tuple(_finding(track, series, grid, task) for track in tracks)
    log.done("products")
    kept = sum(track.verdict == "track" for track in tracks)
    row = replace(
        failed_series(task.parts, ""),
        status="done",
        n_from_pairs=len(seeds),
        n_from_stack=len(stacked),
        n_tracks=kept,
        seconds=log.seconds,
        peak_memory=peak_memory_mb(),
    )
    log.say(f"done: {len(series)} epochs, {kept} tracks of {len(tracks)} followed")
    return SeriesOutcome(row, found)


def _finding(
    track: Track, series: EpochSeries, grid: Grid, task: SeriesTask
) -> TrackFinding:
    config = task.config
    scores = _scores(track, grid, task)
    row = track_row(
        track,
        best_origin(scores, settings=config.origin),
        series=series,
        field=grid.field,
        filter=grid.filter,
        grid=grid.name,
        calibration=grid.calibration,
        sources=task.sources,
    )
    cutout = None
    if track.verdict == "track":
        cutout = cut_out_track(
            row,
            track=track,
            series=series,
            wcs=grid.calibration.wcs,
            settings=config.products,
        )
    return TrackFinding(
        row=row,
        points=track_point_rows(track, series=series, calibration=grid.calibration),
        interpretations=interpretation_rows(row, scores, sources=task.sources),
        arcs=tuple((s.origin, s.arc) for s in track.seeds if s.arc >= 0),
        cutout=cutout,
    )


def _scores(track: Track, grid: Grid, task: SeriesTask) -> tuple[OriginScore, ...]:
    """Return how well each source explains a track, best first."""
    ra, dec = grid.calibration.place(track.x, track.y)
    pa, scale = grid.calibration.direction(track.x, track.y, track.direction_angle)
    if ra is None or dec is None or pa is None or scale is None:
        return ()
    return score_origins(
        task.sources,
        ra=ra,
        dec=dec,
        normal_pa=pa,
        normal_pa_err=track.direction_angle_err,
        speed_arcsec_yr=track.speed_px_yr * scale,
        speed_err_arcsec_yr=track.speed_err_px_yr * scale,
        mjd=track.mjd,
        settings=task.config.origin,
        sense_odds=track.sense_odds,
    )
