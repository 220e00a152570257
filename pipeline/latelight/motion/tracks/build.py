"""Tracks of a field: seeds linked, followed through all epochs, judged."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from latelight.motion.settings import MotionSettings
from latelight.motion.tracks.assemble import assemble, unfollowed
from latelight.motion.tracks.follow import follow_seed
from latelight.motion.tracks.judge import Case, is_moving, verdict_of
from latelight.motion.tracks.link import common_light, explains, group_seeds
from latelight.motion.tracks.noise import SeriesNoise, measure_noise
from latelight.motion.tracks.others import meet, without_light
from latelight.motion.tracks.settings import TrackSettings
from latelight.records import EpochSeries, Track, TrackSeed

__all__ = ["build_tracks"]

_FEWEST_EPOCHS = 3
# Seeds of one arc that are tried until one gives a track.
_MOST_TRIES = 3
# Tracks that share more than this of their light are one.
_SAME_LIGHT = 0.5
_FEWEST_POINTS = 8


def build_tracks(
    series: EpochSeries,
    seeds: Sequence[TrackSeed],
    *,
    settings: TrackSettings,
    motion: MotionSettings,
) -> tuple[Track, ...]:
    """Follow the arcs of a field over all its epochs.

    Parameters
    ----------
    series : EpochSeries
        All epochs on one grid.
    seeds : sequence of TrackSeed
        Arcs of single pairs and ridges of the search along trial velocities, in any
        order; several may be of one arc, and any may be wrong.
    settings : TrackSettings
        Limits and priors of tracks.
    motion : MotionSettings
        What is known of echoes: brightness, texture and relief.

    Returns
    -------
    tuple of Track
        One an arc, those worth a look first, then by significance.  Every seed is in
        exactly one of them; a seed that cannot be followed is a track without a fit
        (numbers NaN) whose verdict says why.

    Notes
    -----
    A front of light sweeps over dust that stays where it is: place, speed, shape,
    direction and dust are fitted to all epochs at once, the static sky free in
    every pixel (:mod:`latelight.motion.tracks.ridge`).  ``mjd`` is half-way between
    the first and the last usable epoch; ``speed_px_yr`` the mean between them, of
    which the errors include hills of the dust sheet; ``change_px_yr2`` has the
    prior of such hills and is that which foretells the place one mean interval
    after the last epoch (:func:`latelight.motion.tracks.assemble.drift_of`), so
    that ``covariance`` is honest there without any further prior.
    """
    if not seeds:
        return ()
    if len(series) < _FEWEST_EPOCHS:
        verdict = f"only {len(series)} epochs, a track needs {_FEWEST_EPOCHS}"
        return tuple(
            unfollowed((seed,), verdict)
            for seed in sorted(seeds, key=lambda seed: -seed.snr)
        )
    builder = _Builder(series, measure_noise(series), settings, motion)
    sound = [seed for seed in seeds if _is_sound(seed)]
    broken = [
        unfollowed((seed,), "the seed is no line of finite points")
        for seed in seeds
        if not _is_sound(seed)
    ]
    tracks: list[Track] = []
    for group in group_seeds(sound):
        left = builder.absorbed(tracks, group)
        if left:
            tracks.append(builder.best_track(left))
    tracks = builder.without_duplicates(tracks)
    tracks = builder.apart(tracks)
    return (*builder.without_duplicates(tracks), *broken)


@dataclass(frozen=True, slots=True)
class _Builder:
    """What all tracks of a field share."""

    series: EpochSeries
    noise: SeriesNoise
    settings: TrackSettings
    motion: MotionSettings

    def absorbed(
        self, tracks: list[Track], group: tuple[TrackSeed, ...]
    ) -> tuple[TrackSeed, ...]:
        """Give seeds to the tracks that explain them; return the others."""
        left = []
        for seed in group:
            for number, track in enumerate(tracks):
                if track.verdict == "track" and explains(track, seed, self.series):
                    tracks[number] = replace(track, seeds=(*track.seeds, seed))
                    break
            else:
                left.append(seed)
        return tuple(left)

    def best_track(
        self, group: tuple[TrackSeed, ...], series: EpochSeries | None = None
    ) -> Track:
        """Follow the seeds of one arc, the best first, until one gives a track."""
        series = self.series if series is None else series
        tries = sorted(group, key=lambda seed: not np.isfinite(seed.speed_px_yr))
        found: list[Track] = []
        for seed in tries[:_MOST_TRIES]:
            others = tuple(other for other in group if other is not seed)
            found.append(self._track((seed, *others), series))
            if found[-1].verdict == "track":
                break
        return min(found, key=_rank)

    def apart(self, tracks: list[Track]) -> list[Track]:
        """Fit ridges that do not look like one again, without the others' light."""
        lit = [track for track in tracks if is_moving(track)]
        out = []
        for track in tracks:
            others = [
                other
                for other in lit
                if other is not track and meet(track, other, self.series)
            ]
            if track.verdict != "track" and is_moving(track) and others:
                series = without_light(self.series, others)
                again = self.best_track(track.seeds, series)
                track = again if again.verdict == "track" else track
            out.append(track)
        return out

    def _track(self, seeds: tuple[TrackSeed, ...], series: EpochSeries) -> Track:
        """Follow the first of some seeds; whatever fails, the others go on."""
        try:
            followed = follow_seed(
                series,
                seeds[0],
                noise=self.noise,
                settings=self.settings,
                motion=self.motion,
            )
            track = assemble(series, seeds, followed, settings=self.settings)
            case = Case(track, followed, series, self.settings)
            return replace(track, verdict=verdict_of(case))
        except (ValueError, np.linalg.LinAlgError) as error:
            return unfollowed(seeds, f"cannot be followed: {error}")

    def without_duplicates(self, tracks: list[Track]) -> list[Track]:
        """Return tracks, the best first, each with light of its own."""
        kept: list[Track] = []
        for track in sorted(tracks, key=_rank):
            for number, better in enumerate(kept):
                if common_light(better, track, self.series) > _SAME_LIGHT:
                    kept[number] = replace(better, seeds=better.seeds + track.seeds)
                    break
            else:
                kept.append(track)
        return kept


def _rank(track: Track) -> tuple[bool, bool, float]:
    """Return what tracks are sorted by: worth a look, fitted, significant."""
    return track.verdict != "track", not track.points, -track.snr


def _is_sound(seed: TrackSeed) -> bool:
    trace = seed.trace
    numbers = (seed.direction_angle, seed.mjd, seed.width_px, seed.snr)
    return (
        trace.x.size >= _FEWEST_POINTS
        and bool(np.isfinite([trace.x, trace.y, trace.normal_angle]).all())
        and bool(np.isfinite(numbers).all())
        and seed.width_px > 0.0
    )
