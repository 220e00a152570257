"""Find the likeliest place of an origin, anywhere on the sky and at any scale.

Where the great circles of two motions cross behind both arcs is where they would
come from; the crossings of all pairs are as dense as the arcs allow, close to them and
far away.  The best of them are moved uphill.
"""

from __future__ import annotations

import numpy as np
from scipy.spatial import KDTree

from latelight.origin.joint_arcs import MovingArcs
from latelight.origin.joint_likelihood import OriginLikelihood
from latelight.records import FloatArray, IntArray

__all__ = ["PairList", "best_origin", "choose_pairs"]

PairList = IntArray

_FEWEST_PAIRS, _MOST_PAIRS = 1000, 3000
# Pairs times arcs.
_EFFORT = 1e6
_NEIGHBOURS = 24
_STARTS = 6
_SHRINK = 6
# A sense this doubtful leaves both ends of the circle open.
_DOUBTFUL = 0.02


def choose_pairs(
    arcs: MovingArcs, rng: np.random.Generator, *, most: int = 0
) -> PairList:
    """Return the pairs of arcs whose crossings are tried, shape (m, 2).

    All of them, or a sample: half among neighbours, half of any distance, so that an
    origin that lit few of many arcs is not missed.

    Parameters
    ----------
    arcs : MovingArcs
        The arcs.
    rng : numpy.random.Generator
        Draws the sample.
    most : int
        Size of the sample; by default what the number of arcs allows.
    """
    n = len(arcs)
    most = most or int(np.clip(_EFFORT / max(n, 1), _FEWEST_PAIRS, _MOST_PAIRS))
    if n * (n - 1) // 2 <= most:
        return np.stack(np.triu_indices(n, 1), axis=1)
    half = most // 2
    first = rng.integers(n, size=2 * half)
    second = (first + rng.integers(1, n, size=2 * half)) % n
    _, near = KDTree(arcs.frames[:, 0]).query(
        arcs.frames[first[:half], 0], k=min(_NEIGHBOURS, n)
    )
    second[:half] = near[np.arange(half), rng.integers(1, near.shape[1], half)]
    pairs = np.stack([first, second], axis=1)
    return pairs[first != second]


def best_origin(
    likelihood: OriginLikelihood, pairs: PairList, *, extra: FloatArray | None = None
) -> tuple[FloatArray, float]:
    """Return the likeliest origin.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of an origin, given the arcs and the origins found so far.
    pairs : int array, shape (m, 2)
        From :func:`choose_pairs`.
    extra : float64 array, shape (k, 3), optional
        Further places to start from.

    Returns
    -------
    origin : float64 array, shape (3,)
        Unit vector.
    value : float
        Its natural log likelihood ratio; minus infinity when no two circles cross.
    """
    points, scales = _crossings(likelihood.arcs, pairs)
    if extra is not None:
        points = np.concatenate([points, extra])
        scales = np.concatenate([scales, np.full(len(extra), scales.max(initial=0.1))])
    if not len(points):
        return np.array([1.0, 0.0, 0.0]), -np.inf
    values = likelihood.marginal(points)
    starts = _apart(points, values, scales)
    found, values = likelihood.climb(
        points[starts], 0.25 * scales[starts], shrink=_SHRINK
    )
    best = int(np.argmax(values))
    return found[best], float(values[best])


def _crossings(arcs: MovingArcs, pairs: PairList) -> tuple[FloatArray, FloatArray]:
    """Return where circles cross, and the distance to the nearer arc, radians."""
    one, two = arcs.frames[pairs[:, 0]], arcs.frames[pairs[:, 1]]
    cross = np.cross(one[:, 2], two[:, 2])
    size = np.linalg.norm(cross, axis=1, keepdims=True)
    point = cross / np.where(size > 0.0, size, 1.0)
    both = np.concatenate([point, -point])
    one, two = np.concatenate([one, one]), np.concatenate([two, two])
    open_ended = np.tile(arcs.wrong_sense > _DOUBTFUL, 1)
    index = np.concatenate([pairs, pairs])
    fit = np.tile(size[:, 0] > 1e-12, 2)
    for end, frame in enumerate((one, two)):
        behind = np.einsum("ij,ij->i", frame[:, 1], both) < 0.0
        within = np.einsum("ij,ij->i", frame[:, 0], both) > 0.0
        fit &= within & (behind | open_ended[index[:, end]])
    gap = np.minimum(
        np.linalg.norm(one[:, 0] - both, axis=1),
        np.linalg.norm(two[:, 0] - both, axis=1),
    )
    return both[fit], gap[fit]


def _apart(points: FloatArray, values: FloatArray, scales: FloatArray) -> IntArray:
    """Return the best points that are not each other's neighbours."""
    chosen: list[int] = []
    for index in np.argsort(-values, kind="stable")[:200]:
        near = any(
            np.linalg.norm(points[index] - points[other]) < 0.3 * scales[other]
            for other in chosen
        )
        if not near:
            chosen.append(int(index))
        if len(chosen) == _STARTS:
            break
    return np.array(chosen)
