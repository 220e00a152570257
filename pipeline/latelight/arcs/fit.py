"""Local fit of one arc: circle, stretch and two-lobed profile together.

The difference is summed in polar bins around a seed.  Two steps alternate: with
the circle and stretch fixed, the best pair of lobes is found from the profile
across; with the profile fixed, slope, bend and stretch follow from one number a
block and shift.  The last step is linear in all of them and gives the errors.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.arcs._kernels import block_matches, polar_sums, search_bends
from latelight.arcs.geometry import Circle
from latelight.arcs.lobes import Lobes, find_lobes
from latelight.arcs.profiles import LobeShapes, fine_shapes
from latelight.arcs.search import Seed
from latelight.records import Difference, FloatArray

__all__ = [
    "BLOCK_PX",
    "Fit",
    "PolarSums",
    "Reach",
    "fit_seed",
    "level_free",
    "refine_fit",
    "sum_along",
]

BLOCK_PX = 8.0
"""Length along the arc that shares one sum: short against the shortest arc."""
_SEED_REACH_PX = 14
"""How far from the seed a lobe may lie: half the widest pair of the bank."""
_LOBE_REACH_PX = 6
_SHIFT_PX = 30
_WIDE = (np.linspace(-0.16, 0.16, 11), np.linspace(-1.0, 1.0, 9))
_FINE = (np.linspace(-0.04, 0.04, 9), np.linspace(-0.25, 0.25, 7))
_STILL = (np.zeros(1), np.zeros(1))


@dataclass(frozen=True, slots=True)
class Reach:
    """How far an arc is looked for around a seed.

    Attributes
    ----------
    half_height : int
        Across, pixels.
    half_length : float
        Along, pixels.
    curvature : float
        Strongest curvature, 1/pixel.
    """

    half_height: int
    half_length: float
    curvature: float


@dataclass(frozen=True, slots=True)
class PolarSums:
    """Sums by block along and pixel across an arc.

    Attributes
    ----------
    along : float64 array, shape (n,)
        Middles of the blocks, pixels.
    signal, weight, count : float64 array, shape (n, m)
        Sum of D/V and of 1/V over unmasked pixels, and their number.
    """

    along: FloatArray
    signal: FloatArray
    weight: FloatArray
    count: FloatArray


@dataclass(frozen=True, slots=True)
class Fit:
    """A fitted arc.

    Attributes
    ----------
    circle : Circle
        Through the brighter lobe of the pair at the middle of the stretch.
    half_length : float
        Half the stretch, pixels.
    first, last : float
        Ends of the ridge along the circle, pixels; at first those of the stretch.
    pair, single : Lobes
        Best pair of opposite lobes, and best single lobe.
    slope_err : float
        1 sigma of the normal's angle, radians, for noise as stated by the variance.
    bend, bend_err : float
        Curvature without the prior, and 1 sigma, 1/pixel.
    """

    circle: Circle
    half_length: float
    first: float
    last: float
    pair: Lobes
    single: Lobes
    slope_err: float = float("nan")
    bend: float = float("nan")
    bend_err: float = float("nan")


def sum_along(
    difference: Difference, circle: Circle, half_length: float, half_height: int
) -> PolarSums:
    """Sum a difference in polar bins, ``half_length`` pixels either side."""
    n_blocks = max(2 * round(half_length / BLOCK_PX), 2)
    shape = (n_blocks, 2 * half_height + 1)
    signal, weight, count = np.zeros(shape), np.zeros(shape), np.zeros(shape)
    polar_sums(
        difference.pixels,
        difference.variance,
        difference.mask,
        circle.x,
        circle.y,
        np.cos(circle.angle),
        np.sin(circle.angle),
        circle.curvature,
        BLOCK_PX,
        signal,
        weight,
        count,
    )
    along = BLOCK_PX * (np.arange(n_blocks, dtype=float) - 0.5 * (n_blocks - 1))
    return PolarSums(along, signal, weight, count)


def fit_seed(
    difference: Difference, seed: Seed, shapes: LobeShapes, reach: Reach
) -> Fit | None:
    """Fit an arc at a seed.

    Parameters
    ----------
    difference : Difference
        The difference.
    seed : Seed
        Where to start.
    shapes : LobeShapes
        Coarse bank of lobe profiles.
    reach : Reach
        How far to look.

    Returns
    -------
    Fit or None
        None where nothing arc-like is left.
    """
    circle = Circle(seed.x, seed.y, seed.angle, 0.0)
    half, lobe_reach = 1.5 * seed.length_px, _SEED_REACH_PX
    for grid in (_WIDE, _FINE, _STILL):
        sums = sum_along(difference, circle, reach.half_length, reach.half_height)
        found = _lobes_within(sums, half, shapes, lobe_reach)
        if found is None:
            return None
        slopes, bends = grid
        slope, bend, first, last = _bend(
            sums, found[0], slopes, bends * reach.curvature
        )
        half = 0.5 * (last - first)
        circle = circle.bent(slope, bend)
        circle = circle.moved(0.5 * (first + last), found[0].brighter)
        lobe_reach = _LOBE_REACH_PX
    sums = sum_along(difference, circle, half, reach.half_height)
    found = _lobes_within(sums, np.inf, shapes, lobe_reach)
    if found is None:
        return None
    where = found[0].brighter
    return Fit(
        circle.moved(0.0, where),
        half,
        -half,
        half,
        found[0].seen_from(where),
        found[1].seen_from(where),
    )


def _lobes_within(
    sums: PolarSums, half: float, shapes: LobeShapes, lobe_reach: int
) -> tuple[Lobes, Lobes] | None:
    stretch = np.abs(sums.along) <= half
    return find_lobes(
        sums.signal[stretch].sum(axis=0),
        sums.weight[stretch].sum(axis=0),
        shapes,
        reach=lobe_reach,
    )


def _bend(
    sums: PolarSums, lobes: Lobes, slopes: FloatArray, bends: FloatArray
) -> tuple[float, float, float, float]:
    """Return slope, bend and the ends of the stretch that fit a profile best."""
    template = lobes.profile(sums.signal.shape[1] // 2)
    used = np.nonzero(np.abs(template) > 0.02 * np.abs(template).max())[0]
    shape = (sums.along.size, 2 * _SHIFT_PX + 1)
    matched, power = np.empty(shape), np.empty(shape)
    signal = level_free(sums)
    block_matches(
        signal,
        sums.weight,
        template,
        int(used[0]),
        int(used[-1]) + 1,
        matched,
        power,
    )
    middle = sums.along.size // 2
    best = np.zeros(5)
    search_bends(
        matched, power, sums.along, slopes, bends, middle - 2, middle + 1, best
    )
    _, slope, bend, first, last = best.tolist()
    edge = 0.5 * BLOCK_PX
    return (
        slope,
        bend,
        float(sums.along[int(first)]) - edge,
        float(sums.along[int(last)]) + edge,
    )


def level_free(sums: PolarSums) -> FloatArray:
    """Return the signal with each block's own mean taken out."""
    total = np.maximum(sums.weight.sum(axis=1, keepdims=True), 1e-30)
    level = sums.signal.sum(axis=1, keepdims=True) / total
    return sums.signal - level * sums.weight


