"""The straightened neighbourhood of an arc and its mean profile.

Noise of neighbouring pixels of a difference is correlated, by resampling and
convolution, and straightening correlates it further; both are carried into the
covariance of the profile.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.linalg import lapack

from latelight.records import ArcTrace, Difference, FloatArray
from latelight.straighten import straighten

__all__ = ["Profile", "Strip", "cut_strip", "mean_profile", "noise_correlation"]

_MAX_LAG = 7
_REGION_PX = 110
_CLIP_SIGMA = 4.0
_FEWEST_ROWS = 12
# Free background of a profile, in units of its noise: flat and sloping.
_BACKGROUND_SIGMAS = 10.0


@dataclass(frozen=True, slots=True)
class Strip:
    """An arc unrolled: rows across, columns along.

    Attributes
    ----------
    offsets : float64 array, shape (m,)
        Distance along the normal, pixels.
    values : float64 array, shape (m, n)
        Later minus earlier epoch, counts; 0 where there are no data.
    weight : float64 array, shape (m, n)
        1 / variance; 0 where there are no data.
    """

    offsets: FloatArray
    values: FloatArray
    weight: FloatArray


@dataclass(frozen=True, slots=True)
class Profile:
    """The mean over an arc.

    Attributes
    ----------
    offsets : float64 array, shape (m,)
        Where there are data, pixels along the normal.
    values, err : float64 array, shape (m,)
        Counts and 1 sigma.
    precision : float64 array, shape (m, m)
        Inverse of their covariance, a free background included.
    excess : float
        Variance of a sum over a lobe's width over that of independent pixels.
    """

    offsets: FloatArray
    values: FloatArray
    err: FloatArray
    precision: FloatArray
    excess: float


def cut_strip(
    difference: Difference,
    trace: ArcTrace,
    *,
    reach: float,
    sign: int,
    stretch: FloatArray | None = None,
) -> Strip:
    """Unroll a difference along a trace.

    Parameters
    ----------
    difference : Difference
        The difference image.
    trace : ArcTrace
        Centre line.
    reach : float
        How far to go along the normals on both sides, pixels.
    sign : {1, -1}
        -1 turns the difference over, so that the later epoch counts positive.
    stretch : float64 array, shape (n,), optional
        What the offsets are multiplied by at each point of the trace: lobes that
        do not run parallel then lie straight, both of them.
    """
    half = int(np.ceil(reach))
    offsets = np.arange(-half, half + 1, dtype=float)
    across = offsets if stretch is None else np.outer(offsets, stretch)
    values = straighten(difference.pixels, trace, across)
    variance = straighten(difference.variance, trace, across, fill=np.inf)
    bad = straighten((difference.mask != 0).view(np.uint8), trace, across, fill=1.0)
    # A sample leans on four pixels: all of them must be sound.
    good = (bad < 1e-6) & np.isfinite(variance) & (variance > 0.0)
    weight = np.where(good, 1.0 / np.where(good, variance, 1.0), 0.0)
    return Strip(offsets, np.where(good, sign * values, 0.0), weight)


def noise_correlation(difference: Difference, x: float, y: float) -> FloatArray:
    """Return the correlation of the noise around a place, by lag.

    Parameters
    ----------
    difference : Difference
        The difference image.
    x, y : float
        The place, pixels.

    Returns
    -------
    float64 array, shape (15, 15)
        Product of two pixels ``(row - 7, col - 7)`` apart, each over its sigma:
        the middle is the measured over the predicted variance.
    """
    ny, nx = difference.pixels.shape
    y0, y1 = max(0, int(y) - _REGION_PX), min(ny, int(y) + _REGION_PX)
    x0, x1 = max(0, int(x) - _REGION_PX), min(nx, int(x) + _REGION_PX)
    box = np.s_[y0:y1, x0:x1]
    z = difference.pixels[box] / np.sqrt(difference.variance[box])
    limit = _CLIP_SIGMA * max(difference.noise_ratio, 0.5)
    # Stars, the arc and other echoes are no noise; their rims are faint.
    use = ((difference.mask[box] == 0) & (np.abs(z) < limit)).astype(np.float32)
    shape = tuple(fft.next_fast_len(n + _MAX_LAG, real=True) for n in use.shape)
    spectrum = fft.rfft2(np.where(use > 0, z, 0.0).astype(np.float32), shape)
    window = fft.rfft2(use, shape)
    products = fft.irfft2(np.abs(spectrum) ** 2, shape)
    pairs = fft.irfft2(np.abs(window) ** 2, shape)
    lags = np.arange(-_MAX_LAG, _MAX_LAG + 1)
    at = np.ix_(lags, lags)
    correlation = products[at].astype(float) / np.maximum(pairs[at], 1.0)
    # Far lags are little but noise: fade them out beyond half of the reach.
    reach = np.hypot.outer(lags, lags) / (_MAX_LAG + 1)
    fade = np.cos(np.pi * np.clip(reach - 0.5, 0.0, 0.5)) ** 2
    return correlation * fade


def mean_profile(
    strip: Strip, correlation: FloatArray, *, normal_angle: float, width_px: float
) -> Profile:
    """Average a strip along the arc.

    Parameters
    ----------
    strip : Strip
        The unrolled arc.
    correlation : float64 array, shape (k, k)
        Noise correlation by lag, k odd.
    normal_angle : float
        Pixel angle of the normals, degrees.
    width_px : float
        Full width of a lobe, for ``excess``.

    Raises
    ------
    ValueError
        If too few rows hold any usable pixel.

    Notes
    -----
    Averaged along the arc, noise with the correlation ``R(lag)`` has the
    covariance ``sum_lag R(lag) B(du - lag . normal)`` across it, with B the cubic
    B-spline: the correlation that linear interpolation at random phases gives.
    """
    weight = strip.weight.sum(axis=1)
    # A row with few data has wild values and hides in the covariance.
    use = weight > 0.0
    if use.any():
        use = weight > 0.2 * np.median(weight[use])
    if use.sum() < _FEWEST_ROWS:
        msg = (
            f"the arc must have {_FEWEST_ROWS} usable rows of pixels across it, got "
            f"{int(use.sum())}; it lies in masked pixels or off the frame"
        )
        raise ValueError(msg)
    offsets, weight = strip.offsets[use], weight[use]
    values = (strip.values * strip.weight).sum(axis=1)[use] / weight
    across = _across_covariance(correlation, normal_angle, strip.offsets.size)
    row = np.rint(offsets - offsets[0]).astype(int)
    lag = np.abs(row[:, None] - row[None, :])
    err = np.sqrt(max(across[0], 1e-6) / weight)
    covariance = across[lag] / np.sqrt(np.outer(weight, weight))
    free = _BACKGROUND_SIGMAS * np.median(err)
    slope = offsets / np.abs(offsets).max()
    covariance += free**2 * (1.0 + np.outer(slope, slope))
    lobe = np.exp(-4.0 * np.log(2.0) * (np.arange(-30.0, 31.0) / width_px) ** 2)
    auto = np.correlate(lobe, lobe, mode="full")[lobe.size - 1 :][: across.size]
    excess = 2.0 * float(across[: auto.size] @ auto) - across[0] * auto[0]
    return Profile(
        offsets=offsets,
        values=values,
        err=err,
        precision=_inverse(covariance, err),
        excess=max(excess / auto[0], 0.1),
    )


def _across_covariance(
    correlation: FloatArray, normal_angle: float, size: int
) -> FloatArray:
    """Return the covariance of profile values 0, 1, ... size - 1 pixels apart."""
    reach = correlation.shape[0] // 2
    lags = np.arange(-reach, reach + 1)
    angle = np.radians(normal_angle)
    along_normal = np.add.outer(lags * np.sin(angle), lags * np.cos(angle)).ravel()
    out = np.zeros(size)
    near = np.arange(min(size, 2 * reach + 3))
    spline = _cubic_spline(near[:, None] - along_normal[None, :])
    out[: near.size] = spline @ correlation.ravel()
    return out


def _cubic_spline(x: FloatArray) -> FloatArray:
    """Return the cubic B-spline: 2/3 at 0, zero from 2 on, area 1."""
    a = np.abs(x)
    inner = 2.0 / 3.0 - a**2 + 0.5 * a**3
    outer = np.maximum(2.0 - a, 0.0) ** 3 / 6.0
    return np.where(a < 1.0, inner, outer)


def _inverse(covariance: FloatArray, err: FloatArray) -> FloatArray:
    """Invert a covariance whose measured correlation may be slightly impossible."""
    diagonal = np.diag(err**2)
    for ridge in (0.02, 0.1, 0.5, 2.0):
        factor, fault = lapack.dpotrf(covariance + ridge * diagonal, lower=1)
        if fault == 0:
            inverse, _ = lapack.dpotri(factor, lower=1)
            return np.tril(inverse) + np.tril(inverse, -1).T
    return np.diag(1.0 / np.diag(covariance))
