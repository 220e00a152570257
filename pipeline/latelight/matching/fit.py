"""Solve for a spatially varying kernel and choose how complex it may be."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

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

_STAGE = "matching"
_ROUNDS = 4
_GROUPS = 10
# Complexity at which stars are first judged.
_MIDDLE_LEVEL = 1
# Held-out stars must get this much better, in mean log chi-square, to pay for a
# more complex kernel.
_WORTHWHILE = 0.005
# A reduced chi-square this low is as good as any.
_NOTHING_LEFT = 0.5
# Keeps the factorisation of a noise-free system from failing by rounding.
_RIDGE = 1e-12
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
        1-sigma error of the kernel's sum at the centre of the frame, at least that
        of photon noise.
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

    def free(
        self, basis: KernelBasis, exponents: tuple[tuple[int, int], ...]
    ) -> IntArray:
        """Return the free parameters in the (basis, term) table, flattened."""
        order = np.array([i + j for i, j in exponents])
        table = np.zeros((len(basis), len(exponents)), dtype=bool)
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
    # Variables and galaxies go first, by a simple model, so that every candidate
    # is judged on the same stars.
    simple = _Model(
        _MIDDLE_LEVEL,
        _affordable(int((~held).sum()), min(1, settings.spatial_degree)),
        0,
    )
    sound = solver.clip(simple, ~held, settings)
    judges = held & solver.inliers(simple, sound, settings)
    if judges.sum() < _FEWEST_HELD_OUT:
        judges = held if held.any() else sound
    best = _choose(solver, sound, judges, levels=len(basis.levels), settings=settings)
    fitted = solver.clip(best, sound, settings)
    coefficients, sum_variance = solver.solve(best, fitted)
    # Terms the model leaves out would cost a transform each and add nothing.
    terms = np.flatnonzero(coefficients.any(axis=0))
    planes = np.einsum("bt,byx->tyx", coefficients[:, terms], basis.images())
    return KernelFit(
        kernel=SpatialKernel(planes, tuple(exponents[t] for t in terms), shape),
        sum_err=max(np.sqrt(sum_variance), solver.jackknife(best, fitted)),
        fitted=fitted,
        held_out=held,
    )


def _affordable(n_stars: int, degree: int) -> int:
    """Return the highest degree up to ``degree`` with five stars for each term."""
    while degree > 0 and 5 * (degree + 1) * (degree + 2) // 2 > n_stars:
        degree -= 1
    return degree


def _choose(
    solver: _Solver,
    fitted: BoolArray,
    judges: BoolArray,
    *,
    levels: int,
    settings: MatchingSettings,
) -> _Model:
    """Return the model whose judges do best: one kind of complexity at a time."""

    def score(model: _Model) -> float:
        coefficients, _ = solver.solve(model, fitted)
        chi2 = np.maximum(solver.chi2(coefficients)[judges], _NOTHING_LEFT)
        return float(np.mean(np.log(chi2)))

    most = _affordable(int(fitted.sum()), settings.spatial_degree)
    best = _Model(_MIDDLE_LEVEL, 0, 0)
    best = _simplest(score, [replace(best, spatial_degree=d) for d in range(most + 1)])
    best = _simplest(score, [replace(best, level=n) for n in range(levels)])
    highest = min(settings.scale_degree, most)
    return _simplest(score, [replace(best, scale_degree=d) for d in range(highest + 1)])


def _simplest(score: Callable[[_Model], float], models: list[_Model]) -> _Model:
    """Return the first model that is no worse than the best."""
    scores = [score(model) for model in models]
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
        n_basis, n_terms = len(self._basis), len(self._exponents)
        free = model.free(self._basis, self._exponents)
        used = np.unique(free // n_terms)  # functions with any free coefficient
        pp = (p[:, :, None] * p[:, None, :]).reshape(len(p), -1)
        gram = self._clean_gram[np.ix_(stars, used, used)].reshape(len(p), -1)
        table = (pp.T @ gram).reshape(n_terms, n_terms, used.size, used.size)
        function, term = np.searchsorted(used, free // n_terms), free % n_terms
        matrix = table[
            term[:, None], term[None, :], function[:, None], function[None, :]
        ]
        right = (self._systems.cross[stars].T @ p).ravel()[free]
        unit = np.zeros(free.size)
        unit[0] = 1.0  # the first parameter is the kernel's sum at the centre
        both = _solve_scaled(matrix, np.stack([right, unit], axis=1))
        out = np.zeros(n_basis * n_terms)
        out[free] = both[:, 0]
        return out.reshape(n_basis, n_terms), float(both[0, 1])

    def jackknife(self, model: _Model, stars: BoolArray) -> float:
        """Return the error of the kernel's sum from leaving out groups of stars.

        It holds what photon noise does not: stars that differ from one another by
        their neighbours, colours and places (Quenouille's jackknife, ten groups).
        """
        rows = np.flatnonzero(stars)
        groups = min(_GROUPS, rows.size)
        sums = []
        for group in range(groups):
            fewer = stars.copy()
            fewer[rows[group::groups]] = False
            sums.append(self.solve(model, fewer)[0][0, 0])
        return float(np.sqrt((groups - 1) * np.var(sums)))

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
                raise StageError(_STAGE, msg)
            if (fewer == kept).all():
                break
            kept = fewer
        return kept


def _solve_scaled(matrix: FloatArray, right: FloatArray) -> FloatArray:
    """Solve a symmetric system, scaled to a unit diagonal.

    Cholesky where it works; otherwise empty directions are cut.
    """
    size = np.sqrt(np.maximum(np.diag(matrix), 1e-300))
    scaled = matrix / np.outer(size, size)
    try:
        factor = linalg.cho_factor(scaled + _RIDGE * np.eye(size.size))
    except linalg.LinAlgError:
        values, vectors = linalg.eigh(scaled)
        used = values > 1e-9 * values[-1]
        vectors = vectors[:, used]
        solution = vectors @ (
            (vectors.T @ (right / size[:, None])) / values[used, None]
        )
    else:
        solution = linalg.cho_solve(factor, right / size[:, None])
    return solution / size[:, None]
