"""How much of one frame lies on another, from their corners on the sky."""

from __future__ import annotations

import numpy as np

from latelight.records import FloatArray

__all__ = ["overlap_fraction"]

# Points along each side of a frame; the fraction is good to about 1 / N.
_N = 32


def overlap_fraction(a: FloatArray, b: FloatArray) -> float:
    """Return the part of the smaller frame that lies on the other, 0 to 1.

    Parameters
    ----------
    a, b : float64 array, shape (4, 2)
        Corners in order round each frame: RA and Dec, degrees.
    """
    corners_a, corners_b = _unit_vectors(a), _unit_vectors(b)
    if not _near(corners_a, corners_b):
        return 0.0
    return max(_part_inside(corners_a, corners_b), _part_inside(corners_b, corners_a))


def _near(a: FloatArray, b: FloatArray) -> bool:
    """Whether the circles round two frames touch: most pairs of frames do not."""
    middle_a, middle_b = a.mean(axis=0), b.mean(axis=0)
    reach = np.linalg.norm(a - middle_a, axis=1).max()
    reach += np.linalg.norm(b - middle_b, axis=1).max()
    return bool(np.linalg.norm(middle_a - middle_b) <= reach)


def _part_inside(corners_a: FloatArray, corners_b: FloatArray) -> float:
    """Return the share of points spread evenly over ``a`` that lie inside ``b``."""
    u, v = np.meshgrid((np.arange(_N) + 0.5) / _N, (np.arange(_N) + 0.5) / _N)
    weights = [(1 - u) * (1 - v), u * (1 - v), u * v, (1 - u) * v]
    points = sum(w[..., None] * c for w, c in zip(weights, corners_a, strict=True))
    # Inside when on the same side of the four great circles through the corners
    # of b, the side its middle is on.
    inside = np.ones(u.shape, dtype=bool)
    for first, second in zip(corners_b, np.roll(corners_b, -1, axis=0), strict=True):
        normal = np.cross(first, second)
        inside &= (points @ normal) * (corners_b.sum(axis=0) @ normal) > 0
    return float(inside.mean())


def _unit_vectors(corners: FloatArray) -> FloatArray:
    ra, dec = np.radians(corners).T
    return np.stack(
        [np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=1
    )
