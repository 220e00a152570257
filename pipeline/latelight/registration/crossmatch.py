"""Pairing the stars of two frames that are about aligned."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage, stats
from scipy.spatial import cKDTree

from latelight.records import FloatArray, IntArray

__all__ = ["Affine", "chance_log10", "fit_affine", "mutual_nearest", "vote_offset"]

_VOTE_BIN_PX = 2.0
# log10 of the chance that star places without relation agree as well.
_VOTE_LOG10 = -6.0


@dataclass(frozen=True, slots=True)
class Affine:
    """The map ``p -> matrix p + offset`` of points (x, y)."""

    matrix: FloatArray
    offset: FloatArray

    def __call__(self, points: FloatArray) -> FloatArray:
        """Move points, shape (n, 2)."""
        return points @ self.matrix.T + self.offset


def mutual_nearest(
    first: FloatArray, second: FloatArray, radius: float
) -> tuple[IntArray, IntArray]:
    """Pair points that are each other's nearest within a radius.

    Parameters
    ----------
    first, second : float64 array, shape (n, 2), (m, 2)
        Points on one grid.
    radius : float
        Largest distance.

    Returns
    -------
    first_index, second_index : int64 array, shape (n_pairs,)
        Rows of the pairs, in the order of ``first``.
    """
    if first.shape[0] == 0 or second.shape[0] == 0:
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    distance, there = cKDTree(second).query(first, distance_upper_bound=radius)
    _, back = cKDTree(first).query(second)
    index = np.flatnonzero(np.isfinite(distance))
    index = index[back[there[index]] == index]
    return index.astype(np.int64), there[index].astype(np.int64)


def chance_log10(n_matched: int, n_tried: int, probability: float) -> float:
    """Return log10 of the chance of that many matches or more by accident."""
    log_chance = stats.binom.logsf(n_matched - 1, n_tried, min(probability, 1.0))
    return float(log_chance / np.log(10.0))


def vote_offset(
    first: FloatArray, second: FloatArray, reach: float
) -> FloatArray | None:
    """Find the offset that most pairs of points agree on.

    Parameters
    ----------
    first, second : float64 array, shape (n, 2), (m, 2)
        Points on one grid, up to a shift.
    reach : float
        Largest shift in each coordinate.

    Returns
    -------
    float64 array, shape (2,), or None
        What to add to ``first``; None when no offset has more votes than
        chance gives.
    """
    apart = (second[None, :, :] - first[:, None, :]).reshape(-1, 2)
    apart = apart[np.abs(apart).max(axis=1, initial=0.0) <= reach]
    if apart.shape[0] == 0:
        return None
    n_bins = 2 * int(np.ceil(reach / _VOTE_BIN_PX)) + 1
    edge = 0.5 * n_bins * _VOTE_BIN_PX
    votes, _, _ = np.histogram2d(
        apart[:, 0], apart[:, 1], bins=n_bins, range=((-edge, edge), (-edge, edge))
    )
    # Three bins wide, so that a true peak never falls between two of them.
    summed = ndimage.uniform_filter(votes, size=3, mode="constant") * 9.0
    top = np.array(np.unravel_index(np.argmax(summed), summed.shape))
    expected = apart.shape[0] * 9.0 / n_bins**2
    chance = stats.poisson.logsf(round(summed[tuple(top)]) - 1, expected)
    if (chance + np.log(n_bins**2)) / np.log(10.0) > _VOTE_LOG10:
        return None
    center = (top + 0.5) * _VOTE_BIN_PX - edge
    near = np.abs(apart - center).max(axis=1) <= 1.5 * _VOTE_BIN_PX
    return np.median(apart[near], axis=0)


def fit_affine(first: FloatArray, second: FloatArray) -> Affine:
    """Return the affine map of least squares, the worst residuals left out.

    Parameters
    ----------
    first, second : float64 array, shape (n, 2)
        Paired points, n >= 3.
    """
    center = first.mean(axis=0)
    design = np.column_stack([np.ones(first.shape[0]), first - center])
    kept = np.ones(first.shape[0], dtype=bool)
    for _ in range(5):
        normal = np.linalg.pinv(design[kept].T @ design[kept], hermitian=True)
        solution = normal @ (design[kept].T @ second[kept])
        miss = np.hypot(*(second - design @ solution).T)
        now = miss <= 3.0 * np.median(miss[kept]) + 1e-6
        if now.sum() < 4 or np.array_equal(now, kept):
            break
        kept = now
    matrix = solution[1:].T
    return Affine(matrix, solution[0] - matrix @ center)
