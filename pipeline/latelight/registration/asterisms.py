"""Matching star patterns when nothing is known of shift, rotation or mirroring.

Triangles of neighbouring bright stars are compared by the ratios of their sides
(Groth 1986, AJ 91, 1244, doi:10.1086/114099); each likeness proposes a
similarity, mirrored or not, which is judged by how many bright stars it brings
onto one another.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from latelight.records import BoolArray, FloatArray, IntArray
from latelight.registration.crossmatch import Affine, chance_log10

__all__ = ["match_asterisms"]

_NEIGHBOURS = 8
# Sides below 20 px are not known well enough; thin triangles say little.
_MIN_SIDE_PX, _MIN_RATIO = 20.0, 0.15
_RATIO_TOLERANCE = 0.015
_ALIKE = 8
_MAX_PROPOSALS, _BATCH = 6000, 250
_SCALES = (0.25, 4.0)
# log10 of the chance, all trials counted: enough, and enough to stop looking.
_ACCEPT_LOG10, _CERTAIN_LOG10 = -5.0, -15.0

ComplexArray = NDArray[np.complex128]


def match_asterisms(
    first: FloatArray, second: FloatArray, *, radius: float
) -> Affine | None:
    """Find the similarity between two lists of bright stars.

    Parameters
    ----------
    first, second : float64 array, shape (n, 2), (m, 2)
        Places (x, y) of the brightest stars of two frames, pixels.
    radius : float
        How near a star must fall to one of the other list, pixels.

    Returns
    -------
    Affine or None
        From the first to the second; None when nothing beats chance.
    """
    if min(first.shape[0], second.shape[0]) < 4:
        return None
    proposals = _proposals(first, second)
    if proposals is None:
        return None
    scale, shift, mirrored = proposals
    tree = cKDTree(second)
    span = np.ptp(second, axis=0) + 2.0 * radius
    density = second.shape[0] / float(np.prod(span))
    z = first[:, 0] + 1j * first[:, 1]
    best, best_chance = -1, _ACCEPT_LOG10
    for start in range(0, scale.size, _BATCH):
        batch = slice(start, min(start + _BATCH, scale.size))
        counts, inside = _count(
            z, scale[batch], shift[batch], mirrored[batch], second, tree, radius
        )
        # The three stars that made a proposal agree by construction.
        top = int(np.argmax(counts - 3 - inside * density * np.pi * radius**2))
        chance = chance_log10(
            int(counts[top]) - 3, int(inside[top]), density * np.pi * radius**2
        ) + np.log10(scale.size)
        if chance < best_chance:
            best, best_chance = start + top, chance
        if best_chance < _CERTAIN_LOG10:
            break
    if best < 0:
        return None
    return _similarity(scale[best], shift[best], bool(mirrored[best]))


def _proposals(
    first: FloatArray, second: FloatArray
) -> tuple[ComplexArray, ComplexArray, BoolArray] | None:
    """Similarities ``z' = scale z + shift`` (z conjugate if mirrored), best first."""
    corners_1, ratios_1 = _triangles(first)
    corners_2, ratios_2 = _triangles(second)
    if min(ratios_1.shape[0], ratios_2.shape[0]) == 0:
        return None
    alike = min(_ALIKE, ratios_2.shape[0])
    distance, index = cKDTree(ratios_2).query(
        ratios_1, k=alike, distance_upper_bound=_RATIO_TOLERANCE
    )
    distance, index = distance.reshape(-1, alike), index.reshape(-1, alike)
    row, column = np.nonzero(np.isfinite(distance))
    order = np.argsort(distance[row, column], kind="stable")[:_MAX_PROPOSALS]
    one = corners_1[row[order]]
    two = corners_2[index[row, column][order]]
    mirrored = _orientation(one) != _orientation(two)
    one = np.where(mirrored[:, None], one.conj(), one)
    middle_1, middle_2 = one.mean(axis=1), two.mean(axis=1)
    from_1, from_2 = one - middle_1[:, None], two - middle_2[:, None]
    scale = np.sum(from_1.conj() * from_2, axis=1) / np.sum(np.abs(from_1) ** 2, axis=1)
    sane = (np.abs(scale) > _SCALES[0]) & (np.abs(scale) < _SCALES[1])
    shift = middle_2 - scale * middle_1
    return scale[sane], shift[sane], mirrored[sane]


def _triangles(points: FloatArray) -> tuple[ComplexArray, FloatArray]:
    """Corners of triangles of neighbours, and their two side ratios.

    Corners are ordered by the length of the opposite side, longest first.
    """
    n = points.shape[0]
    count = min(_NEIGHBOURS + 1, n)
    _, near = cKDTree(points).query(points, k=count)
    first, second = np.triu_indices(count - 1, k=1)
    triples = np.stack(
        [
            np.repeat(np.arange(n), first.size),
            near[:, 1 + first].ravel(),
            near[:, 1 + second].ravel(),
        ],
        axis=1,
    )
    triples = np.unique(np.sort(triples, axis=1), axis=0)
    corners = (points[:, 0] + 1j * points[:, 1])[triples]
    sides = np.abs(np.roll(corners, -1, axis=1) - np.roll(corners, 1, axis=1))
    order = np.argsort(-sides, axis=1, kind="stable")
    sides = np.take_along_axis(sides, order, axis=1)
    corners = np.take_along_axis(corners, order, axis=1)
    ratios = sides[:, 1:] / np.maximum(sides[:, :1], 1e-9)
    useful = (sides[:, 0] > _MIN_SIDE_PX) & (ratios[:, 1] > _MIN_RATIO)
    return corners[useful], ratios[useful]


def _orientation(corners: ComplexArray) -> BoolArray:
    """Whether the corners run counter-clockwise."""
    one = corners[:, 1] - corners[:, 0]
    two = corners[:, 2] - corners[:, 0]
    return (one.conj() * two).imag > 0.0


def _count(
    z: ComplexArray,
    scale: ComplexArray,
    shift: ComplexArray,
    mirrored: BoolArray,
    second: FloatArray,
    tree: cKDTree,
    radius: float,
) -> tuple[IntArray, IntArray]:
    """Stars of the second list each proposal hits, and stars that fall among them."""
    source = np.where(mirrored[:, None], z.conj()[None, :], z[None, :])
    moved = scale[:, None] * source + shift[:, None]
    places = np.stack([moved.real, moved.imag], axis=-1)
    distance, hit = tree.query(places, distance_upper_bound=radius)
    hit = np.where(np.isfinite(distance), hit, -1)
    hit = np.sort(hit, axis=1)
    # Distinct targets: a map that shrinks the field onto one star is no match.
    new = np.diff(hit, axis=1, prepend=-1) > 0
    low, high = second.min(axis=0) - radius, second.max(axis=0) + radius
    inside = np.all((places >= low) & (places <= high), axis=-1)
    return new.sum(axis=1), inside.sum(axis=1)


def _similarity(scale: complex, shift: complex, mirrored: bool) -> Affine:
    sign = -1.0 if mirrored else 1.0
    matrix = np.array(
        [[scale.real, -sign * scale.imag], [scale.imag, sign * scale.real]]
    )
    return Affine(matrix, np.array([shift.real, shift.imag]))
