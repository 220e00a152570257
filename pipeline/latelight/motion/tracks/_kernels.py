"""Compiled loops of the tracks: sums over strips, and paths tried on them."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from latelight.records import FloatArray, IntArray, MaskArray, PixelArray

__all__ = ["lit_knots", "lit_ridge", "path_log_p", "strip_sums"]


@njit(nogil=True, cache=True)
def _between(image: PixelArray, row: int, col: int, fy: float, fx: float) -> float:
    """Return an image between four pixels, ``fy, fx`` from the first."""
    upper = (1.0 - fx) * image[row, col] + fx * image[row, col + 1]
    lower = (1.0 - fx) * image[row + 1, col] + fx * image[row + 1, col + 1]
    return (1.0 - fy) * upper + fy * lower


@njit(nogil=True, cache=True)
def strip_sums(
    pixels: PixelArray,
    variance: PixelArray,
    mask: MaskArray,
    excess: FloatArray,
    x: FloatArray,
    y: FloatArray,
    across_x: FloatArray,
    across_y: FloatArray,
    offsets: FloatArray,
    bins: IntArray,
    signal: FloatArray,
    omega: FloatArray,
    weight: FloatArray,
    first: int,
    last: int,
) -> None:
    """Sum all epochs along an arc, the static sky free in every sample.

    Parameters
    ----------
    pixels, variance, mask : array, shape (n, ny, nx)
        The series.
    excess : float64 array, shape (n,)
        Factor on the variance.
    x, y, across_x, across_y : float64 array, shape (s,)
        Points of the trace, and the step of one offset there, pixels.
    offsets : float64 array, shape (m,)
        Distances along the normal.
    bins : int array, shape (s,)
        Bin along the arc of each point.
    signal, weight : float64 array, shape (b, m, n)
        Output: sums of ``w_i (d_i - sum_j w_j d_j / W)`` and of ``w_i``.
    omega : float64 array, shape (b, m, n, n)
        Output: sums of ``delta_ij w_i - w_i w_j / W``, the covariance of ``signal``.
    first, last : int
        Offsets ``first <= k < last`` of the output are written.
    """
    n, ny, nx = pixels.shape
    d = np.zeros(n)
    w = np.zeros(n)
    for k in range(first, last):
        for s in range(x.size):
            px, py = x[s] + offsets[k] * across_x[s], y[s] + offsets[k] * across_y[s]
            if not (0.0 <= px < nx - 1.0 and 0.0 <= py < ny - 1.0):
                continue
            col, row = int(px), int(py)
            fx, fy = px - col, py - row
            total = mean = 0.0
            for i in range(n):
                w[i] = 0.0
                # A sample leans on four pixels: all of them must be sound.
                if (
                    mask[i, row, col]
                    | mask[i, row, col + 1]
                    | mask[i, row + 1, col]
                    | mask[i, row + 1, col + 1]
                ):
                    continue
                v = _between(variance[i], row, col, fy, fx)
                if not v > 0.0:
                    continue
                d[i] = _between(pixels[i], row, col, fy, fx)
                w[i] = 1.0 / (v * excess[i])
                total += w[i]
                mean += w[i] * d[i]
            if total == 0.0:
                continue
            mean /= total
            b = bins[s]
            for i in range(n):
                if w[i] == 0.0:
                    continue
                signal[b, k, i] += w[i] * (d[i] - mean)
                weight[b, k, i] += w[i]
                omega[b, k, i, i] += w[i]
                for j in range(n):
                    omega[b, k, i, j] -= w[i] * w[j] / total


@njit(nogil=True, cache=True)
def _height_free(r: FloatArray, g: FloatArray, scatter: float) -> float:
    """Return ln p of products r and g of a ridge, its heights integrated out."""
    norm, response = g.sum(), r.sum()
    if norm <= 0.0 or response <= 0.0:
        return 0.0
    height = response / norm
    spread = (scatter * height) ** 2
    off = r - height * g.sum(axis=1)
    inner = np.eye(r.size) + spread * g
    gain = 0.5 * spread * (off @ np.linalg.solve(inner, off))
    return gain + 0.5 * height * response - 0.5 * np.log(np.linalg.det(inner))


@njit(nogil=True, cache=True)
def path_log_p(
    signal: FloatArray,
    omega: FloatArray,
    lobes: FloatArray,
    rows: IntArray,
    places: FloatArray,
    step: float,
    starts: FloatArray,
    speeds: FloatArray,
    times: FloatArray,
    scatter: float,
) -> FloatArray:
    """Return ln of the probability of straight paths, but for a constant.

    Parameters
    ----------
    signal : float64 array, shape (m, n)
        Sums along the whole arc.
    omega : float64 array, shape (m, n, n)
        Their covariance.
    lobes : float64 array, shape (k, m)
        A unit lobe at each of the places.
    rows : int array, shape (k, 2)
        First and past-the-last row in which it is not zero.
    places : float64 array, shape (k,)
        Where, ``step`` apart, pixels.
    starts, speeds : float64 array, shape (a,), (b,)
        Places at time 0, pixels, and speeds, pixels per year, to try.
    times : float64 array, shape (n,)
        Julian years.
    scatter : float
        Of the heights at the epochs, 1 sigma as a fraction of their mean.

    Returns
    -------
    float64 array, shape (a, b)
        With heights A_i of normal prior, mean A and sigma ``scatter A`` about the
        best common A > 0, integrated out; 0 where there is no light.
    """
    n = times.size
    out = np.zeros((starts.size, speeds.size))
    r = np.zeros(n)
    g = np.zeros((n, n))
    at = np.zeros(n, np.int64)
    for a in range(starts.size):
        for b in range(speeds.size):
            for i in range(n):
                place = starts[a] + speeds[b] * times[i]
                k = int(np.floor((place - places[0]) / step + 0.5))
                at[i] = min(max(k, 0), places.size - 1)
            for i in range(n):
                first, last = rows[at[i], 0], rows[at[i], 1]
                r[i] = 0.0
                for u in range(first, last):
                    r[i] += lobes[at[i], u] * signal[u, i]
                for j in range(i + 1):
                    g[i, j] = 0.0
                    low = max(first, rows[at[j], 0])
                    high = min(last, rows[at[j], 1])
                    for u in range(low, high):
                        g[i, j] += lobes[at[i], u] * omega[u, i, j] * lobes[at[j], u]
                    g[j, i] = g[i, j]
            out[a, b] = _height_free(r, g, scatter)
    return out


@njit(nogil=True, cache=True)
def _scaled_erfc(z: float) -> float:
    """Return exp(z**2) erfc(z): Abramowitz & Stegun 7.1.23 (from memory) far out."""
    if z < 6.0:
        return math.exp(z * z) * math.erfc(z)
    q = 0.5 / (z * z)
    series = 1.0 - q * (1.0 - 3.0 * q * (1.0 - 5.0 * q * (1.0 - 7.0 * q)))
    return series / (z * math.sqrt(math.pi))


@njit(nogil=True, cache=True)
def _lobe(x: float, sigma: float, tail: float) -> float:
    """Return the unit-area exponentially modified Gaussian, tail towards -x."""
    gauss = math.exp(-0.5 * (x / sigma) ** 2)
    if tail < 1e-3 * sigma:
        return gauss / (sigma * math.sqrt(2.0 * math.pi))
    z = (sigma / tail + x / sigma) / math.sqrt(2.0)
    if z < -5.0:
        return math.exp(0.5 * (sigma / tail) ** 2 + x / tail) / tail
    return 0.5 * gauss * _scaled_erfc(z) / tail


@njit(nogil=True, cache=True)
def lit_ridge(
    offsets: FloatArray,
    centres: FloatArray,
    blurred: FloatArray,
    shares: FloatArray,
    tail: float,
    front: float,
    scale: float,
    first_knot: float,
    spacing: float,
    density: FloatArray,
) -> FloatArray:
    """Return the brightness of a ridge that sweeps over dust.

    Parameters
    ----------
    offsets : float64 array, shape (m,)
        Pixels along the motion.
    centres : float64 array, shape (b, n)
        Places of the ridge.
    blurred, shares : float64 array, shape (n,)
        Sigma of the Gaussian, and part of an offset from the ridge that was there
        before the PSF.
    tail, front, scale : float
        Scale of the exponential, the Gaussian's centre ahead of the ridge, and the
        factor that makes the ridge 1 high.
    first_knot, spacing : float
        Knots of the dust.
    density : float64 array, shape (b, k)
        Dust at the knots; that of the outermost ones beyond them.

    Returns
    -------
    float64 array, shape (b, m, n)
    """
    n_bins, n = centres.shape
    last = density.shape[1] - 1
    out = np.zeros((n_bins, offsets.size, n))
    for b in range(n_bins):
        for i in range(n):
            for u in range(offsets.size):
                x = offsets[u] - centres[b, i]
                height = scale * _lobe(x - front, blurred[i], tail)
                if height < 1e-4:
                    continue
                t = (offsets[u] - (1.0 - shares[i]) * x - first_knot) / spacing
                t = min(max(t, 0.0), float(last))
                k = min(int(t), last - 1)
                part = t - k
                dust = (1.0 - part) * density[b, k] + part * density[b, k + 1]
                out[b, u, i] = height * dust
    return out


@njit(nogil=True, cache=True)
def lit_knots(
    offsets: FloatArray,
    centres: FloatArray,
    blurred: FloatArray,
    shares: FloatArray,
    tail: float,
    front: float,
    scale: float,
    first_knot: float,
    spacing: float,
    n_knots: int,
) -> FloatArray:
    """Return the same for dust of density 1 at one knot, shape (b, m, n, n_knots)."""
    n_bins, n = centres.shape
    last = n_knots - 1
    out = np.zeros((n_bins, offsets.size, n, n_knots))
    for b in range(n_bins):
        for i in range(n):
            for u in range(offsets.size):
                x = offsets[u] - centres[b, i]
                height = scale * _lobe(x - front, blurred[i], tail)
                if height < 1e-4:
                    continue
                t = (offsets[u] - (1.0 - shares[i]) * x - first_knot) / spacing
                t = min(max(t, 0.0), float(last))
                k = min(int(t), last - 1)
                out[b, u, i, k] = height * (1.0 - t + k)
                out[b, u, i, k + 1] = height * (t - k)
    return out
