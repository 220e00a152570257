"""Robust weighted polynomials over a frame."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from latelight.records import BoolArray, FloatArray
from latelight.statistics import robust_sigma

__all__ = ["Polynomial", "fit_displacement", "fit_surface", "terms"]

_ABSOLUTE_ROUNDS, _CLIP_ROUNDS = 10, 10
# Stars for each term of a polynomial before it is thought of at all.
_STARS_PER_TERM = 3
# Halvings of the logarithm of a range of 10^7: a part in a thousand.
_MAX_SCATTER_PX, _BISECTIONS = 10.0, 14


@dataclass(frozen=True, slots=True)
class Polynomial:
    """A displacement over a frame, fitted to stars.

    Attributes
    ----------
    coefficients : float64 array, shape (n_terms, 2)
        Of the terms of :func:`terms`, for x and y, pixels.
    covariance : float64 array, shape (n_terms, n_terms)
        Of the coefficients of one coordinate, pixels squared.
    degree : int
        Total degree.
    shape : (int, int)
        Shape (ny, nx) of the frame.
    kept : bool array, shape (n_stars,)
        Stars that were not clipped.
    rms : float
        Residual of the kept stars, per coordinate, pixels.
    """

    coefficients: FloatArray
    covariance: FloatArray
    degree: int
    shape: tuple[int, int]
    kept: BoolArray
    rms: float

    def at(self, places: FloatArray) -> FloatArray:
        """Return the displacement at places (x, y), shape (..., 2), pixels."""
        return terms(places, self.shape, self.degree) @ self.coefficients

    def error_at(self, places: FloatArray) -> FloatArray:
        """Return its 1-sigma error in each coordinate, shape (...,), pixels."""
        design = terms(places, self.shape, self.degree)
        return np.sqrt(np.sum((design @ self.covariance) * design, axis=-1))


def terms(places: FloatArray, shape: tuple[int, int], degree: int) -> FloatArray:
    """Return the terms ``u^i v^j``, ``i + j <= degree``, shape (..., n_terms).

    Places (x, y) have shape (..., 2); ``u`` and ``v`` run from -1 to 1 over the
    frame.
    """
    u = 2.0 * places[..., 0] / max(shape[1] - 1, 1) - 1.0
    v = 2.0 * places[..., 1] / max(shape[0] - 1, 1) - 1.0
    powers = [(n - j, j) for n in range(degree + 1) for j in range(n + 1)]
    return np.stack([u**i * v**j for i, j in powers], axis=-1)


def fit_displacement(
    places: FloatArray,
    displacement: FloatArray,
    error: FloatArray,
    *,
    shape: tuple[int, int],
    degrees: tuple[int, int],
    clip_sigma: float,
    error_floor: float,
) -> Polynomial:
    """Fit the displacement of stars by a polynomial of position.

    Parameters
    ----------
    places : float64 array, shape (n, 2)
        Where the stars are (x, y), pixels.
    displacement : float64 array, shape (n, 2)
        In x and y, pixels.
    error : float64 array, shape (n,)
        1 sigma of each coordinate, pixels.
    shape : (int, int)
        Shape (ny, nx) of the frame.
    degrees : (int, int)
        Lowest and highest degree.
    clip_sigma : float
        Stars farther off are left out.
    error_floor : float
        Least scatter added to every error, pixels.

    Returns
    -------
    Polynomial
        The mean of the fits of all degrees, by their Akaike weights.

    Notes
    -----
    Weights are ``1 / (error^2 + s^2)``: the scatter s that the errors do not
    know of (blends, the shape of the PSF) is found from the stars themselves by
    maximum likelihood, so that the brightest do not carry the map alone.
    Degrees are not chosen but averaged with the weights ``exp(-AICc / 2)``
    (Hurvich & Tsai 1989, Biometrika 76, 297, doi:10.1093/biomet/76.2.297;
    Burnham & Anderson 2002, Model Selection and Multimodel Inference, ch. 4),
    on one set of stars; the covariance holds how far they are apart.
    """
    low, high = degrees
    while high > low and error.size < _STARS_PER_TERM * _n_terms(high):
        high -= 1
    data = _Stars(places, displacement, error, shape)
    kept, variance = _clip(data, high, clip_sigma, error_floor)
    fits = [_fit(data, degree, kept, variance) for degree in range(low, high + 1)]
    scores = np.array([fit.aicc for fit in fits])
    weights = np.exp(-0.5 * (scores - scores.min()))
    weights /= weights.sum()
    padded = [fit.padded_to(_n_terms(high)) for fit in fits]
    mean = np.sum([w * c for w, (c, _) in zip(weights, padded, strict=True)], axis=0)
    covariance = np.zeros((mean.shape[0], mean.shape[0]))
    for weight, (coefficients, own) in zip(weights, padded, strict=True):
        apart = coefficients - mean
        covariance += weight * (own + 0.5 * apart @ apart.T)
    residual = displacement[kept] - data.design(high)[kept] @ mean
    return Polynomial(
        coefficients=mean,
        covariance=covariance,
        degree=high,
        shape=shape,
        kept=kept,
        rms=float(np.sqrt(np.mean(residual**2))),
    )


def fit_surface(
    places: FloatArray, values: FloatArray, shape: tuple[int, int]
) -> FloatArray:
    """Return a smooth surface through scattered values, at their own places.

    Outliers are clipped while the degree rises from 0 to at most 2.
    """
    surface = np.full(values.size, np.median(values))
    for degree in (1, 1, 2, 2):
        residual = values - surface
        near = np.abs(residual) <= 3.0 * robust_sigma(residual, center=0.0)
        if near.sum() < 5 * _n_terms(degree):
            break
        design = terms(places, shape, degree)
        solution, _ = _solve(design, values[:, None], np.ones(values.size), near)
        surface = design @ solution[:, 0]
    return surface


@dataclass(frozen=True, slots=True)
class _Stars:
    places: FloatArray
    displacement: FloatArray
    error: FloatArray
    shape: tuple[int, int]

    def design(self, degree: int) -> FloatArray:
        return terms(self.places, self.shape, degree)


@dataclass(frozen=True, slots=True)
class _Fit:
    """One degree's coefficients, their covariance, and its AICc."""

    coefficients: FloatArray
    covariance: FloatArray
    aicc: float

    def padded_to(self, n_terms: int) -> tuple[FloatArray, FloatArray]:
        """Coefficients and covariance with zeros for the terms it has not."""
        more = n_terms - self.coefficients.shape[0]
        return (
            np.pad(self.coefficients, ((0, more), (0, 0))),
            np.pad(self.covariance, ((0, more), (0, more))),
        )


