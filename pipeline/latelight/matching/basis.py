"""The functions a kernel is made of: a delta and Gaussians times polynomials."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.records import FloatArray, IntArray

__all__ = ["KernelBasis", "make_basis"]

# Polynomial degrees of the five Gaussians, narrowest first, in rising order of
# complexity; -1 leaves one out: the first level is for equal PSFs.  The last two
# Gaussians carry the difference of the wings, without which the flux scale is wrong
# by up to a per cent (measured on Moffat stars whose exponents differ by 1).
_LEVELS = ((-1, -1, -1, -1, -1), (2, 1, 0, 0, 0), (2, 2, 2, 0, 0), (4, 3, 2, 0, 0))
_NARROWEST_PX = 0.7
# Taps below this share of the peak are skipped.
_LEAST_TAP = 1e-6


@dataclass(frozen=True, slots=True)
class KernelBasis:
    """Separable kernel functions, and how they are made sum-free.

    Attributes
    ----------
    taps : float64 array, shape (n_taps, k)
        One-dimensional functions.
    pairs : int64 array, shape (n_basis, 2)
        Taps along y and x of each raw function.
    combine : float64 array, shape (n_basis, n_basis)
        Rows give the functions used as sums of raw ones: the first has unit sum
        and carries all the flux, the others have sum 0 and unit norm.
    levels : tuple of int64 arrays
        Functions of each level of complexity, simplest first.
    """

    taps: FloatArray
    pairs: IntArray
    combine: FloatArray
    levels: tuple[IntArray, ...]

    def raw_images(self) -> FloatArray:
        """Return the raw functions as images, shape (n_basis, k, k)."""
        return np.einsum(
            "by,bx->byx", self.taps[self.pairs[:, 0]], self.taps[self.pairs[:, 1]]
        )

    def images(self) -> FloatArray:
        """Return the functions used as images, shape (n_basis, k, k)."""
        return np.tensordot(self.combine, self.raw_images(), axes=1)


def make_basis(*, sharp_sigma: float, broad_sigma: float) -> KernelBasis:
    """Make the basis for a pair of PSF widths.

    Parameters
    ----------
    sharp_sigma, broad_sigma : float
        Gaussian sigmas of the two PSFs, pixels.

    Returns
    -------
    KernelBasis
        A delta, three Gaussians of sigma s/2, s, 1.8 s times ``u^i v^j`` (Alard &
        Lupton 1998, ApJ 503, 325, doi:10.1086/305984) and two plain ones for the
        wings.  s is the width that takes one Gaussian PSF to the other, but never
        below 0.6 of the broader PSF's (equal seeing still needs functions of a
        star's size) or 1 px.  The delta lets equal PSFs be matched exactly.
    """
    width = np.sqrt(max(broad_sigma**2 - sharp_sigma**2, 0.0))
    scale = max(width, 0.6 * broad_sigma, 1.0)
    wings = max(3.0 * scale, 2.2 * broad_sigma)
    sigmas = (max(0.5 * scale, _NARROWEST_PX), scale, 1.8 * scale, wings, 2.5 * wings)
    half = int(np.ceil(2.2 * sigmas[-1]))
    step = np.arange(-half, half + 1, dtype=float)
    taps = [np.where(step == 0, 1.0, 0.0)]
    pairs: list[tuple[int, int, int]] = []  # tap y, tap x, level
    for which, sigma in enumerate(sigmas):
        start = len(taps)
        if which == 1:
            reference = (start, start)
        highest = _LEVELS[-1][which]
        for power in range(highest + 1):
            tap = (step / sigma) ** power * np.exp(-0.5 * (step / sigma) ** 2)
            taps.append(np.where(np.abs(tap) < _LEAST_TAP, 0.0, tap))
        for px in range(highest + 1):
            for py in range(highest + 1 - px):
                level = next(
                    n for n, degrees in enumerate(_LEVELS) if px + py <= degrees[which]
                )
                pairs.append((start + py, start + px, level))
    pairs.append((0, 0, 0))
    # The middle Gaussian carries the flux; the compiled loop filters along x once
    # for neighbours with one x tap.
    pairs.sort(key=lambda p: (p[:2] != reference, p[1], p[0]))
    table = np.array(pairs, dtype=np.int64)
    basis = KernelBasis(
        taps=np.array(taps),
        pairs=np.ascontiguousarray(table[:, :2]),
        combine=np.eye(len(pairs)),
        levels=tuple(np.flatnonzero(table[:, 2] <= n) for n in range(len(_LEVELS))),
    )
    return KernelBasis(basis.taps, basis.pairs, _sum_free(basis), basis.levels)


def _sum_free(basis: KernelBasis) -> FloatArray:
    images = basis.raw_images()
    sums = images.sum(axis=(1, 2))
    combine = np.eye(len(sums))
    combine[0, 0] = 1.0 / sums[0]
    combine[1:, 0] = -sums[1:] / sums[0]
    free = np.tensordot(combine, images, axes=1)
    norm = np.sqrt((free[1:] ** 2).sum(axis=(1, 2)))
    combine[1:] /= norm[:, None]
    return combine
