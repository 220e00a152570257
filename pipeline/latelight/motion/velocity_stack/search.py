"""Find echoes too faint in every pair in the sum of all epochs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.velocity_stack._kernels import take_out_ridge
from latelight.motion.velocity_stack.levels import (
    Moving,
    build_levels,
    take_out_static,
)
from latelight.motion.velocity_stack.moving import (
    BLOCK_PX,
    Match,
    MovingRidge,
    Reach,
    follow,
    refine,
)
from latelight.motion.velocity_stack.settings import VelocityStackSettings
from latelight.motion.velocity_stack.trials import Guess, Passage, search_level
from latelight.motion.velocity_stack.verdicts import (
    Case,
    genuine,
    no_epoch_alone,
    seen_at_enough_epochs,
)
from latelight.records import (
    ArcTrace,
    EpochSeries,
    FloatArray,
    TrackSeed,
)
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["search_velocities"]

_DAYS_PER_YEAR = 365.25
_LONGEST_HALF_PX = 100.0
"""Half the length along which a ridge is fitted; longer ones are followed later."""
_LEAST_RADIUS_PX = 150.0
_CAP = 1.6
"""One epoch counts in full up to so many times its even share of the threshold:
two epochs alone then stay below it."""
_GUESS_HALF_PX = 48.0
"""Half the length along which a guess is looked at."""
_STARTS = 2
"""Guesses refined on one ridge: another start often finds the better optimum."""
_BESIDE = 2.0
_BEYOND_PX = 60.0
"""Within so many widths of a ridge and so far beyond its ends, another is its own
continuation: echoes bend more than a parabola, and have tails."""
_STILL_THERE = 0.75
"""Of a guess's significance must be left beside what is explained already."""


@dataclass(frozen=True, slots=True)
class _Search:
    """One series under search; what is explained leaves ``moving``."""

    series: EpochSeries
    moving: Moving
    passage: Passage
    reach: Reach
    noise_sigma: FloatArray
    noise_ratio: FloatArray
    settings: VelocityStackSettings

    def ratio(self, sigma_px: float) -> float:
        """Return the noise of ridges of that width over what the variance states."""
        return float(np.interp(sigma_px, self.noise_sigma, self.noise_ratio))

    def snr(self, match: Match) -> float:
        """Return a calibrated significance."""
        return match.snr / self.ratio(match.ridge.sigma_px)

    def case(self, match: Match) -> Case:
        """Return what the tests look at."""
        ratio = self.ratio(match.ridge.sigma_px)
        fwhm = float(np.median(self.series.fwhm_px))
        return Case(match, ratio, fwhm, self.settings)


def search_velocities(
    series: EpochSeries, *, settings: VelocityStackSettings
) -> tuple[TrackSeed, ...]:
    """Find moving ridges in all epochs together.

    Parameters
    ----------
    series : EpochSeries
        Epochs of one field on one grid.
    settings : VelocityStackSettings
        Thresholds and limits.

    Returns
    -------
    tuple of TrackSeed
        Ridges above the threshold, most significant first; none with fewer epochs
        than ``settings.least_epochs``, or all of them at the same time.  Traces
        hold for the middle between the first and the last epoch.
    """
    if not settings.enabled or len(series) < settings.least_epochs:
        return ()
    if series.mjd[-1] <= series.mjd[0]:
        return ()
    search, guesses = _prepare(series, settings)
    found: list[Match] = []
    seeds: list[TrackSeed] = []
    while guesses:
        match, guesses = _next_match(search, guesses)
        if match is None or search.snr(match) < settings.threshold:
            continue
        known = any(_continues(match, other) for other in found)
        if not known and genuine(search.case(match)):
            seeds.append(_seed(search, match))
            found.append(match)
        _take_out(search, match)
    return tuple(sorted(seeds, key=lambda s: (-s.snr, s.trace.y[0], s.trace.x[0])))


def _prepare(
    series: EpochSeries, settings: VelocityStackSettings
) -> tuple[_Search, list[Guess]]:
    """Search coarsely; return the guesses, most significant first."""
    middle, span = _time(series)
    moving = take_out_static(series, smooth_px=settings.widest_px)
    passage = Passage(
        phase=(series.mjd - middle) / span,
        share=moving.shares(),
        cap=_CAP * settings.threshold / float(np.sqrt(len(series))),
    )
    fwhm = float(np.median(series.fwhm_px))
    guesses: list[Guess] = []
    calibration = []
    for level in build_levels(moving, fwhm_px=fwhm, widest_px=settings.widest_px):
        found, point = search_level(
            level,
            passage,
            largest_px=settings.largest_shift_px,
            threshold=settings.seed_threshold,
        )
        guesses += found
        calibration.append(point)
    guesses.sort(key=lambda g: (-g.snr, g.y, g.x))
    narrowest = float(np.min(series.fwhm_px)) / FWHM_PER_SIGMA
    reach = Reach(
        half_length=_LONGEST_HALF_PX,
        shift=1.1 * settings.largest_shift_px,
        sigma=(narrowest, settings.widest_px / FWHM_PER_SIGMA),
        curvature=1.0 / _LEAST_RADIUS_PX,
    )
    sigma, ratio = np.array(calibration).T
    return _Search(series, moving, passage, reach, sigma, ratio, settings), guesses


def _time(series: EpochSeries) -> tuple[float, float]:
    """Return the middle of all epochs, MJD, and their span, days."""
    first, last = float(series.mjd[0]), float(series.mjd[-1])
    return 0.5 * (first + last), last - first


