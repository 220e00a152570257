"""What the verdicts look at: measured facts about one fitted ridge."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.arcs._kernels import block_matches, search_bends
from latelight.arcs.fit import BLOCK_PX, Fit, PolarSums, Reach, level_free, sum_along
from latelight.arcs.geometry import Circle
from latelight.arcs.lobes import Lobes
from latelight.arcs.profiles import lobe_profile, lobe_width
from latelight.records import BoolArray, Difference, FloatArray, StarList

__all__ = ["BrightStars", "Evidence", "Line", "gather"]


@dataclass(frozen=True, slots=True)
class BrightStars:
    """The stars that may cast spikes, bleeds, ghosts and haloes.

    Attributes
    ----------
    x, y : float64 array, shape (n,)
        Pixels.
    flux : float64 array, shape (n,)
        Counts.
    saturated : bool array, shape (n,)
    """

    x: FloatArray
    y: FloatArray
    flux: FloatArray
    saturated: BoolArray

    @classmethod
    def of(cls, stars: StarList, *, least_snr: float) -> BrightStars:
        """Select the saturated stars and those of a least signal-to-noise."""
        snr = stars.flux / np.maximum(stars.flux_err, 1e-30)
        bright = stars.saturated | (snr >= least_snr)
        return cls(
            stars.x[bright],
            stars.y[bright],
            stars.flux[bright],
            stars.saturated[bright],
        )


@dataclass(frozen=True, slots=True)
class Line:
    """The straight line through a ridge, as far as it shows.

    Attributes
    ----------
    length_px : float
        Length of its best stretch, pixels.
    snr : float
        Its significance as one PSF-wide ridge.
    at_edge : bool
        The stretch runs to where the frame ends.
    """

    length_px: float
    snr: float
    at_edge: bool


@dataclass(frozen=True, slots=True)
class Evidence:
    """Facts about one ridge.

    Attributes
    ----------
    fit : Fit
        Circle, stretch and lobes.
    snr, single_snr : float
        Calibrated significance of the pair of lobes and of the best single one.
    noise_ratio : float
        Noise of such ridges over that stated by the variance.
    fwhm_px, lobe_width_px : float
        Full widths at half maximum of the PSF and of a lobe, pixels.
    block_snr : float64 array, shape (n,)
        Significance of each block along the arc.
    trimmed_snr : float
        Significance without the best sixth of the arc, at least two blocks.
    masked : float
        Fraction of the lobes' pixels that are masked or outside the frame.
    line : Line
        The straight line through the ridge.
    longest_px : float
        Length beyond which a straight ridge is no arc, pixels.
    stars : BrightStars
        Bright stars of the frame.
    """

    fit: Fit
    snr: float
    single_snr: float
    noise_ratio: float
    fwhm_px: float
    lobe_width_px: float
    block_snr: FloatArray
    trimmed_snr: float
    masked: float
    line: Line
    longest_px: float
    stars: BrightStars

    @property
    def two_lobed(self) -> bool:
        """The second lobe improves the fit by three sigma."""
        return self.snr**2 - self.single_snr**2 > 9.0

    @property
    def length_px(self) -> float:
        """Length of the arc, pixels."""
        return 2.0 * self.fit.half_length


def gather(
    difference: Difference,
    fit: Fit,
    reach: Reach,
    *,
    snr: float,
    single_snr: float,
    noise_ratio: float,
    stars: BrightStars,
) -> Evidence:
    """Measure the facts about one fitted ridge."""
    sums = sum_along(difference, fit.circle, fit.half_length, reach.half_height)
    matched, power = _blocks(sums, fit.pair.profile(reach.half_height))
    block_snr = matched / np.sqrt(np.maximum(power, 1e-30)) / noise_ratio
    return Evidence(
        fit=fit,
        snr=snr,
        single_snr=single_snr,
        noise_ratio=noise_ratio,
        fwhm_px=difference.fwhm_px,
        lobe_width_px=lobe_width(fit.pair.sigma_px, fit.pair.tail_px),
        block_snr=block_snr,
        trimmed_snr=_trimmed(matched, power) / noise_ratio,
        masked=_masked(sums, fit.pair),
        line=_line(difference, fit, noise_ratio),
        longest_px=2.0 * reach.half_length,
        stars=stars,
    )


def _blocks(sums: PolarSums, profile: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return matched signal and power of a profile in each block."""
    return level_free(sums) @ profile, sums.weight @ profile**2


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
    half_height = sums.signal.shape[1] // 2
    weight = lobes.profile(half_height) ** 2
    area = BLOCK_PX * sums.along.size
    usual = np.median(sums.weight[sums.weight > 0.0]) if sums.weight.any() else 1.0
    full = np.minimum(sums.weight / usual, 1.0).sum(axis=0) * BLOCK_PX / area
    return float(1.0 - (full * weight).sum() / weight.sum())


def _line(difference: Difference, fit: Fit, noise_ratio: float) -> Line:
    """Follow the straight line through the ridge across the frame."""
    ny, nx = difference.pixels.shape
    diagonal = float(np.hypot(ny, nx))
    half_height = int(np.ceil(4.0 * difference.fwhm_px))
    line = Circle(fit.circle.x, fit.circle.y, fit.circle.angle, 0.0)
    sums = sum_along(difference, line, diagonal, half_height)
    offset = np.arange(-half_height, half_height + 1, dtype=float)
    profile = fit.pair.sign * lobe_profile(offset, difference.fwhm_px / 2.3548, 0.0)
    shape = (sums.along.size, 2 * half_height + 1)
    matched, power = np.empty(shape), np.empty(shape)
    block_matches(
        level_free(sums), sums.weight, profile, 0, profile.size, matched, power
    )
    best = np.zeros(5)
    middle = sums.along.size // 2
    slopes = np.linspace(-0.05, 0.05, 41)
    search_bends(
        matched, power, sums.along, slopes, np.zeros(1), middle - 2, middle + 1, best
    )
    gain, _, _, first, last = best.tolist()
    inside = np.nonzero(sums.count.sum(axis=1) > 0)[0]
    at_edge = int(first) <= inside[0] + 1 or int(last) >= inside[-1] - 1
    return Line(
        (last - first + 1.0) * BLOCK_PX, np.sqrt(gain) / noise_ratio, bool(at_edge)
    )
