"""What the verdicts look at: measured facts about one fitted ridge."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.arcs.bright import BrightStars
from latelight.arcs.fit import BLOCK_PX, Fit, PolarSums, sum_along
from latelight.arcs.footprint import box_around
from latelight.arcs.lobes import Lobes
from latelight.arcs.profiles import lobe_width
from latelight.arcs.settings import ArcSettings
from latelight.arcs.surroundings import (
    Line,
    Ring,
    filled,
    follow_line,
    follow_ring,
    ring_about,
)
from latelight.arcs.tracing import block_significance
from latelight.masks import MaskBit
from latelight.records import Difference, FloatArray

__all__ = ["Evidence", "Flanks", "gather"]


_CARRIED_ON_PX = 60.0
_STREAKS = np.uint16(MaskBit.TRAIL | MaskBit.SPIKE | MaskBit.BLEED)

_PIECE_BLOCKS = 3
"""Blocks that share one brightness: filaments are longer than 24 pixels."""


@dataclass(frozen=True, slots=True)
class Flanks:
    """The ground beside the brighter lobe, one to two and a half widths off.

    Attributes
    ----------
    data : float
        Fraction of unmasked pixels on the side that has fewer of them.
    step : float
        Difference of the two levels, in heights of the brighter lobe.
    """

    data: float
    step: float


@dataclass(frozen=True, slots=True)
class Evidence:
    """Facts about one ridge.

    Attributes
    ----------
    difference : Difference
        Where it was found; what earlier ridges explain is masked.
    fit : Fit
        Circle, stretch and lobes.
    snr, pair_snr, single_snr : float
        Calibrated significance with the brightness free along the arc, that of the
        pair of lobes of even brightness, and that of the best single lobe.
    noise_ratio : float
        Noise of such ridges over that stated by the variance.
    fwhm_px, lobe_width_px, single_width_px : float
        Full widths at half maximum of the PSF, of a lobe of the pair and of the best
        single lobe, pixels.
    block_snr : float64 array, shape (n,)
        Significance of each block along the ridge.
    trimmed_snr : float
        Significance without the best sixth of the ridge, at least two blocks.
    filled : float
        Fraction of the best stretch that takes part in the signal.
    away_share : float
        Height of the ridge away from bright stars over its height everywhere.
    masked : float
        Fraction of the lobes' pixels that are masked or outside the frame.
    streak_px : float
        Longest run of the ridge, carried on a little, under a masked trail, spike or
        bleed, pixels.
    flanks : Flanks
        The ground on both sides of the brighter lobe.
    settings : ArcSettings
        Limits of what an arc may be.
    stars : BrightStars
        Bright stars of the frame.
    """

    difference: Difference
    fit: Fit
    snr: float
    pair_snr: float
    single_snr: float
    noise_ratio: float
    fwhm_px: float
    lobe_width_px: float
    single_width_px: float
    block_snr: FloatArray
    trimmed_snr: float
    filled: float
    away_share: float
    masked: float
    streak_px: float
    flanks: Flanks
    settings: ArcSettings
    stars: BrightStars

    @property
    def two_lobed(self) -> bool:
        """The second lobe improves the fit by three sigma and is no mere trifle."""
        improved = self.pair_snr**2 - self.single_snr**2 > 9.0
        return improved and self.weaker_share > 0.2

    @property
    def narrowest(self) -> float:
        """Width of the narrower description, one lobe or two, in PSF widths."""
        return min(self.lobe_width_px, self.single_width_px) / self.fwhm_px

    @property
    def shift_px(self) -> float:
        """Distance between the lobes, pixels."""
        return abs(self.fit.pair.positive - self.fit.pair.negative)

    @property
    def weaker_share(self) -> float:
        """Height of the weaker lobe over that of the brighter."""
        heights = (self.fit.pair.positive_height, -self.fit.pair.negative_height)
        return min(heights) / max(heights)

    def line(self) -> Line:
        """Follow the straight line through the ridge."""
        return follow_line(self.difference, self.fit, self.noise_ratio)

    def ring(self) -> Ring:
        """Find the circle through the ridge that is lit most beyond it."""
        return follow_ring(self.difference, self.fit, self.noise_ratio)

    def ring_about(self, x: float, y: float) -> Ring:
        """Follow the circle about a place through the middle of the ridge."""
        return ring_about(self.difference, self.fit, x, y, self.noise_ratio)

    @property
    def length_px(self) -> float:
        """Length of the ridge, fainter pieces included, pixels."""
        return self.fit.last - self.fit.first


def gather(
    difference: Difference,
    fit: Fit,
    settings: ArcSettings,
    *,
    pair_snr: float,
    single_snr: float,
    noise_ratio: float,
    stars: BrightStars,
) -> Evidence:
    """Measure the facts about one fitted ridge."""
    half_height = int(settings.largest_shift_px + settings.widest_px)
    along, matched, power = block_significance(
        difference, fit, half_height, max(-fit.first, fit.last)
    )
    block_snr = matched / np.sqrt(np.maximum(power, 1e-30)) / noise_ratio
    whole = (along > fit.first) & (along < fit.last)
    core = np.abs(along) < fit.half_length
    sums = sum_along(difference, fit.circle, fit.half_length, half_height)
    return Evidence(
        difference=difference,
        fit=fit,
        snr=_uneven(pair_snr, block_snr[core], block_snr[whole]),
        pair_snr=pair_snr,
        single_snr=single_snr,
        noise_ratio=noise_ratio,
        fwhm_px=difference.fwhm_px,
        lobe_width_px=lobe_width(fit.pair.sigma_px, fit.pair.tail_px),
        single_width_px=lobe_width(fit.single.sigma_px, fit.single.tail_px),
        block_snr=block_snr[whole],
        trimmed_snr=_trimmed(matched[whole], power[whole]) / noise_ratio,
        filled=filled(matched[core], power[core]),
        away_share=_away(difference, fit, half_height, stars),
        masked=_masked(sums, fit.pair),
        streak_px=_streak(difference, fit),
        flanks=_flanks(sums, fit.pair),
        settings=settings,
        stars=stars,
    )


def _uneven(pair_snr: float, core: FloatArray, whole: FloatArray) -> float:
    """Return the significance of the whole ridge, its brightness free along it.

    With n pieces of significance x the perfect filter would reach sqrt(sum x^2);
    noise adds n - 1 to the sum beyond the square of the even filter's.
    """
    n = max(round(whole.size / _PIECE_BLOCKS), 1)
    pieces = [part.sum() / np.sqrt(part.size) for part in np.array_split(whole, n)]
    even = core.sum() / np.sqrt(core.size)
    gain = float(np.sum(np.square(pieces)) - even**2) - (n - 1)
    return float(np.sqrt(pair_snr**2 + max(gain, 0.0)))


def _away(
    difference: Difference, fit: Fit, half_height: int, stars: BrightStars
) -> float:
    """Compare the ridge's height away from bright stars with that everywhere."""

    def height(where: Difference) -> float:
        _, matched, power = block_significance(where, fit, half_height, fit.half_length)
        return float(matched.sum()) / max(float(power.sum()), 1e-30)

    everywhere = height(difference)
    if everywhere <= 0.0:
        return 0.0
    trace = fit.circle.trace(-fit.half_length - BLOCK_PX, fit.half_length + BLOCK_PX)
    box = box_around(difference.mask.shape, trace.x, trace.y, half_height + 2.0)
    near = stars.residues[box]
    if not near.any():
        return 1.0
    mask = difference.mask.copy()
    mask[box][near] |= np.uint16(1)
    return height(replace(difference, mask=mask)) / everywhere


