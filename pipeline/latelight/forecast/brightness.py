"""How bright an arc will be, from how bright it was.

As an echo moves it lights new dust.  Its surface brightness is taken as a mean with
patches: places that share no lit dust differ by :data:`PATCHINESS`, and the share
falls off exponentially with the distance moved, over the arc's own width, which is
how far the outburst's light reaches at one time.  The best estimate from a few epochs
is then that of ordinary kriging (Matheron 1963, Econ. Geol. 58, 1246; from memory):
near the last epoch it is that epoch's brightness, far from it the mean of all, with
an error that grows from the one to the other.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from latelight.records import FloatArray

__all__ = ["PATCHINESS", "predict_brightness"]

PATCHINESS = 0.3
"""Scatter of an arc's surface brightness from place to place, mag, 1 sigma: columns
of interstellar clouds are log-normal with about 0.4 mag a resolution element, less
when averaged along an arc (common experience, not a published figure)."""


def predict_brightness(
    offsets: ArrayLike,
    magnitudes: ArrayLike,
    errors: ArrayLike,
    *,
    at: float,
    reach: float,
    patchiness: float = PATCHINESS,
) -> tuple[float, float]:
    """Return the surface brightness at a place along the motion, and 1 sigma.

    Parameters
    ----------
    offsets : array_like of float, shape (n,)
        How far the arc had moved at each epoch, arcsec.
    magnitudes, errors : array_like of float, shape (n,)
        Surface brightness there, mag/arcsec^2, and 1 sigma, n >= 1.
    at : float
        How far it will have moved, arcsec.
    reach : float
        Width of the lit layer along the motion, arcsec, positive: the arc's FWHM,
        seeing included.
    patchiness : float
        Least scatter between places that share no dust, mag, positive; more is
        taken when the epochs themselves scatter more than their errors.

    Returns
    -------
    magnitude, error : float
        mag/arcsec^2, and 1 sigma.

    Raises
    ------
    ValueError
        If there is no epoch, the shapes differ, or the reach is not positive.
    """
    x, m, e = (
        np.atleast_1d(np.asarray(v, float)) for v in (offsets, magnitudes, errors)
    )
    if x.size == 0 or not x.shape == m.shape == e.shape:
        msg = (
            "offsets, magnitudes and errors must be of one length of at least 1, got "
            f"{x.shape}, {m.shape}, {e.shape}"
        )
        raise ValueError(msg)
    if not reach > 0.0:
        msg = f"reach must be positive, got {reach!r}"
        raise ValueError(msg)
    sill = max(patchiness**2, _excess_variance(m, e))
    between = sill * np.exp(-np.abs(x[:, None] - x[None, :]) / reach)
    ahead = sill * np.exp(-np.abs(x - at) / reach)
    solved = np.linalg.solve(
        between + np.diag(e**2), np.column_stack([ahead, np.ones(x.size)])
    )
    of_ahead, of_ones = solved.T
    shortfall = 1.0 - of_ahead.sum()
    weights = of_ahead + of_ones * shortfall / of_ones.sum()
    variance = sill - ahead @ of_ahead + shortfall**2 / of_ones.sum()
    return float(weights @ m), float(np.sqrt(max(variance, 0.0)))


def _excess_variance(magnitudes: FloatArray, errors: FloatArray) -> float:
    """Return the variance of the epochs beyond their errors."""
    if magnitudes.size < 2:
        return 0.0
    return float(np.var(magnitudes, ddof=1) - np.mean(errors**2))
