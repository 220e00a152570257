"""Errors carried through any function of measured numbers."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import as_floats, require
from latelight.records import FloatArray

__all__ = ["independent", "propagate"]

# Of an error bar.  The difference quotient is wrong by the square of the step over
# the scale on which the function bends; an error bar is at most about that scale.
STEP = 0.01


def independent(*errors: ArrayLike) -> FloatArray:
    """Return the covariance of independent numbers.

    Parameters
    ----------
    *errors : array_like of float
        1 sigma of each of n numbers; they broadcast.

    Returns
    -------
    float64, shape (n, n, ...)
        Their squares on the diagonal.

    Raises
    ------
    ValueError
        If an error is negative or missing.
    """
    sigma = np.array(np.broadcast_arrays(*(as_floats(error) for error in errors)))
    require(
        (sigma >= 0.0) & np.isfinite(sigma), "errors", "zero or positive, finite", sigma
    )
    unit = np.eye(len(sigma)).reshape(len(sigma), len(sigma), *[1] * (sigma.ndim - 1))
    return unit * sigma**2


def propagate(
    function: Callable[[FloatArray], Any], values: ArrayLike, covariance: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Return a function of measured numbers and the covariance of its results.

    To first order, with the Jacobian from central differences a hundredth of an
    error bar to either side; numbers without error are not varied.

    Parameters
    ----------
    function : callable
        Takes an array of shape (n, ...) and returns m results, an array or a tuple,
        of shape (m, ...).  It is called ``2 n + 1`` times at most.
    values : array_like of float, shape (n, ...)
        The measured numbers; further axes are places, done at once.
    covariance : array_like of float, shape (n, n, ...) or (n, n)
        Their covariance; :func:`independent` makes one from errors.

    Returns
    -------
    values : float64, shape (m, ...)
        The function at the values.
    covariance : float64, shape (m, m, ...)
        Covariance of its results.

    Raises
    ------
    ValueError
        If the shapes do not fit, a variance is negative or missing, or a result is
        not finite.
    """
    at = as_floats(values)
    cov = as_floats(covariance)
    n = len(at) if at.ndim else 0
    if cov.shape == (n, n):
        cov = cov.reshape(n, n, *[1] * (at.ndim - 1))
    if n == 0 or cov.ndim != at.ndim + 1 or cov.shape[:2] != (n, n):
        msg = (
            f"covariance must have the shape ({n}, {n}, ...) of {n} values, "
            f"got {np.shape(covariance)}; give one row and column for each value"
        )
        raise ValueError(msg)
    variance = np.einsum("ii...->i...", cov)
    fit = (variance >= 0.0) & np.isfinite(variance)
    require(fit, "covariance", "zero or positive on its diagonal", variance)
    centre = _results(function, at)
    jacobian = np.zeros((len(centre), *at.shape))
    for i, step in enumerate(STEP * np.sqrt(variance)):
        if not step.any():
            continue
        low, high = at.copy(), at.copy()
        low[i] -= step
        high[i] += step
        width = high[i] - low[i]  # as rounded
        rise = _results(function, high) - _results(function, low)
        jacobian[:, i] = np.divide(
            rise, width, out=np.zeros_like(rise), where=width > 0.0
        )
    spread = np.einsum("ki...,ij...,lj...->kl...", jacobian, cov, jacobian)
    return centre, spread


def _results(function: Callable[[FloatArray], Any], values: FloatArray) -> FloatArray:
    """Return the function's results, shape (m, ...), all finite."""
    results = function(values)
    if isinstance(results, tuple):
        results = np.broadcast_arrays(*results)
    array = np.array(results, dtype=float)
    if array.ndim != values.ndim:
        msg = (
            f"function must return results of shape (m, ...) with {values.ndim} "
            f"dimensions, got {array.shape}; return a tuple of m results"
        )
        raise ValueError(msg)
    require(np.isfinite(array), "results of function", "finite", array)
    return array
