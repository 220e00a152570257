"""Whether a moving ridge is borne out by all of its epochs and all of its length.

Trails, cosmic rays, ghosts, spikes and variable stars shine at one epoch or two;
knots and residues of stars shine at one place.  An echo need not be even, though:
the dust it sweeps over is patchy.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from latelight.motion.velocity_stack.moving import Match
from latelight.records import FloatArray
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["TESTS", "genuine", "significance", "without"]

_LEFT_WITHOUT_ONE = 0.45
"""Significance left without any one epoch, over that of all.  Three equal epochs
keep 0.71, five keep 0.87; an artefact of one epoch keeps none."""
_LEFT_WITHOUT_BEST = 0.55
"""Significance left without the best sixth of the length, over that of all."""
_PATCHINESS = 0.6
"""Scatter of an echo's brightness from epoch to epoch, relative to its mean."""
_WORST_CHI2 = 3.0
"""Chi-square a degree of freedom of the epochs against one brightness."""
_LEAST_AREA = 0.5
"""Part of the ridge that must lie on good pixels at an epoch that counts."""
_LEAST_EPOCHS = 3
_LEAST_ASPECT = 4.0
"""Length over full width at half maximum."""


def genuine(match: Match, *, noise_ratio: float, shortest_px: float) -> bool:
    """Tell whether a ridge passes every test.

    Parameters
    ----------
    match : Match
        The ridge against all epochs.
    noise_ratio : float
        Noise of such ridges over that stated by the variance.
    shortest_px : float
        Least length, pixels.
    """
    long = match.length_px >= shortest_px
    return long and all(test(match, noise_ratio) for test in TESTS)


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


def seen_at_enough_epochs(match: Match, noise_ratio: float) -> bool:
    """Tell whether enough epochs have data along it."""
    del noise_ratio
    area = match.area[match.stretch].mean(axis=0)
    return int((area >= _LEAST_AREA).sum()) >= _LEAST_EPOCHS


def no_epoch_alone(match: Match, noise_ratio: float) -> bool:
    """Tell whether it outlives the loss of any one epoch."""
    del noise_ratio
    matched, power = _totals(match)
    left = [significance(*without(matched, power, i)) for i in range(matched.size)]
    return min(left) >= _LEFT_WITHOUT_ONE * match.snr


def even_in_time(match: Match, noise_ratio: float) -> bool:
    """Tell whether the epochs agree on one brightness, patchy dust allowed for."""
    matched, power = _totals(match)
    use = np.diag(power) > 0.02 * np.diag(power).max()
    matched, power = matched[use], power[np.ix_(use, use)]
    # Slow ridges say little about their mean brightness: keep it solvable.
    covariance = np.linalg.inv(power + 1e-3 * np.diag(np.diag(power)))
    heights = covariance @ matched
    mean = matched.sum() / power.sum()
    covariance = noise_ratio**2 * covariance + (_PATCHINESS * mean) ** 2 * np.eye(
        matched.size
    )
    inverse = np.linalg.inv(covariance)
    offset = heights - (inverse @ heights).sum() / inverse.sum()
    return float(offset @ inverse @ offset) <= _WORST_CHI2 * (matched.size - 1)


def no_place_alone(match: Match, noise_ratio: float) -> bool:
    """Tell whether it outlives the loss of its best sixth."""
    del noise_ratio
    matched = match.matched[match.stretch].sum(axis=1)
    power = match.power[match.stretch].sum(axis=(1, 2))
    run = max(2, round(matched.size / 6))
    if matched.size <= run:
        return False
    ends = np.ones(run)
    top = matched.sum() - np.convolve(matched, ends, mode="valid")
    bottom = power.sum() - np.convolve(power, ends, mode="valid")
    left = top / np.sqrt(np.maximum(bottom, 1e-9 * power.sum()))
    return float(left.min()) >= _LEFT_WITHOUT_BEST * match.snr


def slender(match: Match, noise_ratio: float) -> bool:
    """Tell whether it is much longer than wide."""
    del noise_ratio
    width = FWHM_PER_SIGMA * match.ridge.sigma_px
    return match.length_px >= _LEAST_ASPECT * width


def _totals(match: Match) -> tuple[FloatArray, FloatArray]:
    matched = match.matched[match.stretch].sum(axis=0)
    return matched, match.power[match.stretch].sum(axis=0)


TESTS: tuple[Callable[[Match, float], bool], ...] = (
    slender,
    seen_at_enough_epochs,
    no_epoch_alone,
    even_in_time,
    no_place_alone,
)
"""What an echo must pass, cheapest first."""
