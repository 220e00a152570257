"""Where the brightest line of a ridge is.

The shape that is fitted, a Gaussian with a tail, is the same for all outbursts; a
real light curve may be flat on top or rise twice.  That leaves the motion alone, for
the shape is one at all epochs, but shifts the crest.  So what the fit leaves over is
added up over the epochs, smoothed as a Gaussian process (Rasmussen & Williams 2006,
eq. 2.25-2.26, from memory), and the crest is that of the sum.
"""

from __future__ import annotations

import numpy as np

from latelight.motion.tracks.joint import JointFit
from latelight.motion.tracks.points import position_time
from latelight.motion.tracks.ridge import Ridge, Templates
from latelight.motion.tracks.strips import StripSums
from latelight.records import FloatArray

__all__ = ["find_crest"]

# Scatter of a real shape about the fitted one, as a part of its height.
_MISFIT = 0.15
# It changes over so many sigmas of the PSF.
_SMOOTH = 1.3
_REACH = 1.2
_FARTHEST = 0.5


def find_crest(sums: StripSums, fit: JointFit, place: float) -> tuple[float, float]:
    """Return how far the crest lies off a ridge's place, and 1 sigma, pixels.

    Parameters
    ----------
    sums : StripSums
        The epochs along the arc.
    fit : JointFit
        The fitted ridge.
    place : float
        Where the ridge is, pixels along the motion: the dust there counts.
    """
    width = fit.ridge.lobe.full_width
    grid = np.arange(-np.ceil(_REACH * width), np.ceil(_REACH * width) + 1.0)
    left, variance = _left_over(sums, fit, grid)
    length = _SMOOTH * fit.ridge.lobe.seeing
    alike = np.exp(-0.5 * (np.subtract.outer(grid, grid) / length) ** 2)
    misfit = _MISFIT**2 * alike
    gain = np.linalg.solve(misfit + np.diag(variance), misfit)
    smooth = left @ gain
    covariance = misfit - misfit @ gain

    fine = np.arange(grid[0], grid[-1], 0.1)
    model = _profile_at(sums, fit, place)
    if not model.max() > 0.0:
        return 0.0, float(_FARTHEST * width)
    total = np.interp(fine + place, sums.offsets, model / model.max())
    total += np.interp(fine, grid, smooth)
    allowed = np.abs(fine) <= _FARTHEST * width
    top = int(np.flatnonzero(allowed)[np.argmax(total[allowed])])
    at = float(fine[top])
    # A slope of the unknown shape moves the crest by slope over curvature.
    step = max(round(5.0 * length), 10)
    low, high = max(top - step, 0), min(top + step, fine.size - 1)
    half = 0.05 * (high - low)
    curvature = (2.0 * total[top] - total[low] - total[high]) / half**2
    i = int(np.argmin(np.abs(grid - at)))
    i = min(max(i, 1), grid.size - 2)
    pair = covariance[np.ix_([i - 1, i + 1], [i - 1, i + 1])]
    slope_err = 0.5 * np.sqrt(max(float(pair[0, 0] + pair[1, 1] - 2 * pair[0, 1]), 0.0))
    err = slope_err / max(float(curvature), 1e-9)
    return at, float(min(err, _FARTHEST * width))


def _left_over(
    sums: StripSums, fit: JointFit, grid: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return what the fit leaves over, in heights, and its variance, on a grid."""
    weight = sums.weight.sum(axis=0).T
    has = weight > 0.0
    seen = np.where(has, position_time(sums, fit), 0.0)
    model = (sums.weight * fit.model).sum(axis=0).T / np.where(has, weight, 1.0)
    peaks = np.maximum(model.max(axis=1), 0.0)
    total, norm = np.zeros(grid.size), np.zeros(grid.size)
    for i, place in enumerate(fit.ridge.places):
        at = np.interp(grid + place, sums.offsets, seen[i] - model[i])
        info = np.interp(grid + place, sums.offsets, weight[i], left=0.0, right=0.0)
        total += peaks[i] * info * at
        norm += peaks[i] ** 2 * info
    norm = np.maximum(norm, 1e-12)
    return total / norm, 1.0 / norm


def _profile_at(sums: StripSums, fit: JointFit, place: float) -> FloatArray:
    """Return the model's mean profile with the ridge at a place, median seeing."""
    lobe = fit.ridge.lobe.in_one_seeing()
    ridge = Ridge(np.full_like(fit.ridge.places, place), lobe, fit.ridge.turn)
    model = Templates(sums, ridge, fit.dust).brightness(fit.density)
    return model[:, :, 0].mean(axis=0)
