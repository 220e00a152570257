"""From a profile to shift, width and brightness with honest errors."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from latelight.motion.lobes import LobePrior, LobeTable, one_lobe_table, two_lobe_table
from latelight.motion.shapes import TAILS, standard_shape
from latelight.motion.strip import Profile
from latelight.records import FloatArray

__all__ = ["LobeFit", "PairGuess", "fit_one_lobe", "fit_pair", "search_lobes"]

_SEARCH_TAILS = (0.6, 4.0)
_SEARCH_WIDTHS = (0.65, 1.0, 1.5)
_ROUNDS = 2
_NODES = np.linspace(-1.0, 1.0, 13)
_RATIO_NODES = np.linspace(-2.4, 2.4, 7)
_SEARCH_RATIOS = np.linspace(-3.0, 3.0, 7)


@dataclass(frozen=True, slots=True)
class PairGuess:
    """What the coarse search found for one sense of motion.

    Attributes
    ----------
    late, early : float
        Places of the lobes, pixels along the normal.
    width : float
        Full width, pixels.
    sense : {1, -1}
        Motion along the normal or against it.
    gain : float
        ln of its probability.
    alone : float
        ln of the probability of the best single lobe, for this sense.
    log_evidence : float
        ln of the probability of this sense, averaged over one and two lobes and
        all their places and shapes.
    """

    late: float
    early: float
    width: float
    sense: int
    gain: float
    alone: float
    log_evidence: float


@dataclass(frozen=True, slots=True)
class LobeFit:
    """A profile's fit.

    Attributes
    ----------
    late, early : float
        Places of the lobes, pixels along the normal; NaN for one not seen.
    shift, shift_err : float
        Distance between them and 1 sigma, pixels; NaN with one lobe.
    width, width_err : float
        Full width at half maximum, PSF taken out, pixels, and 1 sigma.
    height_late, height_late_err, height_early, height_early_err : float
        Peak heights and 1 sigma, counts; NaN for a lobe not seen.
    model : float64 array
        Fitted profile at the profile's offsets, counts.
    full_width : float
        Full width at half maximum with the PSF, pixels.
    sense : {1, -1}
        Motion along the normal or against it.
    """

    late: float
    early: float
    shift: float
    shift_err: float
    width: float
    width_err: float
    height_late: float
    height_late_err: float
    height_early: float
    height_early_err: float
    model: FloatArray
    full_width: float
    sense: int


def search_lobes(
    profile: Profile,
    prior: LobePrior,
    *,
    anchor_sign: int,
    width: float,
    max_shift: float,
) -> tuple[PairGuess, PairGuess]:
    """Look for the other lobe on both sides of the traced one.

    Parameters
    ----------
    profile : Profile
        Later minus earlier epoch; the traced lobe is near offset 0.
    prior : LobePrior
        What is known beforehand.
    anchor_sign : {1, -1}
        Whether the traced lobe is of the later epoch or of the earlier.
    width : float
        Rough full width of a lobe, PSF included, pixels.
    max_shift : float
        Farthest place of the other lobe, pixels.

    Returns
    -------
    tuple of two PairGuess
        The best pair for motion along the normal, and against it.
    """
    near = np.arange(-3.0, 4.0) * max(0.25 * width, 0.7)
    step = max(0.35 * width, 1.0)
    steps = np.arange(1.0, max(np.floor(max_shift / step), 1.0) + 1.0)
    far = step * np.concatenate([-steps[::-1], [-0.5, 0.5], steps])
    shapes = [
        (
            max(
                width * scale,
                1.02 * prior.psf_fwhm / (2.3548 * standard_shape(t).sigma),
            ),
            t,
        )
        for scale in _SEARCH_WIDTHS
        for t in _SEARCH_TAILS
    ]
    ratios = np.exp(prior.ratio_scatter * _SEARCH_RATIOS)
    guesses = []
    for sense in (1, -1):
        alone, _ = one_lobe_table(
            profile, prior, places=near, shapes=shapes, sign=anchor_sign, sense=sense
        )
        late, early = (near, far) if anchor_sign > 0 else (far, near)
        table = two_lobe_table(
            profile,
            prior,
            late=late,
            early=early,
            shapes=shapes,
            ratios=ratios,
            sense=sense,
        )
        best = np.unravel_index(np.argmax(table.log_p), table.log_p.shape)
        i, j, k, _ = best
        guesses.append(
            PairGuess(
                late=float(late[j]),
                early=float(early[k]),
                width=float(table.widths[i]),
                sense=sense,
                gain=float(table.log_p[best]),
                alone=float(alone.max()),
                log_evidence=float(
                    np.logaddexp(_log_mean(alone), _log_mean(table.log_p))
                ),
            )
        )
    return guesses[0], guesses[1]


def fit_pair(profile: Profile, prior: LobePrior, guess: PairGuess) -> LobeFit:
    """Integrate the probability of two lobes around a guess.

    The grid is laid about the guess, then laid again about the mean and spread
    it gave.

    Parameters
    ----------
    profile : Profile
        Later minus earlier epoch.
    prior : LobePrior
        What is known beforehand.
    guess : PairGuess
        Where to begin.
    """
    reach = 0.6 * guess.width + 1.0
    late, early = (guess.late, reach), (guess.early, reach)
    width, spread = guess.width, 0.7
    tails: tuple[float, ...] = TAILS
    for number in range(_ROUNDS):
        shapes = [
            (width * np.exp(spread * step), tail)
            for step in np.linspace(-1.0, 1.0, 7)
            for tail in tails
        ]
        table = two_lobe_table(
            profile,
            prior,
            late=late[0] + late[1] * _NODES,
            early=early[0] + early[1] * _NODES,
            shapes=shapes,
            ratios=np.exp(prior.ratio_scatter * _RATIO_NODES),
            sense=guess.sense,
        )
        weight = np.exp(table.log_p - table.log_p.max())
        if number + 1 < _ROUNDS:
            late = _next_range(table.late, weight.sum(axis=(0, 2, 3)), late[1] / 6.0)
            early = _next_range(table.early, weight.sum(axis=(0, 1, 3)), early[1] / 6.0)
            by_shape = weight.sum(axis=(1, 2, 3))
            mean, half = _next_range(np.log(table.widths), by_shape, spread / 3.0)
            width, spread = float(np.exp(mean)), half
            tails = tuple(
                t
                for t in TAILS
                if by_shape[table.tails == t].sum() > 1e-3 * by_shape.sum()
            )
    return _summary(profile, prior, table, weight)


def _next_range(
    nodes: FloatArray, weight: FloatArray, step: float
) -> tuple[float, float]:
    """Return centre and half-length of the next grid: 3.5 sigma each way."""
    mean = float(np.average(nodes, weights=weight))
    variance = float(np.average((nodes - mean) ** 2, weights=weight))
    # A peak between two nodes has no spread on the grid.
    return mean, 3.5 * np.sqrt(variance + (0.35 * step) ** 2)


def _summary(
    profile: Profile, prior: LobePrior, table: LobeTable, weight: FloatArray
) -> LobeFit:
    places = weight.sum(axis=(0, 3))
    distance = table.sense * (table.late[:, None] - table.early[None, :])
    step = max(table.late[1] - table.late[0], table.early[1] - table.early[0])
    low, shift, high = _quantiles(distance[places > 0], places[places > 0])
    by_shape = weight.sum(axis=(1, 2, 3))
    intrinsic = np.sqrt(np.maximum(table.widths**2 - prior.psf_fwhm**2, 0.0))
    width, width_err = _mean_and_err(intrinsic, by_shape)
    late_height, late_err = _height(table.amplitude, weight)
    early_height, early_err = _height(table.amplitude * table.ratios, weight)
    i, j, k, n = np.unravel_index(np.argmax(table.log_p), table.log_p.shape)
    shape = standard_shape(float(table.tails[i]))
    model = table.amplitude[i, j, k, n] * (
        shape.at(profile.offsets - table.late[j], table.widths[i], table.sense)
        - table.ratios[n]
        * shape.at(profile.offsets - table.early[k], table.widths[i], table.sense)
    )
    return LobeFit(
        late=float(np.average(table.late, weights=places.sum(axis=1))),
        early=float(np.average(table.early, weights=places.sum(axis=0))),
        shift=shift,
        shift_err=max(0.5 * (high - low), 0.1 * step),
        width=width,
        width_err=width_err,
        height_late=late_height,
        height_late_err=late_err,
        height_early=early_height,
        height_early_err=early_err,
        model=model,
        full_width=float(np.average(table.widths, weights=by_shape)),
        sense=table.sense,
    )


def fit_one_lobe(
    profile: Profile,
    prior: LobePrior,
    *,
    sign: int,
    width: float,
    sense: int,
    tails: Sequence[float] = TAILS,
) -> LobeFit:
    """Fit a single lobe near offset 0.

    Parameters
    ----------
    profile : Profile
        Later minus earlier epoch.
    prior : LobePrior
        What is known beforehand.
    sign : {1, -1}
        Whether the lobe is of the later epoch or of the earlier one.
    width : float
        Rough full width, PSF included, pixels.
    sense : {1, -1}
        Motion along the normal or against it.
    tails : sequence of float
        Tails over sigma to try.

    Raises
    ------
    ValueError
        If nothing of that sign is there.
    """
    places = np.linspace(-1.0, 1.0, 17) * (0.5 * width + 1.0)
    shapes = [
        (width * np.exp(step), tail)
        for step in np.linspace(-0.7, 0.7, 7)
        for tail in tails
    ]
    log_p, amplitude = one_lobe_table(
        profile, prior, places=places, shapes=shapes, sign=sign, sense=sense
    )
    if not np.isfinite(log_p).any():
        msg = (
            "the arc must be a ridge of the sign it is said to have, got a profile "
            "without one"
        )
        raise ValueError(msg)
    weight = np.exp(log_p - log_p.max())
    widths = np.array([w for w, _ in shapes])
    i, j = np.unravel_index(np.argmax(log_p), log_p.shape)
    place = float(np.average(places, weights=weight.sum(axis=0)))
    height, height_err = _height(amplitude, weight)
    intrinsic = np.sqrt(np.maximum(widths**2 - prior.psf_fwhm**2, 0.0))
    narrow, narrow_err = _mean_and_err(intrinsic, weight.sum(axis=1))
    shape = standard_shape(shapes[i][1])
    nan = float("nan")
    late = (place, height, height_err) if sign > 0 else (nan, nan, nan)
    early = (place, height, height_err) if sign < 0 else (nan, nan, nan)
    return LobeFit(
        late=late[0],
        early=early[0],
        shift=nan,
        shift_err=nan,
        width=narrow,
        width_err=narrow_err,
        height_late=late[1],
        height_late_err=late[2],
        height_early=early[1],
        height_early_err=early[2],
        model=sign
        * amplitude[i, j]
        * shape.at(profile.offsets - places[j], shapes[i][0], sense),
        full_width=float(np.average(widths, weights=weight.sum(axis=1))),
        sense=sense,
    )


def _log_mean(log_p: FloatArray) -> float:
    """Return ln of the mean probability over the grid's possible points."""
    possible = log_p[np.isfinite(log_p)]
    if possible.size == 0:
        return -np.inf
    top = possible.max()
    return float(top + np.log(np.exp(possible - top).mean()))


def _mean_and_err(values: FloatArray, weight: FloatArray) -> tuple[float, float]:
    values = np.broadcast_to(values, weight.shape)
    mean = float((values * weight).sum() / weight.sum())
    variance = float(((values - mean) ** 2 * weight).sum() / weight.sum())
    return mean, float(np.sqrt(variance))


def _height(amplitude: FloatArray, weight: FloatArray) -> tuple[float, float]:
    """Return the geometric mean of amplitudes, and 1 sigma.

    Overlapping lobes leave a long tail of great heights that nearly cancel.
    """
    log = np.log(np.where(weight > 0.0, amplitude, 1.0))
    mean, err = _mean_and_err(log, weight)
    return float(np.exp(mean)), float(np.exp(mean) * err)


def _quantiles(values: FloatArray, weight: FloatArray) -> tuple[float, float, float]:
    """Return the 16, 50 and 84 % points of a weighted sample."""
    order = np.argsort(values, kind="stable")
    total = np.cumsum(weight[order])
    rank = (total - 0.5 * weight[order]) / total[-1]
    low, middle, high = np.interp([0.15866, 0.5, 0.84134], rank, values[order])
    return float(low), float(middle), float(high)