def refine_fit(
    difference: Difference, fit: Fit, shapes: LobeShapes, reach: Reach
) -> Fit:
    """Refine lobes and circle at sub-pixel steps, with errors.

    Parameters
    ----------
    difference : Difference
        The difference.
    fit : Fit
        What :func:`fit_seed` found.
    shapes : LobeShapes
        Coarse bank of lobe profiles; a finer one is made around the fitted lobe.
    reach : Reach
        How far across to look.
    """
    for _ in range(2):
        sums = sum_along(difference, fit.circle, fit.half_length, reach.half_height)
        bank = fine_shapes(
            fit.pair.sigma_px,
            fit.pair.tail_px,
            fwhm_px=difference.fwhm_px,
            n_shifts=shapes.overlap.shape[1],
        )
        found = _lobes_within(sums, np.inf, bank, _LOBE_REACH_PX)
        if found is None:
            return fit
        pair, single = found
        step = _gauss_newton(sums, pair, 0.5 * reach.curvature)
        where = pair.brighter
        circle = fit.circle.bent(step.slope, step.bend)
        fit = Fit(
            circle.moved(0.0, step.offset + where),
            fit.half_length,
            fit.first,
            fit.last,
            pair.seen_from(where),
            single.seen_from(where),
            step.slope_err,
            fit.circle.curvature + step.free_bend,
            step.free_bend_err,
        )
    return fit


@dataclass(frozen=True, slots=True)
class _Step:
    offset: float
    slope: float
    bend: float
    slope_err: float
    free_bend: float
    free_bend_err: float


def _gauss_newton(sums: PolarSums, lobes: Lobes, bend_prior: float) -> _Step:
    """Return offset, slope and bend of the arc against its circle, and errors.

    The profile p moved by ``d(s) = offset + slope s + bend s^2 / 2`` is ``p - d p'``
    to first order: a linear fit, with a Gaussian prior on the bend.
    """
    profile = lobes.profile(sums.signal.shape[1] // 2)
    steepness = np.gradient(profile)
    s = sums.along[:, None]
    terms = np.array(
        [
            np.broadcast_to(profile, sums.signal.shape),
            -np.ones_like(s) * steepness,
            -s * steepness,
            -0.5 * s**2 * steepness,
        ]
    ).reshape(4, -1)
    normal = (terms * sums.weight.ravel()) @ terms.T
    normal += np.diag(1e-9 * np.diag(normal) + 1e-30)
    right = terms @ level_free(sums).ravel()
    free_covariance = np.linalg.inv(normal)
    free = free_covariance @ right
    normal[3, 3] += 1.0 / bend_prior**2
    covariance = np.linalg.inv(normal)
    amplitude, offset, slope, bend = covariance @ right
    amplitude = max(float(amplitude), 0.3)
    # A step beyond a few pixels has left the linear range.
    offset, slope, bend = (
        float(np.clip(value / amplitude, -limit, limit))
        for value, limit in zip((offset, slope, bend), (3.0, 0.1, 0.003), strict=True)
    )
    return _Step(
        offset,
        slope,
        bend,
        float(np.sqrt(covariance[2, 2])),
        float(free[3]) / amplitude,
        float(np.sqrt(free_covariance[3, 3])),
    )
