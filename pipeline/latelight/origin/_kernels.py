"""Compiled loops of the joint map: likelihood ratios of many origins and arcs."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from latelight.records import FloatArray, IntArray

__all__ = ["Asked", "climb", "detailed_ratios", "marginal_ratios"]

# So many factors cannot leave the range of a double: each lies between 1e-3 and 1e3.
_BLOCK = 60
_MAX_STEPS = 400


class Asked(NamedTuple):
    """What the loops need to know of n arcs and their laws.

    Attributes
    ----------
    frames : float64 array, shape (n, 3, 3)
        Place, motion and pole of each arc; sorted by weight.
    class_of : int64 array, shape (n,)
        Row of ``ratio`` for each.
    weight : float64 array, shape (n,)
        Share of an independent arc.
    per_base : float64 array, shape (n,)
        Gain from elsewhere over the likelihood ratio without the origin asked for.
    ratio : float64 array, shape (n_classes, n_nodes, n_laws)
        Likelihood ratio by pseudo angle of the turn.
    prior : float64 array, shape (n_laws,)
        How likely each law is.
    shares : float64 array, shape (n_shares,)
        Shares of the arcs that the origin may have lit.
    cos_reach : float64 array, shape (n_reaches,)
        Cosines of its reaches, falling.
    """

    frames: FloatArray
    class_of: IntArray
    weight: FloatArray
    per_base: FloatArray
    ratio: FloatArray
    prior: FloatArray
    shares: FloatArray
    cos_reach: FloatArray


@njit(nogil=True, cache=True)
def _flush(
    product: FloatArray, count: IntArray, total: FloatArray, weight: float
) -> None:
    """Add the logarithms of the products so far and start anew."""
    for ring in range(product.shape[0]):
        if count[ring] == 0:
            continue
        count[ring] = 0
        for share in range(product.shape[1]):
            for law in range(product.shape[2]):
                total[ring, share, law] += weight * np.log(product[ring, share, law])
                product[ring, share, law] = 1.0


@njit(nogil=True, cache=True)
def _sum_logs(
    point: FloatArray,
    asked: Asked,
    product: FloatArray,
    count: IntArray,
    total: FloatArray,
) -> None:
    """Fill ``total[reach, share, law]`` with the log likelihood ratio of one origin."""
    n_shares, n_laws, n_rings = asked.shares.size, asked.prior.size, count.size
    half = 0.5 * (asked.ratio.shape[1] - 1)
    total[:] = 0.0
    product[:] = 1.0
    count[:] = 0
    looked = np.empty(n_laws)
    for arc in range(asked.frames.shape[0]):
        if arc > 0 and asked.weight[arc] != asked.weight[arc - 1]:
            _flush(product, count, total, asked.weight[arc - 1])
        f = asked.frames[arc]
        near = f[0, 0] * point[0] + f[0, 1] * point[1] + f[0, 2] * point[2]
        if near < asked.cos_reach[n_rings - 1]:
            continue
        ring = 0
        while near < asked.cos_reach[ring]:
            ring += 1
        ahead = -(f[1, 0] * point[0] + f[1, 1] * point[1] + f[1, 2] * point[2])
        side = abs(f[2, 0] * point[0] + f[2, 1] * point[1] + f[2, 2] * point[2])
        size = side + abs(ahead)
        if size < 1e-9:
            continue  # on the arc itself: no direction is away
        part = side / size
        at = (part if ahead >= 0.0 else 2.0 - part) * half
        low = min(int(at), asked.ratio.shape[1] - 2)
        part = at - low
        row = asked.class_of[arc]
        for law in range(n_laws):
            below, above = asked.ratio[row, low, law], asked.ratio[row, low + 1, law]
            looked[law] = (below + part * (above - below)) * asked.per_base[arc] - 1.0
        for share in range(n_shares):
            for law in range(n_laws):
                product[ring, share, law] *= 1.0 + asked.shares[share] * looked[law]
        count[ring] += 1
        if count[ring] == _BLOCK:
            _flush(product, count, total, asked.weight[arc])
    if asked.frames.shape[0] > 0:
        _flush(product, count, total, asked.weight[asked.frames.shape[0] - 1])
    # An origin of a long reach has the arcs of the shorter ones too.
    for ring in range(1, n_rings):
        for share in range(n_shares):
            for law in range(n_laws):
                total[ring, share, law] += total[ring - 1, share, law]


@njit(nogil=True, cache=True)
def _mean(total: FloatArray, prior: FloatArray) -> float:
    """Return the logarithm of the mean of exp(total) over reaches, shares and laws."""
    top = total.max()
    mean = 0.0
    for ring in range(total.shape[0]):
        for share in range(total.shape[1]):
            for law in range(total.shape[2]):
                gap = total[ring, share, law] - top
                if gap > -30.0:
                    mean += prior[law] * np.exp(gap)
    return float(top + np.log(mean / (total.shape[0] * total.shape[1])))


@njit(nogil=True, cache=True)
def detailed_ratios(
    points: FloatArray, asked: Asked, out: FloatArray, first: int, last: int
) -> None:
    """Fill ``out[point, reach, share, law]`` with log likelihood ratios."""
    product = np.empty((asked.cos_reach.size, asked.shares.size, asked.prior.size))
    count = np.zeros(asked.cos_reach.size, np.int64)
    for row in range(first, last):
        _sum_logs(points[row], asked, product, count, out[row])


@njit(nogil=True, cache=True)
def marginal_ratios(
    points: FloatArray, asked: Asked, out: FloatArray, first: int, last: int
) -> None:
    """Fill ``out[point]`` with log likelihood ratios, averaged over the unknowns."""
    product = np.empty((asked.cos_reach.size, asked.shares.size, asked.prior.size))
    total = np.empty_like(product)
    count = np.zeros(asked.cos_reach.size, np.int64)
    for row in range(first, last):
        _sum_logs(points[row], asked, product, count, total)
        out[row] = _mean(total, asked.prior)


@njit(nogil=True, cache=True)
def _moved(point: FloatArray, east: float, north: float) -> FloatArray:
    """Return a unit vector moved by small amounts along two tangents, radians."""
    # Any tangent will do: square to the axis that the point is farthest from.
    axis = np.zeros(3)
    axis[np.argmin(np.abs(point))] = 1.0
    one = np.cross(axis, point)
    one /= np.sqrt((one * one).sum())
    two = np.cross(point, one)
    new = point + east * one + north * two
    return new / np.sqrt((new * new).sum())


@njit(nogil=True, cache=True)
def climb(
    points: FloatArray,
    steps: FloatArray,
    asked: Asked,
    shrink: int,
    values: FloatArray,
    first: int,
    last: int,
) -> None:
    """Move points uphill in place; ``values`` gets their log likelihood ratios.

    A compass search: the best of four neighbours at a distance that halves, ``shrink``
    times, when none is better.
    """
    product = np.empty((asked.cos_reach.size, asked.shares.size, asked.prior.size))
    total = np.empty_like(product)
    count = np.zeros(asked.cos_reach.size, np.int64)
    for row in range(first, last):
        here = points[row].copy()
        _sum_logs(here, asked, product, count, total)
        value = _mean(total, asked.prior)
        step, halved = steps[row], 0
        for _ in range(_MAX_STEPS):
            best, found = value, here
            for side in range(4):
                size = step if side < 2 else -step
                east = size if side % 2 == 0 else 0.0
                trial = _moved(here, east, size - east)
                _sum_logs(trial, asked, product, count, total)
                score = _mean(total, asked.prior)
                if score > best:
                    best, found = score, trial
            if best > value:
                value, here = best, found
                continue
            halved += 1
            if halved > shrink:
                break
            step *= 0.5
        points[row] = here
        values[row] = value
