"""Tracks that pass through each other."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

import numpy as np

from latelight.masks import MaskBit
from latelight.motion.tracks.follow import DAYS_PER_YEAR
from latelight.motion.tracks.lines import lengthened
from latelight.motion.tracks.link import line_at
from latelight.records import EpochSeries, Track

__all__ = ["meet", "without_light"]

# How far a ridge's light reaches ahead of its crest and behind it, full widths.
_AHEAD, _BEHIND = 0.8, 1.3
_CARRIED_ON = 0.2
_STEP_PX = 0.7


def meet(one: Track, other: Track, series: EpochSeries) -> bool:
    """Say whether the light of two tracks may come near each other.

    Each is taken to fill a circle about its middle, over all epochs.
    """
    return float(np.hypot(one.x - other.x, one.y - other.y)) <= sum(
        _radius(track, series) for track in (one, other)
    )


def _radius(track: Track, series: EpochSeries) -> float:
    years = np.abs(series.mjd - track.mjd).max() / DAYS_PER_YEAR
    width = float(np.hypot(track.width_px, np.median(series.fwhm_px)))
    return float(0.5 * track.length_px + track.speed_px_yr * years + 2.0 * width)


def without_light(series: EpochSeries, tracks: Iterable[Track]) -> EpochSeries:
    """Return a series with some tracks' ridges masked at every epoch.

    Parameters
    ----------
    series : EpochSeries
        The epochs; not changed.
    tracks : iterable of Track
        Fitted tracks.
    """
    mask = series.mask.copy()
    ny, nx = mask.shape[1:]
    for track in tracks:
        width = float(np.hypot(track.width_px, np.median(series.fwhm_px)))
        across = np.arange(-_BEHIND * width, _AHEAD * width, _STEP_PX)
        for i, mjd in enumerate(series.mjd):
            line = line_at(track, float(mjd))
            line = lengthened(line, _CARRIED_ON * line.x.size)
            angle = np.radians(line.normal_angle)
            col = np.rint(line.x + across[:, None] * np.cos(angle)).astype(int)
            row = np.rint(line.y + across[:, None] * np.sin(angle)).astype(int)
            inside = (col >= 0) & (col < nx) & (row >= 0) & (row < ny)
            mask[i, row[inside], col[inside]] |= np.uint16(MaskBit.COMPACT)
    return replace(series, mask=mask)
