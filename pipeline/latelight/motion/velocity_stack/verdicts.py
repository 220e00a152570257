"""Whether a moving ridge is borne out by all of its epochs and all of its length.

Trails, cosmic rays, ghosts, spikes and variable stars shine at one epoch or two;
knots and residues of stars shine at one place; haloes and ghosts are wide and hardly
move.  An echo need not be even, though: the dust it sweeps over is patchy.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from latelight.motion.velocity_stack.moving import Match
from latelight.motion.velocity_stack.settings import VelocityStackSettings
from latelight.records import FloatArray
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["TESTS", "Case", "genuine", "significance", "without"]

_LEFT_WITHOUT_ONE = 0.45
"""Significance left without any one epoch, over that of all.  Three equal epochs
keep 0.71, five keep 0.87; an artefact of one epoch keeps none."""
_LEFT_WITHOUT_BEST = 0.55
"""Significance left without the best sixth of the length, over that of all."""
_PATCHINESS = 0.4
"""Scatter of an echo's brightness from epoch to epoch, relative to its mean."""
_WORST_CHI2 = 1.8
"""Chi-square a degree of freedom of the epochs against one brightness."""
_LEAST_AREA = 0.5
"""Part of the ridge that must lie on good pixels at an epoch that counts."""
_LEAST_EPOCHS = 3
_LEAST_ASPECT = 5.5
"""Length over full width at half maximum."""
_LEAST_SHIFT = 1.5
"""Distance moved over all epochs, in full widths at half maximum."""
_LEAST_PSF_SHIFT = 2.5
"""The same in widths of the PSF: residues of stars reach so far."""
_LEAST_RADIUS_PX = 190.0
"""Haloes and ghosts of bright stars are rings, up to 120 pixels in radius."""
_NEAR_LIMIT = 0.95
"""A width so near to the greatest allowed is that of no ridge but of a slope."""


@dataclass(frozen=True, slots=True)
class Case:
    """What is known of a ridge.

    Attributes
    ----------
    match : Match
        The ridge against all epochs.
    noise_ratio : float
        Noise of such ridges over that stated by the variance.
    fwhm_px : float
        PSF width, pixels.
    settings : VelocityStackSettings
        Limits of what is looked for.
    """

    match: Match
    noise_ratio: float
    fwhm_px: float
    settings: VelocityStackSettings

    @property
    def width_px(self) -> float:
        """Full width at half maximum, pixels."""
        return float(FWHM_PER_SIGMA * self.match.ridge.sigma_px)

    def totals(self) -> tuple[FloatArray, FloatArray]:
        """Return matched, shape (n,), and power, shape (n, n), of the stretch."""
        stretch = self.match.stretch
        return self.match.matched[stretch].sum(axis=0), self.match.power[stretch].sum(
            axis=0
        )


def genuine(case: Case) -> bool:
    """Tell whether a ridge passes every test."""
    return all(test(case) for test in TESTS)


def significance(matched: FloatArray, power: FloatArray) -> float:
    """Return the significance of one brightness for all epochs, or 0 without data.

    Parameters
    ----------
    matched : float64 array, shape (n,)
        Products with the data.
    power : float64 array, shape (n, n)
        Products of the models.
    """
    return float(matched.sum() / np.sqrt(power.sum())) if power.sum() > 0.0 else 0.0


def without(
    matched: FloatArray, power: FloatArray, epoch: int
) -> tuple[FloatArray, FloatArray]:
    """Return both with the brightness of one epoch free, that epoch taken out.

    The partitioned normal equations: ``power - p p^T / power_ii``, p its column.
    """
    rest = np.arange(matched.size) != epoch
    if power[epoch, epoch] <= 0.0:
        return matched[rest], power[np.ix_(rest, rest)]
    share = power[rest, epoch] / power[epoch, epoch]
    return (
        matched[rest] - share * matched[epoch],
        power[np.ix_(rest, rest)] - np.outer(share, power[epoch, rest]),
    )


def well_shaped(case: Case) -> bool:
    """Tell whether it is long, slender and no ring."""
    length, width = case.match.length_px, case.width_px
    narrow = width < _NEAR_LIMIT * case.settings.widest_px
    long = length >= max(case.settings.shortest_px, _LEAST_ASPECT * width)
    open_ = abs(case.match.ridge.curvature) * _LEAST_RADIUS_PX <= 1.0
    return narrow and long and open_


def well_moved(case: Case) -> bool:
    """Tell whether it leaves its own place, and does not outrun the search."""
    shift = abs(case.match.ridge.shift_px)
    least = max(_LEAST_SHIFT * case.width_px, _LEAST_PSF_SHIFT * case.fwhm_px)
    return least <= shift <= case.settings.largest_shift_px


def seen_at_enough_epochs(case: Case) -> bool:
    """Tell whether enough epochs have data along it."""
    area = case.match.area[case.match.stretch].mean(axis=0)
    return int((area >= _LEAST_AREA).sum()) >= _LEAST_EPOCHS


def no_epoch_alone(case: Case) -> bool:
    """Tell whether it outlives the loss of any one epoch."""
    matched, power = case.totals()
    left = [significance(*without(matched, power, i)) for i in range(matched.size)]
    return min(left) >= _LEFT_WITHOUT_ONE * case.match.snr


def even_in_time(case: Case) -> bool:
    """Tell whether the epochs agree on one brightness, patchy dust allowed for."""
    matched, power = case.totals()
    use = np.diag(power) > 0.02 * np.diag(power).max()
    matched, power = matched[use], power[np.ix_(use, use)]
    # Slow ridges say little about their mean brightness: keep it solvable.
    covariance = np.linalg.inv(power + 1e-3 * np.diag(np.diag(power)))
    heights = covariance @ matched
    spread = _PATCHINESS * matched.sum() / power.sum()
    covariance = case.noise_ratio**2 * covariance + spread**2 * np.eye(matched.size)
    inverse = np.linalg.inv(covariance)
    offset = heights - (inverse @ heights).sum() / inverse.sum()
    return float(offset @ inverse @ offset) <= _WORST_CHI2 * (matched.size - 1)


def no_place_alone(case: Case) -> bool:
    """Tell whether it outlives the loss of its best sixth."""
    stretch = case.match.stretch
    matched = case.match.matched[stretch].sum(axis=1)
    power = case.match.power[stretch].sum(axis=(1, 2))
    run = max(2, round(matched.size / 6))
    if matched.size <= run:
        return False
    ends = np.ones(run)
    top = matched.sum() - np.convolve(matched, ends, mode="valid")
    bottom = power.sum() - np.convolve(power, ends, mode="valid")
    left = top / np.sqrt(np.maximum(bottom, 1e-9 * power.sum()))
    return float(left.min()) >= _LEFT_WITHOUT_BEST * case.match.snr


TESTS: tuple[Callable[[Case], bool], ...] = (
    well_shaped,
    well_moved,
    seen_at_enough_epochs,
    no_epoch_alone,
    even_in_time,
    no_place_alone,
)
"""What an echo must pass, cheapest first."""
