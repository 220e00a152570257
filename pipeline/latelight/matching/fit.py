"""Solve for a spatially varying kernel and choose how complex it may be."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
from scipy import linalg

from latelight.errors import StageError
from latelight.matching.basis import KernelBasis
from latelight.matching.psf import polynomial_exponents, positions_matrix
from latelight.matching.settings import MatchingSettings
from latelight.matching.system import StarSystems
from latelight.records import BoolArray, FloatArray, IntArray, SpatialKernel
from latelight.statistics import robust_sigma

__all__ = ["KernelFit", "fit_kernel"]

_ROUNDS = 4
# Held-out stars must get this much better, in mean log chi-square, to pay for a
# more complex kernel.
_WORTHWHILE = 0.005
# Below this many the held-out stars are too few to choose by.
_FEWEST_HELD_OUT = 4


@dataclass(frozen=True, slots=True)
class KernelFit:
    """A fitted kernel and how it was reached.

    Attributes
    ----------
    kernel : SpatialKernel
        Takes the sharper frame to the broader one.
    sum_err : float
        1-sigma error of the kernel's sum at the centre of the frame.
    fitted, held_out : bool array, shape (n_stars,)
        Stars in the fit, and stars kept out; the rest were clipped.
    """

    kernel: SpatialKernel
    sum_err: float
    fitted: BoolArray
    held_out: BoolArray


@dataclass(frozen=True, slots=True)
class _Model:
    """One choice of complexity: basis level, degrees over the frame."""

    level: int
    spatial_degree: int
    scale_degree: int

    def free(self, basis: KernelBasis, exponents: tuple[tuple[int, int], ...]) -> IntArray:
        """Return the free parameters in the (basis, term) table, flattened."""
        order = np.array([i + j for i, j in exponents])
        table = np.zeros((len(basis.pairs), len(exponents)), dtype=bool)
        table[basis.levels[self.level]] = order <= self.spatial_degree
        table[0] = order <= self.scale_degree
        return np.flatnonzero(table)


def fit_kernel(
    systems: StarSystems,
    *,
    x: FloatArray,
    y: FloatArray,
    shape: tuple[int, int],
    basis: KernelBasis,
    settings: MatchingSettings,
) -> KernelFit:
    """Fit the kernel to the stars.

    Parameters
    ----------
    systems : StarSystems
        Normal equations of each star, best star first.
    x, y : float64 array, shape (n_stars,)
        Places of the stars, pixels.
    shape : (int, int)
        Frame shape.
    basis : KernelBasis
        The functions the systems were built with.
    settings : MatchingSettings
        ``spatial_degree``, ``scale_degree``, ``held_out_fraction``, ``clip_sigma``,
        ``min_stars``.

    Returns
    -------
    KernelFit
        The simplest kernel whose held-out stars are no worse than the best's.

    Raises
    ------
    StageError
        If clipping leaves fewer than ``min_stars``.
    """
    n_stars = x.size
    degree = max(settings.spatial_degree, settings.scale_degree)
    exponents = polynomial_exponents(degree)
    solver = _Solver(
        systems, positions_matrix(x, y, exponents, shape=shape), basis, exponents
    )
    every = max(2, round(1.0 / settings.held_out_fraction))
    held = np.zeros(n_stars, dtype=bool)
    # From the middle of each run, so that the best stars are not always spared.
    if n_stars // every >= _FEWEST_HELD_OUT and n_stars - n_stars // every >= (
        settings.min_stars
    ):
        held[every // 2 :: every] = True
    models = _affordable_models(int((~held).sum()), basis, settings)
    # Variables and galaxies go first, by a simple model, so that every candidate
    # is judged on the same stars.
    typical = models[min(1, len(models) - 1)]
    sound = solver.clip(typical, ~held, settings)
    judges = held & solver.inliers(typical, sound, settings)
    if judges.sum() < _FEWEST_HELD_OUT:
        judges = sound if not held.any() else held
    best = _choose(solver, models, sound, judges)
    fitted = solver.clip(best, sound, settings)
    coefficients, covariance = solver.solve(best, fitted)
    misfit = max(1.0, float(np.median(solver.chi2(coefficients)[fitted])))
    planes = np.einsum("bt,byx->tyx", coefficients, basis.images())
    return KernelFit(
        kernel=SpatialKernel(planes, exponents, shape),
        sum_err=float(np.sqrt(covariance * misfit)),
        fitted=fitted,
        held_out=held,
    )


def _affordable_models(
    n_stars: int, basis: KernelBasis, settings: MatchingSettings
) -> list[_Model]:
    """Return the models that this many stars can carry, simplest first."""
    models = []
    for level, spatial, scale in product(
        range(len(basis.levels)),
        range(settings.spatial_degree + 1),
        range(settings.scale_degree + 1),
    ):
        terms = (spatial + 1) * (spatial + 2) // 2
        if scale <= spatial and (terms == 1 or n_stars >= 5 * terms):
            models.append(_Model(level, spatial, scale))
    return sorted(
        models,
        key=lambda m: (
            len(basis.levels[m.level]) * (m.spatial_degree + 1) * (m.spatial_degree + 2),
            m.scale_degree,
        ),
    )


def _choose(
    solver: _Solver, models: list[_Model], fitted: BoolArray, judges: BoolArray
) -> _Model:
    scores = []
    for model in models:
        coefficients, _ = solver.solve(model, fitted)
        chi2 = np.maximum(solver.chi2(coefficients)[judges], 1e-12)
        scores.append(float(np.mean(np.log(chi2))))
    least = min(scores)
    return next(
        m for m, s in zip(models, scores, strict=True) if s <= least + _WORTHWHILE
    )


class _Solver:
    """Joins the stars' systems for any model and any choice of stars."""

    def __init__(
        self,
        systems: StarSystems,
        positions: FloatArray,
        basis: KernelBasis,
        exponents: tuple[tuple[int, int], ...],
    ) -> None:
        self._systems = systems
        self._positions = positions
        self._basis = basis
        self._exponents = exponents
        self._clean_gram = systems.gram - systems.noise

    def solve(self, model: _Model, stars: BoolArray) -> tuple[FloatArray, float]:
        """Return coefficients (n_basis, n_terms) and the variance of the sum."""
        p = self._positions[stars]
        n_basis, n_terms = len(self._basis.pairs), len(self._exponents)
        pp = (p[:, :, None] * p[:, None, :]).reshape(len(p), -1)
        gram = pp.T @ self._clean_gram[stars].reshape(len(p), -1)
        gram = gram.reshape(n_terms, n_terms, n_basis, n_basis).transpose(2, 0, 3, 1)
        gram = gram.reshape(n_basis * n_terms, -1)
        cross = (self._systems.cross[stars].T @ p).ravel()
        free = model.free(self._basis, self._exponents)
        matrix, right = gram[np.ix_(free, free)], cross[free]
        values, vectors = _eigen(matrix)
        out = np.zeros(n_basis * n_terms)
        out[free] = vectors @ ((vectors.T @ right) / values)
        return out.reshape(n_basis, n_terms), float(np.sum(vectors[0] ** 2 / values))

    def chi2(self, coefficients: FloatArray) -> FloatArray:
        """Return each star's reduced chi-square under one kernel."""
        return self._systems.chi2(self._positions @ coefficients.T)

    def inliers(
        self, model: _Model, stars: BoolArray, settings: MatchingSettings
    ) -> BoolArray:
        """Return all stars that agree with the fit to some of them."""
        coefficients, _ = self.solve(model, stars)
        value = np.sqrt(np.maximum(self.chi2(coefficients), 0.0))
        middle = np.median(value[stars])
        spread = max(robust_sigma(value[stars]), 0.05 * middle)
        return value <= middle + settings.clip_sigma * spread

    def clip(
        self, model: _Model, stars: BoolArray, settings: MatchingSettings
    ) -> BoolArray:
        """Return the stars left when misfits are put out, round after round."""
        kept = stars
        for _ in range(_ROUNDS):
            fewer = stars & self.inliers(model, kept, settings)
            if fewer.sum() < settings.min_stars:
                msg = (
                    f"only {int(fewer.sum())} of {int(stars.sum())} kernel stars agree "
                    f"with one another, need {settings.min_stars}; the frames may be "
                    "misaligned, or raise clip_sigma in [matching]"
                )
                raise StageError("matching", msg)
            if (fewer == kept).all():
                break
            kept = fewer
        return kept


def _eigen(matrix: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return eigenvalues and vectors of the scaled system, empty directions cut."""
    size = np.sqrt(np.maximum(np.diag(matrix), 1e-300))
    values, vectors = linalg.eigh(matrix / np.outer(size, size))
    used = values > 1e-11 * values[-1]
    return values[used], vectors[:, used] / size[:, None]
