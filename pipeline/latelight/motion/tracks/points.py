"""A track epoch by epoch, and its picture of position against time."""

from __future__ import annotations

import numpy as np

from latelight.motion.tracks.joint import JointFit
from latelight.motion.tracks.ridge import Templates
from latelight.motion.tracks.strips import StripSums
from latelight.records import FloatArray

__all__ = ["position_time", "reduced_chi2", "single_places"]

_REACH = 0.9
_TRIALS = 19
_LEAST_SNR = 3.5


def single_places(sums: StripSums, fit: JointFit) -> tuple[FloatArray, FloatArray]:
    """Return the place that each epoch alone gives, and 1 sigma, shape (n,).

    Shape, course and dust are those of the joint fit; height and place are free.
    NaN where the ridge is too faint to have a place of its own.
    """
    templates = Templates(sums, fit.ridge, fit.dust)
    shifts = _REACH * fit.ridge.lobe.full_width * np.linspace(-1.0, 1.0, _TRIALS)
    own = np.einsum("bmii->bmi", sums.omega)
    left = sums.signal - np.einsum("bmij,bmj->bmi", sums.omega, fit.model)
    left += own * fit.model
    gains = np.empty((shifts.size, fit.ridge.places.size))
    for row, shift in zip(gains, shifts, strict=True):
        model = templates.brightness(fit.density, float(shift))
        response = np.maximum((model * left).sum(axis=(0, 1)), 0.0)
        norm = (model**2 * own).sum(axis=(0, 1))
        row[:] = response**2 / np.maximum(norm, 1e-300)
    places = np.full(gains.shape[1], np.nan)
    errs = places.copy()
    step = shifts[1] - shifts[0]
    for i, gain in enumerate(gains.T):
        top = int(np.argmax(gain))
        if not 0 < top < shifts.size - 1 or gain[top] < _LEAST_SNR**2:
            continue
        before, here, after = gain[top - 1 : top + 2]
        bent = 2.0 * here - before - after
        if bent <= 0.0:
            continue
        places[i] = fit.ridge.places[i] + shifts[top]
        places[i] += 0.5 * step * (after - before) / bent
        # ln(likelihood) is half of the gain.
        errs[i] = step * np.sqrt(2.0 / bent)
    return places, errs


def position_time(sums: StripSums, fit: JointFit) -> FloatArray:
    """Return the profile of every epoch, static sky taken out, shape (n, m).

    The sky is what the epochs have in common once the model is taken from each;
    NaN where an epoch has no data.
    """
    back = sums.weight * fit.model
    back -= np.einsum("bmij,bmj->bmi", sums.omega, fit.model)
    total = (sums.signal + back).sum(axis=0)
    weight = sums.weight.sum(axis=0)
    has = weight > 0.0
    return np.where(has, total / np.where(has, weight, 1.0), np.nan).T


def reduced_chi2(sums: StripSums, fit: JointFit) -> float:
    """Return the reduced chi-square of what is left, summed over half widths."""
    left = sums.signal - np.einsum("bmij,bmj->bmi", sums.omega, fit.model)
    variance = np.einsum("bmii->bmi", sums.omega)
    size = max(1, round(0.5 * fit.ridge.lobe.full_width))
    edges = np.arange(0, sums.offsets.size, size)
    left = np.add.reduceat(left, edges, axis=1)
    variance = np.add.reduceat(variance, edges, axis=1)
    has = variance > 1e-6 * variance.max()
    square = float((left[has] ** 2 / variance[has]).sum())
    free = has.sum() - fit.freedom - fit.ridge.places.size - 5
    return square / max(float(free), 1.0)
