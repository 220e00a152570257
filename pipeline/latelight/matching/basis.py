"""The functions a kernel is made of: a delta and Gaussians times polynomials."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.records import FloatArray, IntArray

__all__ = ["KernelBasis", "make_basis"]

# Polynomial degrees of the three Gaussians, narrowest first, in rising order of
# complexity; -1 leaves one out: the first level is for equal PSFs.
_LEVELS = ((-1, -1, -1), (2, 1, 0), (2, 2, 2), (4, 3, 2))
_NARROWEST_PX = 0.7
# Taps below this share of the peak are skipped.
_LEAST_TAP = 1e-6
# The wings are those of a Moffat star of exponent b (Moffat 1969, A&A 3, 455): the
# integral over t of t^(b - 1) exp(-t) exp(-t r^2 / a^2) in three steps of a factor 4.
# Without wings the flux scale is wrong by up to 2 %; with a free Gaussian in their
# place it hangs on the sky level (measured on Moffat stars, exponents 2.9-3.9).
_WING_STEPS = (1.0, 0.25, 0.0625)
_WING_EXPONENT = 2.75


@dataclass(frozen=True, slots=True)
class KernelBasis:
    """Separable kernel functions, and how they are made sum-free.

    Attributes
    ----------
    taps : float64 array, shape (n_taps, k)
        One-dimensional functions.
    pairs : int64 array, shape (n_raw, 2)
        Taps along y and x of each raw function.
    combine : float64 array, shape (n_basis, n_raw)
        Rows give the functions used as sums of raw ones: the first has unit sum
        and carries all the flux, the others have sum 0 and unit norm.
    levels : tuple of int64 arrays
        Functions of each level of complexity, simplest first.
    """

    taps: FloatArray
    pairs: IntArray
    combine: FloatArray
    levels: tuple[IntArray, ...]

    def __len__(self) -> int:
        return len(self.combine)

    def raw_images(self) -> FloatArray:
        """Return the raw functions as images, shape (n_raw, k, k)."""
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
        Lupton 1998, ApJ 503, 325, doi:10.1086/305984) and one plain function for the
        wings.  s is the width that takes one Gaussian PSF to the other, but never
        below 0.6 of the broader PSF's (equal seeing still needs functions of a
        star's size) or 1 px.  The delta lets equal PSFs be matched exactly.
    """
    width = np.sqrt(max(broad_sigma**2 - sharp_sigma**2, 0.0))
    scale = max(width, 0.6 * broad_sigma, 1.0)
    sigmas = (max(0.5 * scale, _NARROWEST_PX), scale, 1.8 * scale)
    alpha = max(2.35 * broad_sigma, 2.0 * scale)
    wings = [alpha / np.sqrt(2.0 * t) for t in _WING_STEPS]
    half = int(np.ceil(2.0 * wings[-1]))
    step = np.arange(-half, half + 1, dtype=float)
    taps = [np.where(step == 0, 1.0, 0.0)]
    raw = [_Raw(0, 0, 0)]
    for which, sigma in enumerate(sigmas):
        start = len(taps)
        highest = _LEVELS[-1][which]
        taps += [_tap(step, sigma, power) for power in range(highest + 1)]
        for px in range(highest + 1):
            for py in range(highest + 1 - px):
                level = next(
                    n for n, degrees in enumerate(_LEVELS) if px + py <= degrees[which]
                )
                raw.append(_Raw(start + py, start + px, level))
    # The middle Gaussian carries the flux; the compiled loop filters along x once
    # for neighbours with one x tap.
    middle = 1 + _LEVELS[-1][0] + 1
    raw.sort(key=lambda r: ((r.tap_y, r.tap_x) != (middle, middle), r.tap_x, r.tap_y))
    taps += [_tap(step, sigma, 0) for sigma in wings]
    plain = len(raw)
    levels = np.array([r.level for r in raw] + [1])
    raw += [_Raw(n, n, 1) for n in range(len(taps) - len(wings), len(taps))]
    mix = np.eye(plain + 1, len(raw))
    mix[plain, plain:] = [t**_WING_EXPONENT * np.exp(-t) for t in _WING_STEPS]
    pairs = np.array([(r.tap_y, r.tap_x) for r in raw], dtype=np.int64)
    basis = KernelBasis(np.array(taps), pairs, mix, ())
    return KernelBasis(
        basis.taps,
        pairs,
        _sum_free(basis),
        tuple(np.flatnonzero(levels <= n) for n in range(len(_LEVELS))),
    )


@dataclass(frozen=True, slots=True)
class _Raw:
    """A separable function: its taps, and the level of complexity it enters at."""

    tap_y: int
    tap_x: int
    level: int


def _tap(step: FloatArray, sigma: float, power: int) -> FloatArray:
    values = (step / sigma) ** power * np.exp(-0.5 * (step / sigma) ** 2)
    return np.where(np.abs(values) < _LEAST_TAP, 0.0, values)


def _sum_free(basis: KernelBasis) -> FloatArray:
    """Turn mixed functions into one of unit sum and others of sum 0 and norm 1."""
    images = basis.images()
    sums = images.sum(axis=(1, 2))
    change = np.eye(len(sums))
    change[0, 0] = 1.0 / sums[0]
    change[1:, 0] = -sums[1:] / sums[0]
    free = np.tensordot(change, images, axes=1)
    change[1:] /= np.sqrt((free[1:] ** 2).sum(axis=(1, 2)))[:, None]
    return change @ basis.combine
