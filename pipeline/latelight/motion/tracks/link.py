"""Which seeds are of one arc, and which tracks are of one."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from latelight.motion.tracks.lines import distance_between, moved
from latelight.records import ArcTrace, EpochSeries, Track, TrackSeed

__all__ = ["common_light", "explains", "group_seeds", "line_at"]

_DAYS_PER_YEAR = 365.25
# Ridges nearer than so many full widths are the same.
_NEAR_WIDTHS = 0.6
# Error of a speed measured in one pair, and how far a seed is trusted to carry.
_SPEED_ERR = 0.25
_FARTHEST_WIDTHS = 3.0
# A piece that carries a ridge on by less than this part of it is of the same front.
_SAME_FRONT = 0.4


def group_seeds(seeds: Sequence[TrackSeed]) -> list[tuple[TrackSeed, ...]]:
    """Put seeds of the same arc together.

    Parameters
    ----------
    seeds : sequence of TrackSeed
        In any order.

    Returns
    -------
    list of tuple of TrackSeed
        The most significant seed of each arc first, the best arc first.
    """
    groups: list[list[TrackSeed]] = []
    for seed in sorted(seeds, key=_rank):
        home = next((group for group in groups if _same_arc(group[0], seed)), None)
        if home is None:
            groups.append([seed])
        else:
            home.append(seed)
    return [tuple(group) for group in groups]


def _rank(seed: TrackSeed) -> tuple[float, str, int, float]:
    """Return what seeds are sorted by: significance, then anything that is fixed."""
    return -seed.snr, seed.origin, seed.arc, float(seed.trace.x[0])


def _same_arc(one: TrackSeed, other: TrackSeed) -> bool:
    """Say whether two seeds meet when moved to a common epoch.

    The other's sense may be wrong; of a seed without a speed only the place counts.
    """
    years = (other.mjd - one.mjd) / _DAYS_PER_YEAR
    width = max(one.width_px, other.width_px)
    known = [seed for seed in (one, other) if np.isfinite(seed.speed_px_yr)]
    if not known and years != 0.0:
        return False
    for seed in known or [one]:
        there, time = (other, years) if seed is one else (one, -years)
        way = np.nan_to_num(seed.speed_px_yr) * time
        limit = min(
            _NEAR_WIDTHS * width + _SPEED_ERR * abs(way), _FARTHEST_WIDTHS * width
        )
        senses = (1.0,) if seed is one else (1.0, -1.0)
        gaps = [
            distance_between(
                moved(seed.trace, seed.direction_angle, sense * way), there.trace
            )
            for sense in senses
        ]
        if min(gaps) > limit:
            return False
    return True


def line_at(track: Track, mjd: float) -> ArcTrace:
    """Return the centre line of a track at an epoch."""
    years = (mjd - track.mjd) / _DAYS_PER_YEAR
    change = track.change_px_yr2 if np.isfinite(track.change_px_yr2) else 0.0
    way = track.speed_px_yr * years + 0.5 * change * years**2
    return moved(track.trace, track.direction_angle, way)


def explains(track: Track, seed: TrackSeed, series: EpochSeries) -> bool:
    """Say whether a track is what a seed saw.

    An arc of a pair may lie where the track was at either of its epochs.
    """
    width = _full_width(track, series)
    for mjd in {seed.mjd, *_pair_epochs(seed, series)}:
        if distance_between(line_at(track, mjd), seed.trace) <= _NEAR_WIDTHS * width:
            return True
    return False


def common_light(one: Track, other: Track, series: EpochSeries) -> float:
    """Return the part of another track's light that is one's: 0 to 1.

    At each epoch the light is the same where their ridges lie together.
    """
    width = _full_width(one, series)
    shared = total = 0.0
    for point in other.points:
        light = point.height_counts / point.height_err_counts
        if not light > 0.0:
            continue
        total += light**2
        lines = line_at(one, point.mjd), line_at(other, point.mjd)
        gap = distance_between(*lines, carried_on=_SAME_FRONT)
        if gap <= _NEAR_WIDTHS * width:
            shared += light**2
    return shared / total if total > 0.0 else 0.0


def _full_width(track: Track, series: EpochSeries) -> float:
    return float(np.hypot(track.width_px, np.median(series.fwhm_px)))


def _pair_epochs(seed: TrackSeed, series: EpochSeries) -> list[float]:
    """Return the epochs of the pair a seed was found in, as far as its name tells."""
    parts = [
        float(mjd)
        for name, mjd in zip(series.names, series.mjd, strict=True)
        if seed.origin.startswith(f"{name}-") or seed.origin.endswith(f"-{name}")
    ]
    return parts if len(parts) <= 2 else []