def _next_match(
    search: _Search, guesses: list[Guess]
) -> tuple[Match | None, list[Guess]]:
    """Refine the first guess and a few more on the same ridge; return the best."""
    guess, rest = guesses[0], guesses[1:]
    if not _promising(search, guess):
        return None, rest
    best = _refined(search, guess)
    more = [other for other in rest if _close(best.ridge, other)][: _STARTS - 1]
    for other in more:
        match = _refined(search, other)
        if search.snr(match) > search.snr(best):
            best = match
    return best, [other for other in rest if other not in more]


def _refined(search: _Search, guess: Guess) -> Match:
    return refine(
        search.moving,
        search.passage,
        guess,
        search.reach,
        search.settings.threshold * search.ratio(guess.sigma_px),
    )


def _promising(search: _Search, guess: Guess) -> bool:
    """Tell whether a guess holds beside what is explained, and at several epochs."""
    ridge = MovingRidge(
        guess.x, guess.y, guess.angle, 0.0, guess.shift_px, guess.sigma_px
    )
    match = follow(search.moving, search.passage, ridge, _GUESS_HALF_PX)
    if search.snr(match) < _STILL_THERE * guess.snr:
        return False
    case = search.case(match)
    return seen_at_enough_epochs(case) and no_epoch_alone(case)


def _close(ridge: MovingRidge, guess: Guess) -> bool:
    """Tell whether a guess lies on a ridge and moves about like it."""
    dx, dy = guess.x - ridge.x, guess.y - ridge.y
    cosine, sine = np.cos(ridge.angle), np.sin(ridge.angle)
    across = dx * cosine + dy * sine
    along = dy * cosine - dx * sine
    # The same motion may be described by the opposite normal.
    aligned = np.cos(guess.angle - ridge.angle)
    turned = abs(aligned) < np.cos(np.radians(25.0))
    other = guess.shift_px * np.sign(aligned) - ridge.shift_px
    near = abs(across - 0.5 * ridge.curvature * along**2) < 4.0 * guess.sigma_px
    return bool(
        near
        and not turned
        and abs(along) < _LONGEST_HALF_PX
        and abs(other) < 8.0 * guess.sigma_px
    )


def _continues(match: Match, other: Match) -> bool:
    """Tell whether a ridge is what bends away from, or lies behind, another one."""
    n = match.last - match.first + 1
    ridge = match.ridge
    along = match.along[match.first : match.last + 1]
    inward = 0.5 * ridge.curvature * along**2
    x = ridge.x + inward * np.cos(ridge.angle) - along * np.sin(ridge.angle)
    y = ridge.y + inward * np.sin(ridge.angle) + along * np.cos(ridge.angle)
    dx, dy = x - other.ridge.x, y - other.ridge.y
    cosine, sine = np.cos(other.ridge.angle), np.sin(other.ridge.angle)
    far = dy * cosine - dx * sine
    across = dx * cosine + dy * sine - 0.5 * other.ridge.curvature * far**2
    near = np.abs(across) < _BESIDE * FWHM_PER_SIGMA * other.ridge.sigma_px
    near &= far > other.along[other.first] - _BEYOND_PX
    near &= far < other.along[other.last] + _BEYOND_PX
    return int(near.sum()) > 0.5 * n


def _take_out(search: _Search, match: Match) -> None:
    """Take a ridge out of every epoch where it lies."""
    ridge = match.ridge
    # As far as a Gaussian of that significance rises above the noise.
    far = np.sqrt(2.0 * np.log(max(search.snr(match), 3.0))) + 0.7
    half_width = float(far) * ridge.sigma_px + 1.0
    for i, shift in enumerate(ridge.shift_px * search.passage.phase):
        take_out_ridge(
            search.moving.pixels,
            search.moving.weight,
            search.moving.signal,
            search.moving.total,
            i,
            ridge.x + shift * np.cos(ridge.angle),
            ridge.y + shift * np.sin(ridge.angle),
            ridge.angle,
            ridge.curvature,
            float(match.along[match.first]) - 2.0 * BLOCK_PX,
            float(match.along[match.last]) + 2.0 * BLOCK_PX,
            half_width,
        )


def _seed(search: _Search, match: Match) -> TrackSeed:
    """Put a ridge into the record, its normals along the motion."""
    middle, span = _time(search.series)
    ridge = match.ridge.moved(match.middle_px)
    n = round(match.length_px) + 1
    along = np.linspace(-0.5 * match.length_px, 0.5 * match.length_px, n)
    sense = 1.0 if ridge.shift_px > 0.0 else -1.0
    turn = ridge.curvature * along
    cosine, sine = np.cos(ridge.angle), np.sin(ridge.angle)
    inward = 0.5 * turn * along
    normal = np.degrees(ridge.angle - np.arctan(turn)) + (0.0 if sense > 0 else 180.0)
    trace = ArcTrace(
        x=ridge.x + inward * cosine - along * sine,
        y=ridge.y + inward * sine + along * cosine,
        normal_angle=normal,
    )
    angle = np.degrees(ridge.angle) + (0.0 if sense > 0 else 180.0)
    return TrackSeed(
        trace=trace,
        direction_angle=float(angle % 360.0),
        speed_px_yr=abs(ridge.shift_px) / span * _DAYS_PER_YEAR,
        mjd=middle,
        width_px=float(FWHM_PER_SIGMA * ridge.sigma_px),
        snr=search.snr(match),
        origin="stack",
    )
