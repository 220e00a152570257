"""Is a track worth a look?  Each reason to set it aside is one small function."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from latelight.motion.tracks.assemble import usable_epochs
from latelight.motion.tracks.follow import DAYS_PER_YEAR, Followed
from latelight.motion.tracks.settings import TrackSettings
from latelight.records import EpochSeries, FloatArray, IntArray, Track

__all__ = ["REASONS", "Case", "is_moving", "verdict_of"]

_FEWEST_EPOCHS = 3
# A track must be seen without its best epoch: in sigmas, and as a part of the whole.
_WITHOUT_BEST, _SHARE_WITHOUT_BEST = 3.5, 0.15
# Without its two best epochs it must be seen, where it should be at half their height.
_FADED, _SHOULD_SHOW, _SHOWS = 0.5, 5.0, 2.0
_LEAST_SPEED_SIGMAS = 3.0
# A place off by less than this part of the width is patchy dust's doing.
_OFF_WIDTHS = 0.3
# Excess of the reduced chi-square that passes: a constant, and for bright ridges, of
# which no model is exact, this part of the significance, squared.
_MISFIT, _MISFIT_PER_SNR = 1.5, 0.01


_DISAGREE, _NO_RIDGE = "epochs disagree", "no moving ridge"


@dataclass(frozen=True, slots=True)
class Case:
    """A track with what it was made from."""

    track: Track
    followed: Followed
    series: EpochSeries
    settings: TrackSettings


def verdict_of(case: Case) -> str:
    """Return ``"track"``, or the first reason to set it aside."""
    for reason in REASONS:
        text = reason(case)
        if text is not None:
            return text
    return "track"


def is_moving(track: Track) -> bool:
    """Say whether a track moves, though the light of another may spoil it."""
    spoilt = track.verdict.startswith((_DISAGREE, _NO_RIDGE))
    return track.verdict == "track" or spoilt


def few_epochs(case: Case) -> str | None:
    """Two places fit any speed: a track needs three."""
    count = int(usable_epochs(case.followed).sum())
    if count >= _FEWEST_EPOCHS:
        return None
    return f"only {count} usable epochs, a track needs {_FEWEST_EPOCHS}"


def faint(case: Case) -> str | None:
    """Not significant once fitted."""
    if case.track.snr >= case.settings.min_snr:
        return None
    return f"too faint: significance {case.track.snr:.1f}"


def one_epoch(case: Case) -> str | None:
    """Satellite trails, ghosts and passing bodies show once."""
    heights, covariance, _ = _seen(case)
    rest = np.argsort(heights / np.sqrt(np.diag(covariance)))[:-1]
    least = max(_WITHOUT_BEST, _SHARE_WITHOUT_BEST * case.track.snr)
    if _significance(heights, covariance, rest) >= least:
        return None
    return "seen at one epoch only"


def two_epochs(case: Case) -> str | None:
    """Two chance ridges, or a ridge of one pair that no other epoch supports."""
    heights, covariance, names = _seen(case)
    errs = np.sqrt(np.diag(covariance))
    order = np.argsort(heights / errs)
    rest, best = order[:-2], order[-2:]
    expected = _FADED * float(heights[best].mean()) / errs[rest]
    shows = _significance(heights, covariance, rest)
    if np.sqrt((expected**2).sum()) < _SHOULD_SHOW or shows >= _SHOWS:
        return None
    first, second = sorted(int(i) for i in best)
    return f"seen at two epochs only: {names[first]} and {names[second]}"


def unmoved(case: Case) -> str | None:
    """Residues of stars stay where they are."""
    track, series = case.track, case.series
    span = float(np.ptp(series.mjd)) / DAYS_PER_YEAR
    least = case.settings.least_motion * float(np.median(series.fwhm_px)) / span
    if track.speed_px_yr >= max(least, _LEAST_SPEED_SIGMAS * track.speed_err_px_yr):
        return None
    return "moves no faster than a star residual"


def disagreeing(case: Case) -> str | None:
    """One epoch lies off the place that all others foretell."""
    offsets = np.array([point.offset_px for point in case.track.points])
    errs = np.array([point.offset_err_px for point in case.track.points])
    has = np.isfinite(offsets) & np.isfinite(errs)
    if has.sum() < _FEWEST_EPOCHS:
        return None
    law = replace(case.followed.law, times=case.followed.law.times[has])
    # Leaving epoch k out, it lies [P x]_k / P_kk off, with the variance 1 / P_kk.
    precision = law.precision(errs[has] ** 2)
    pull = precision @ offsets[has]
    weight = np.diag(precision)
    sigmas = np.abs(pull) / np.sqrt(weight)
    worst = int(np.argmax(sigmas))
    gap = pull[worst] / weight[worst]
    least = _OFF_WIDTHS * case.followed.fit.ridge.lobe.full_width
    if sigmas[worst] <= case.settings.largest_residual or abs(gap) <= least:
        return None
    name = case.series.names[int(np.flatnonzero(has)[worst])]
    return f"{_DISAGREE}: {name} lies {gap:+.1f} px off"


def misfit(case: Case) -> str | None:
    """Another light is taken for a ridge."""
    track = case.track
    limit = 1.0 + _MISFIT + (_MISFIT_PER_SNR * track.snr) ** 2
    if track.chi2 <= limit:
        return None
    return f"{_NO_RIDGE}: reduced chi-square {track.chi2:.1f}"


REASONS: tuple[Callable[[Case], str | None], ...] = (
    few_epochs,
    faint,
    one_epoch,
    unmoved,
    two_epochs,
    disagreeing,
    misfit,
)
"""In the order in which they are tried."""


def _seen(case: Case) -> tuple[FloatArray, FloatArray, list[str]]:
    """Return heights, their covariance and the names of the usable epochs."""
    usable = usable_epochs(case.followed)
    light = case.followed.light
    names = [n for n, use in zip(case.series.names, usable, strict=True) if use]
    return light.heights[usable], light.covariance[np.ix_(usable, usable)], names


def _significance(
    heights: FloatArray, covariance: FloatArray, which: IntArray
) -> float:
    """Return how clearly some epochs show light, sigmas, whatever the others do."""
    own = np.maximum(heights[which], 0.0)
    square = float(own @ np.linalg.solve(covariance[np.ix_(which, which)], own))
    return float(np.sqrt(max(square - which.size + 1.0, 0.0)))