def _trimmed(matched: FloatArray, power: FloatArray) -> float:
    """Return the significance left without the best run of blocks."""
    run = max(2, round(matched.size / 6))
    left = []
    for first in range(matched.size - run + 1):
        rest = np.ones(matched.size, dtype=bool)
        rest[first : first + run] = False
        left.append(matched[rest].sum() / np.sqrt(max(power[rest].sum(), 1e-30)))
    return float(min(left)) if left else 0.0


def _masked(sums: PolarSums, lobes: Lobes) -> float:
    """Return the fraction of the lobes' area without data."""
    weight = lobes.profile(sums.signal.shape[1] // 2) ** 2
    good = sums.count.sum(axis=0) / (BLOCK_PX * sums.along.size)
    return float(1.0 - (good * weight).sum() / weight.sum())


def _streak(difference: Difference, fit: Fit) -> float:
    """Return the longest run of the ridge under masked streaks, pixels."""
    trace = fit.circle.trace(fit.first - _CARRIED_ON_PX, fit.last + _CARRIED_ON_PX)
    ny, nx = difference.mask.shape
    rows = np.clip(np.round(trace.y).astype(int), 0, ny - 1)
    cols = np.clip(np.round(trace.x).astype(int), 0, nx - 1)
    under = np.concatenate([[0], (difference.mask[rows, cols] & _STREAKS) != 0, [0]])
    turns = np.flatnonzero(np.diff(under.astype(int)))
    step = (fit.last - fit.first + 2.0 * _CARRIED_ON_PX) / max(trace.x.size - 1, 1)
    return float(np.max(turns[1::2] - turns[::2], initial=0) * step)


def _flanks(sums: PolarSums, lobes: Lobes) -> Flanks:
    """Compare the ground on the two sides of the brighter lobe."""
    half = sums.signal.shape[1] // 2
    offset = np.arange(-half, half + 1)
    width = lobe_width(lobes.sigma_px, lobes.tail_px)
    levels, data = [], []
    for beyond in (lobes.brighter - offset, offset - lobes.brighter):
        side = (beyond > width) & (beyond < 2.5 * width)
        weight = float(sums.weight[:, side].sum())
        area = BLOCK_PX * sums.along.size * max(int(side.sum()), 1)
        data.append(float(sums.count[:, side].sum()) / area)
        levels.append(float(sums.signal[:, side].sum()) / max(weight, 1e-30))
    height = max(lobes.positive_height, -lobes.negative_height)
    step = abs(levels[1] - levels[0]) / max(height, 1e-30)
    return Flanks(min(data), step)
