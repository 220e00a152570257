"""Robust location and scale, shared by the stages."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

__all__ = ["MAD_TO_SIGMA", "clipped_mean", "robust_sigma"]

MAD_TO_SIGMA = 1.482602218505602
"""Sigma of a normal law over its median absolute deviation, 1 / Phi^-1(3/4)."""


def robust_sigma(values: ArrayLike, *, center: float | None = None) -> float:
    """Return the scale of a sample from its median absolute deviation.

    Parameters
    ----------
    values : array_like of float
        The sample, any shape; it must be finite.
    center : float, optional
        Centre of the deviations; the median when not given.

    Returns
    -------
    float
        1.4826 times the median absolute deviation: sigma, for normal values.
        NaN for an empty sample.
    """
    sample = np.asarray(values).ravel()
    if sample.size == 0:
        return float("nan")
    middle = np.median(sample) if center is None else center
    return float(MAD_TO_SIGMA * np.median(np.abs(sample - middle)))


def clipped_mean(
    values: ArrayLike, *, n_sigma: float = 3.0, n_rounds: int = 5
) -> tuple[float, float, int]:
    """Return the mean of a sample freed of outliers.

    Parameters
    ----------
    values : array_like of float
        The sample, any shape; it must be finite.
    n_sigma : float
        Values farther from the median than this many robust sigmas are left out.
    n_rounds : int
        Most rounds; it ends earlier when nothing more is left out.

    Returns
    -------
    mean, sigma : float
        Of the kept values; NaN for an empty sample.
    n_kept : int
        Kept values.
    """
    kept = np.asarray(values, dtype=float).ravel()
    if kept.size == 0:
        return float("nan"), float("nan"), 0
    for _ in range(n_rounds):
        middle = np.median(kept)
        near = np.abs(kept - middle) <= n_sigma * robust_sigma(kept, center=middle)
        if near.all():
            break
        kept = kept[near]
    return float(kept.mean()), float(kept.std()), int(kept.size)
