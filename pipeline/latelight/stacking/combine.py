"""Combine epochs of one grid, PSF and flux scale into one quiet plane."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from latelight.records import FloatArray, PixelArray, Plane
from latelight.stacking._kernels import combine_block
from latelight.stacking.settings import StackingSettings
from latelight.threads import over_rows

__all__ = ["combine", "plane_weight"]

_STRIDE = 7


def plane_weight(plane: Plane) -> float:
    """Return the weight of a plane: 1 / typical variance of its pixels.

    One number a plane: weights that follow each pixel's own variance would follow
    its photons, and take light off every star.
    """
    step = np.s_[::_STRIDE, ::_STRIDE]
    variance, good = plane.variance[step], plane.mask[step] == 0
    return 1.0 / float(np.median(variance[good] if good.any() else variance))


def combine(
    planes: Sequence[Plane], *, sky: PixelArray, settings: StackingSettings
) -> Plane:
    """Return the weighted mean of planes, pixels at odds with the others left out.

    Parameters
    ----------
    planes : sequence of Plane
        On one grid, with one PSF, flux scale and sky level; noise independent
        between them.
    sky : float32 array, shape (ny, nx)
        Sky level, counts: what lies above it is light of stars.
    settings : StackingSettings
        ``clip`` and ``tolerance``.

    Returns
    -------
    Plane
        A pixel is masked, with the bits of all, only where it is in every plane.
        Its variance is ``sum w^2 v / (sum w)^2`` over the planes it was made of.

    Raises
    ------
    ValueError
        If there is no plane, or shapes differ.

    Notes
    -----
    The worst value x is left out while ``(x - m)^2 > clip^2 V + (tolerance (m -
    sky))^2``, m the median of the n values left and V the variance of ``x - m``: to
    first order ``v (1 - 2 / n) + (pi / 2) sum v / n^2``, the median taken for a mean
    whose variance is pi / 2 times as large (its limit for many values of one normal
    distribution, from memory; for 3 to 5 equal planes V is 3-12 % too large).  At
    most a minority, ``(n - 1) // 2``, is left out; when one more deviates by half as
    much as the last or more, nobody can tell which are right, and all are used.  Of
    two values neither can be left out.  The rule is even in ``x - m``, so blank sky
    is not biased.
    """
    if not planes:
        msg = "planes must not be empty"
        raise ValueError(msg)
    shape = planes[0].pixels.shape
    shapes = {*(plane.pixels.shape for plane in planes), sky.shape}
    if len(shapes) > 1:
        msg = f"planes and sky must have one shape, got {sorted(shapes)}"
        raise ValueError(msg)
    weights = np.array([plane_weight(plane) for plane in planes])
    weights /= weights.sum()
    out = (
        np.empty(shape, np.float32),
        np.empty(shape, np.float32),
        np.empty(shape, np.uint16),
    )

    def rows(first: int, last: int) -> None:
        box = np.s_[first:last]
        combine_block(
            np.stack([plane.pixels[box] for plane in planes]),
            np.stack([plane.variance[box] for plane in planes]),
            np.stack([plane.mask[box] for plane in planes]),
            weights,
            sky[box],
            settings.clip,
            settings.tolerance,
            out[0][box],
            out[1][box],
            out[2][box],
        )

    over_rows(rows, shape[0])
    return Plane(*out, noise_power=_noise_power(planes, weights))


def _noise_power(planes: Sequence[Plane], weights: FloatArray) -> FloatArray | None:
    """Return the power spectrum of the mean's noise.

    Each plane gives ``w^2 v`` of the variance, which is w for weights of 1 / v.
    """
    known = [plane.noise_power for plane in planes if plane.noise_power is not None]
    if not known:
        return None
    white = np.ones_like(known[0])
    powers = [white if p.noise_power is None else p.noise_power for p in planes]
    return np.average(powers, axis=0, weights=weights)
