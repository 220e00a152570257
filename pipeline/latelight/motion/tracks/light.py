"""How bright a fitted ridge is at every epoch, and along the arc."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.tracks.joint import JointFit
from latelight.motion.tracks.strips import StripSums
from latelight.records import FloatArray

__all__ = ["Light", "measure_light"]


@dataclass(frozen=True, slots=True)
class Light:
    """Brightness of a ridge.

    Attributes
    ----------
    heights, errs : float64 array, shape (n,)
        Peak along the motion, mean along the arc, of each epoch alone, and 1 sigma,
        counts; infinite error at an epoch without data.
    covariance : float64 array, shape (n, n)
        Of the heights.
    centre, length : float
        Where the light along the trace is centred, and the length of a uniform arc
        of the same spread, pixels.
    """

    heights: FloatArray
    errs: FloatArray
    covariance: FloatArray
    centre: float
    length: float


def measure_light(sums: StripSums, fit: JointFit) -> Light:
    """Measure the heights of a fitted ridge, without a prior, and its extent."""
    profile = fit.model.mean(axis=0)
    # Where no dust is lit there is no shape to scale; any positive one will do.
    peaks = np.maximum(profile.max(axis=0), 1e-3 * max(float(profile.max()), 1e-30))
    unit = fit.model / peaks
    norm = np.einsum("bmi,bmij,bmj->ij", unit, sums.omega, unit)
    response = np.einsum("bmi,bmi->i", unit, sums.signal)
    seen = np.diag(norm) > 1e-9 * float(np.diag(norm).max())
    # With the sky free, a common brightness of all epochs may be left undetermined.
    values, vectors = np.linalg.eigh(norm)
    good = values > 1e-9 * float(values[-1])
    inverse = np.where(good, 1.0 / np.where(good, values, 1.0), 0.0)
    covariance = (vectors * inverse) @ vectors.T
    heights = np.where(seen, covariance @ response, 0.0)
    errs = np.where(seen, np.sqrt(np.diag(covariance)), np.inf)
    centre, length = _extent(sums, fit)
    return Light(heights, errs, covariance, centre, length)


def _extent(sums: StripSums, fit: JointFit) -> tuple[float, float]:
    """Return the centre of the light along the arc, and its length, pixels."""
    along = sums.along
    even = fit.model.mean(axis=0)
    norm = np.einsum("mi,bmij,mj->b", even, sums.omega, even)
    response = np.einsum("mi,bmi->b", even, sums.signal)
    light = np.clip(response / np.maximum(norm, 1e-30), 0.0, 2.0)
    width = float(along[1] - along[0])
    if not light.sum() > 0.0:
        light = np.ones_like(along)
    centre = float(np.average(along, weights=light))
    variance = float(np.average((along - centre) ** 2, weights=light))
    # A bin has a spread of its own.
    spread = np.sqrt(variance + width**2 / 12.0)
    return centre, min(np.sqrt(12.0) * spread, width * along.size)