def _n_terms(degree: int) -> int:
    return (degree + 1) * (degree + 2) // 2


def _clip(
    data: _Stars, degree: int, clip: float, floor: float
) -> tuple[BoolArray, FloatArray]:
    """Stars that agree with one polynomial, and the variance of every star."""
    design = data.design(degree)
    n_terms = design.shape[1]
    every = np.ones(data.error.size, dtype=bool)
    # Least absolute deviations first, whatever the errors: a bright star gone
    # astray would drag a weighted fit along, and stay in it.
    spread = np.ones(data.error.size)
    for _ in range(_ABSOLUTE_ROUNDS):
        solution, _ = _solve(design, data.displacement, spread, every)
        residual = data.displacement - design @ solution
        spread = np.maximum(np.hypot(*residual.T), floor)
    kept = every
    for turn in range(_CLIP_ROUNDS):
        # The median first: wild stars would blow up a likelihood.
        scatter_of = _median_scatter if turn < 2 else _likely_scatter
        freedom = max(kept.sum() - n_terms, 1) / kept.sum()
        scatter = scatter_of(residual[kept], data.error[kept], freedom)
        variance = data.error**2 + max(scatter, floor) ** 2
        now = np.abs(residual).max(axis=1) <= clip * np.sqrt(variance)
        settled = turn > 2 and np.array_equal(now, kept)
        if now.sum() <= n_terms + 1 or settled:
            break
        kept = now
        solution, _ = _solve(design, data.displacement, variance, kept)
        residual = data.displacement - design @ solution
    return kept, variance


def _fit(data: _Stars, degree: int, kept: BoolArray, variance: FloatArray) -> _Fit:
    design = data.design(degree)
    solution, inverse = _solve(design, data.displacement, variance, kept)
    residual = (data.displacement - design @ solution)[kept]
    chi2 = float(np.sum(residual**2 / variance[kept, None]))
    free, values = 2 * design.shape[1], 2 * int(kept.sum())
    reduced = chi2 / max(values - free, 1)
    aicc = chi2 + 2.0 * free * values / max(values - free - 1, 1)
    return _Fit(solution, inverse * max(reduced, 1.0), aicc)


def _solve(
    design: FloatArray, values: FloatArray, variance: FloatArray, kept: BoolArray
) -> tuple[FloatArray, FloatArray]:
    """Weighted least squares; the solution and its covariance."""
    weighted = design[kept] / np.sqrt(variance[kept])[:, None]
    right = values[kept] / np.sqrt(variance[kept])[:, None]
    # The pseudo-inverse: stars in one line leave a term undetermined.
    inverse = np.linalg.pinv(weighted.T @ weighted, hermitian=True).astype(float)
    return inverse @ (weighted.T @ right), inverse


def _median_scatter(residual: FloatArray, error: FloatArray, freedom: float) -> float:
    """Scatter beyond the errors that makes the median deviation that of sigma."""

    def excess(scatter: float) -> float:
        pulls = residual / np.sqrt(error**2 + scatter**2)[:, None]
        return robust_sigma(pulls, center=0.0) ** 2 / freedom - 1.0

    return _bisect(excess)


def _likely_scatter(residual: FloatArray, error: FloatArray, freedom: float) -> float:
    """Scatter beyond the errors of maximum likelihood, normal residuals."""
    square = np.mean(residual**2, axis=1) / freedom

    def excess(scatter: float) -> float:
        variance = error**2 + scatter**2
        return float(np.sum((square - variance) / variance**2))

    return _bisect(excess)


def _bisect(excess: Callable[[float], float]) -> float:
    """Root of a falling function between 1e-6 and 10 px; 0 when it starts below."""
    low, high = 1e-6, _MAX_SCATTER_PX
    if excess(low) <= 0.0:
        return 0.0
    for _ in range(_BISECTIONS):
        middle = np.sqrt(low * high)
        low, high = (middle, high) if excess(middle) > 0.0 else (low, middle)
    return float(high)
