"""One moving ridge against all epochs, with the exact projected likelihood.

For a ridge ``m_i`` (its model at epoch i, peak 1) and the static sky free in every
pixel, the brightnesses A_i obey ``power A = matched`` with

    matched_i = sum w_i m_i R_i,
    power_ij = sum delta_ij w_i m_i^2 - w_i w_j m_i m_j / sum_k w_k,

sums over the pixels (partitioned least squares).  One brightness for all epochs
has the significance ``sum_i matched_i / sqrt(sum_ij power_ij)``.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from latelight.motion.velocity_stack._kernels import ridge_sums
from latelight.motion.velocity_stack.levels import Moving
from latelight.motion.velocity_stack.trials import Guess, Passage
from latelight.records import FloatArray

__all__ = ["BLOCK_PX", "Match", "MovingRidge", "Reach", "follow", "refine"]

BLOCK_PX = 8.0
"""Length of the pieces in which a ridge is matched, pixels."""
_ROUNDS = 4
_HOPELESS = 0.85
"""Rarely does finer fitting raise a significance by more than a seventh."""
_LEAST_SHARE = 0.05
"""Blocks with less of the typical information end no ridge."""


@dataclass(frozen=True, slots=True)
class MovingRidge:
    """A parabola, Gaussian across, that moves along its normal at an even speed.

    Attributes
    ----------
    x, y : float
        A point on it at the middle of all epochs, pixels.
    angle : float
        Pixel angle of the normal there, radians.
    curvature : float
        1 / radius there, 1/pixel; positive when the centre lies on the normal's side.
    shift_px : float
        Distance moved along the normal over all epochs, pixels.
    sigma_px : float
        Sigma across, pixels.
    """

    x: float
    y: float
    angle: float
    curvature: float
    shift_px: float
    sigma_px: float

    def moved(self, along: float, across: float = 0.0) -> MovingRidge:
        """Return the same ridge, described from a place along it, or one beside it."""
        turn = self.curvature * along
        inward = across + 0.5 * turn * along
        cosine, sine = np.cos(self.angle), np.sin(self.angle)
        return replace(
            self,
            x=self.x + inward * cosine - along * sine,
            y=self.y + inward * sine + along * cosine,
            angle=self.angle - np.arctan(turn),
        )


@dataclass(frozen=True, slots=True)
class Reach:
    """Limits of what is fitted, pixels.

    Attributes
    ----------
    half_length : float
        Half the length looked at.
    shift : float
        Greatest distance moved.
    sigma : (float, float)
        Least and greatest sigma across.
    curvature : float
        Greatest curvature, 1/pixel.
    """

    half_length: float
    shift: float
    sigma: tuple[float, float]
    curvature: float


@dataclass(frozen=True, slots=True)
class Match:
    """A moving ridge matched to the epochs.

    Attributes
    ----------
    ridge : MovingRidge
        The ridge.
    along : float64 array, shape (n_blocks,)
        Middle of each block along it, pixels.
    matched : float64 array, shape (n_blocks, n)
        Of each block and epoch.
    power : float64 array, shape (n_blocks, n, n)
        Of each block.
    area : float64 array, shape (n_blocks, n)
        Share of the model on good pixels.
    first, last : int
        Best stretch of blocks, inclusive.
    snr : float
        Significance of that stretch, one brightness for all, not calibrated.
    """

    ridge: MovingRidge
    along: FloatArray
    matched: FloatArray
    power: FloatArray
    area: FloatArray
    first: int
    last: int
    snr: float

    @property
    def stretch(self) -> slice:
        """The best stretch of blocks."""
        return slice(self.first, self.last + 1)

    @property
    def length_px(self) -> float:
        """Its length, pixels."""
        return BLOCK_PX * (self.last - self.first + 1)

    @property
    def middle_px(self) -> float:
        """Its middle along the ridge, pixels."""
        return 0.5 * float(self.along[self.first] + self.along[self.last])


def follow(
    moving: Moving,
    passage: Passage,
    ridge: MovingRidge,
    half_length: float,
) -> Match:
    """Match a ridge to all epochs and find its best stretch.

    Parameters
    ----------
    moving : Moving
        Weighted residuals, without what other ridges explain.
    passage : Passage
        Times of the epochs.
    ridge : MovingRidge
        What is matched.
    half_length : float
        How far to both sides of its middle, pixels.
    """
    n, n_blocks = passage.phase.size, 2 * int(np.ceil(half_length / BLOCK_PX))
    matched = np.empty((n_blocks, n))
    power, area = np.empty((n_blocks, n, n)), np.empty((n_blocks, n))
    ridge_sums(
        moving.weight,
        moving.signal,
        moving.total,
        ridge.shift_px * passage.phase,
        ridge.x,
        ridge.y,
        ridge.angle,
        ridge.curvature,
        ridge.sigma_px,
        BLOCK_PX,
        matched,
        power,
        area,
    )
    along = BLOCK_PX * (np.arange(n_blocks, dtype=float) - 0.5 * (n_blocks - 1))
    first, last, snr = _best_stretch(
        matched.sum(axis=1), np.maximum(power.sum(axis=(1, 2)), 0.0)
    )
    return Match(ridge, along, matched, power, area, first, last, snr)


def _best_stretch(matched: FloatArray, power: FloatArray) -> tuple[int, int, float]:
    """Return the run of blocks around the middle of greatest significance."""
    n = matched.size
    a = np.concatenate([[0.0], np.cumsum(matched)])
    b = np.concatenate([[0.0], np.cumsum(power)])
    # First blocks up to the middle, last ones from there on.
    top = a[None, n // 2 + 1 :] - a[: n // 2, None]
    bottom = b[None, n // 2 + 1 :] - b[: n // 2, None]
    value = top / np.sqrt(np.maximum(bottom, _LEAST_SHARE * b[-1] / n + 1e-30))
    first, last = np.unravel_index(int(np.argmax(value)), value.shape)
    return int(first), int(last) + n // 2, float(value[first, last])


def refine(
    moving: Moving,
    passage: Passage,
    guess: Guess,
    reach: Reach,
    least_snr: float,
) -> Match:
    """Improve a guess: place, angle, shift, width and curvature, one after another.

    A compass search (Hooke & Jeeves 1961, doi:10.1145/321062.321069, from memory):
    every parameter is tried a step to both sides, and the steps are halved when
    nothing is gained.  A guess that stays far below ``least_snr`` is given up.
    """
    ridge = MovingRidge(
        guess.x, guess.y, guess.angle, 0.0, guess.shift_px, guess.sigma_px
    )
    best = follow(moving, passage, ridge, 0.5 * reach.half_length)
    steps = np.array([0.5 * guess.sigma_px, 0.05, 0.75 * guess.sigma_px, 0.25, 0.0015])
    for halving in range(_ROUNDS):
        half_length = reach.half_length * (0.5 if halving == 0 else 1.0)
        best = follow(moving, passage, _centred(best), half_length)
        best = _settled(moving, passage, best, steps, reach, half_length)
        if best.snr < _HOPELESS * least_snr:
            break
        steps *= 0.5
    return best


def _settled(
    moving: Moving,
    passage: Passage,
    best: Match,
    steps: FloatArray,
    reach: Reach,
    half_length: float,
) -> Match:
    """Try steps of every parameter until none gains, at most three times over."""
    for _ in range(3):
        before = best.snr
        for index in range(steps.size):
            for trial in _neighbours(best.ridge, index, float(steps[index]), reach):
                match = follow(moving, passage, trial, half_length)
                if match.snr > best.snr:
                    best = match
                    break
        if best.snr < before + 0.02:
            break
    return best


def _centred(match: Match) -> MovingRidge:
    """Describe a ridge from the middle of its best stretch."""
    return match.ridge.moved(match.middle_px)


def _neighbours(
    ridge: MovingRidge, index: int, step: float, reach: Reach
) -> Iterable[MovingRidge]:
    """Yield the ridges a step away in one parameter, inside the limits."""
    for signed in (step, -step):
        if index == 0:
            yield ridge.moved(0.0, signed)
        elif index == 1:
            yield replace(ridge, angle=ridge.angle + signed)
        elif index == 2:
            shift = ridge.shift_px + signed
            if 2.0 * ridge.sigma_px < abs(shift) <= reach.shift:
                yield replace(ridge, shift_px=shift)
        elif index == 3:
            sigma = ridge.sigma_px * float(np.exp(signed))
            if reach.sigma[0] <= sigma <= reach.sigma[1]:
                yield replace(ridge, sigma_px=sigma)
        else:
            curvature = ridge.curvature + signed
            if abs(curvature) <= reach.curvature:
                yield replace(ridge, curvature=curvature)
