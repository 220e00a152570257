"""Compiled loops of registration: interpolation and star moments."""

from __future__ import annotations

import numpy as np
from numba import njit

from latelight.records import BoolArray, FloatArray, IntArray, MaskArray, PixelArray
from latelight.registration.interpolation import AFTER, BEFORE, TAPS

__all__ = ["lag_covariance", "mark_near_bad", "measure_stars", "resample_rows"]

_NO_DATA = np.uint16(1)
# A tap with a smaller share of the weight does not hand its mask bits on.
_NEGLIGIBLE = 1e-3
_CENTROID_ROUNDS = 20
_CENTROID_STEP = 1e-4


@njit(nogil=True, cache=True)
def _spline(basis: FloatArray, table: FloatArray, first: int, column: int) -> float:
    """Value of a cubic spline from its four B-spline terms across the rows."""
    return (
        basis[0] * table[first, column]
        + basis[1] * table[first + 1, column]
        + basis[2] * table[first + 2, column]
        + basis[3] * table[first + 3, column]
    )


@njit(nogil=True, cache=True)
def _inner(
    pixels: PixelArray,
    variance: PixelArray,
    x0: int,
    y0: int,
    wx: PixelArray,
    wy: PixelArray,
) -> tuple[float, float]:
    """Weighted sum of 8 x 8 pixels that are all good, and its variance."""
    # Eight running sums, one a column, become one vector instruction; a loop
    # over columns takes a third longer (measured).
    a0 = a1 = a2 = a3 = a4 = a5 = a6 = a7 = np.float32(0.0)
    v0 = v1 = v2 = v3 = v4 = v5 = v6 = v7 = np.float32(0.0)
    for j in range(TAPS):
        w = wy[j]
        w2 = w * w
        row = pixels[y0 + j, x0 : x0 + TAPS]
        var = variance[y0 + j, x0 : x0 + TAPS]
        a0 += w * row[0]
        a1 += w * row[1]
        a2 += w * row[2]
        a3 += w * row[3]
        a4 += w * row[4]
        a5 += w * row[5]
        a6 += w * row[6]
        a7 += w * row[7]
        v0 += w2 * var[0]
        v1 += w2 * var[1]
        v2 += w2 * var[2]
        v3 += w2 * var[3]
        v4 += w2 * var[4]
        v5 += w2 * var[5]
        v6 += w2 * var[6]
        v7 += w2 * var[7]
    value = (
        (a0 * wx[0] + a1 * wx[1] + a2 * wx[2] + a3 * wx[3])
        + (a4 * wx[4] + a5 * wx[5] + a6 * wx[6] + a7 * wx[7])
    )  # fmt: skip
    spread = (
        v0 * wx[0] ** 2 + v1 * wx[1] ** 2 + v2 * wx[2] ** 2 + v3 * wx[3] ** 2
        + v4 * wx[4] ** 2 + v5 * wx[5] ** 2 + v6 * wx[6] ** 2 + v7 * wx[7] ** 2
    )  # fmt: skip
    return value, spread


@njit(nogil=True, cache=True)
def _near_bad(
    pixels: PixelArray,
    variance: PixelArray,
    mask: MaskArray,
    x0: int,
    y0: int,
    wx: PixelArray,
    wy: PixelArray,
    bad_weight: float,
) -> tuple[float, float, int]:
    """Sum like :func:`_inner`, with mask bits; the edge pixel stands in outside."""
    ny, nx = pixels.shape
    value, spread, total, bad = 0.0, 0.0, 0.0, 0.0
    for j in range(TAPS):
        for i in range(TAPS):
            total += abs(wy[j] * wx[i])
    bits = 0
    for j in range(TAPS):
        y = min(max(y0 + j, 0), ny - 1)
        for i in range(TAPS):
            x = min(max(x0 + i, 0), nx - 1)
            w = wy[j] * wx[i]
            value += w * pixels[y, x]
            spread += w * w * variance[y, x]
            tap = mask[y, x]
            if y != y0 + j or x != x0 + i:
                tap |= _NO_DATA
            if tap != 0 and abs(w) > _NEGLIGIBLE * total:
                bad += abs(w)
                bits |= tap
    return value, spread, bits if bad > bad_weight * total else 0


@njit(nogil=True, cache=True)
def mark_near_bad(mask: MaskArray, near: BoolArray) -> None:
    """Mark the pixels about which the taps meet a masked one."""
    ny, nx = mask.shape
    for y in range(ny):
        for x in range(nx):
            if mask[y, x] != 0:
                for row in range(max(y - AFTER, 0), min(y + BEFORE + 1, ny)):
                    near[row, max(x - AFTER, 0) : min(x + BEFORE + 1, nx)] = True


@njit(nogil=True, cache=True)
def resample_rows(
    first_row: int,
    last_row: int,
    inputs: tuple[PixelArray, PixelArray, MaskArray],
    near_bad: BoolArray,
    sky: tuple[PixelArray, PixelArray, int],
    tables: tuple[FloatArray, FloatArray, FloatArray],
    row_basis: FloatArray,
    row_start: IntArray,
    weights: PixelArray,
    bad_weight: float,
    outputs: tuple[PixelArray, PixelArray, MaskArray],
) -> None:
    """Interpolate some rows of the output.

    ``tables`` hold x', y' and the Jacobian as spline coefficients across the
    rows, at every output column; ``sky`` the level and variance of blocks of
    that many pixels; ``weights[p]`` the taps for the sub-pixel phase p.
    """
    pixels, variance, mask = inputs
    out, out_variance, out_mask = outputs
    sky_level, sky_variance, block = sky
    ny, nx = pixels.shape
    phases = weights.shape[0] - 1
    for r in range(first_row, last_row):
        basis, start = row_basis[r], row_start[r]
        for c in range(out.shape[1]):
            px = _spline(basis, tables[0], start, c)
            py = _spline(basis, tables[1], start, c)
            area = _spline(basis, tables[2], start, c)
            if not (-0.5 <= px < nx - 0.5 and -0.5 <= py < ny - 0.5):
                by = int(min(max(py, 0.0), ny - 1.0)) // block
                bx = int(min(max(px, 0.0), nx - 1.0)) // block
                out[r, c] = sky_level[by, bx] * area
                out_variance[r, c] = sky_variance[by, bx] * area * area
                out_mask[r, c] = _NO_DATA
                continue
            ix, iy = int(np.floor(px)), int(np.floor(py))
            wx = weights[int((px - ix) * phases + 0.5)]
            wy = weights[int((py - iy) * phases + 0.5)]
            x0, y0 = ix - BEFORE, iy - BEFORE
            inside = x0 >= 0 and y0 >= 0 and x0 + TAPS <= nx and y0 + TAPS <= ny
            if inside and near_bad[iy, ix] == 0:
                value, spread = _inner(pixels, variance, x0, y0, wx, wy)
            else:
                value, spread, bits = _near_bad(
                    pixels, variance, mask, x0, y0, wx, wy, bad_weight
                )
                out_mask[r, c] = bits
            out[r, c] = value * area
            out_variance[r, c] = spread * area * area


@njit(nogil=True, cache=True)
def lag_covariance(
    x: FloatArray,
    y: FloatArray,
    jacobian: FloatArray,
    weights: PixelArray,
    reach: int,
) -> FloatArray:
    """Mean covariance of resampled white noise of unit variance with its neighbours.

    ``x, y`` are template positions of some output pixels and ``jacobian[n]`` is
    d(x', y')/d(x, y) there.  Element ``[reach + dy, reach + dx]`` of the result
    is ``sum_k W(p - k) W(p + J d - k)`` averaged over them, W the kernel.
    """
    size = 2 * reach + 1
    phases = weights.shape[0] - 1
    covariance = np.zeros((size, size))
    for n in range(x.size):
        ix, iy = int(np.floor(x[n])), int(np.floor(y[n]))
        wx = weights[int((x[n] - ix) * phases + 0.5)]
        wy = weights[int((y[n] - iy) * phases + 0.5)]
        for dy in range(-reach, reach + 1):
            for dx in range(-reach, reach + 1):
                qx = x[n] + jacobian[n, 0, 0] * dx + jacobian[n, 0, 1] * dy
                qy = y[n] + jacobian[n, 1, 0] * dx + jacobian[n, 1, 1] * dy
                jx, jy = int(np.floor(qx)), int(np.floor(qy))
                if abs(jx - ix) >= TAPS or abs(jy - iy) >= TAPS:
                    continue
                ux = weights[int((qx - jx) * phases + 0.5)]
                uy = weights[int((qy - jy) * phases + 0.5)]
                along_x, along_y = 0.0, 0.0
                for k in range(max(0, jx - ix), min(TAPS, TAPS + jx - ix)):
                    along_x += wx[k] * ux[k - jx + ix]
                for k in range(max(0, jy - iy), min(TAPS, TAPS + jy - iy)):
                    along_y += wy[k] * uy[k - jy + iy]
                covariance[reach + dy, reach + dx] += along_x * along_y
    return covariance / x.size


@njit(nogil=True, cache=True)
def _window(
    center: float, sigma: float, first: int, last: int, window: FloatArray
) -> None:
    for i in range(first, last):
        window[i - first] = np.exp(-0.5 * ((i - center) / sigma) ** 2)


@njit(nogil=True, cache=True)
def _centroid(
    pixels: PixelArray,
    x: float,
    y: float,
    sigma: float,
    half: int,
    window_x: FloatArray,
    window_y: FloatArray,
) -> tuple[float, float]:
    """Windowed centroid near a place; the place itself where none is found."""
    ny, nx = pixels.shape
    start_x, start_y = x, y
    for _ in range(_CENTROID_ROUNDS):
        cx, cy = int(np.floor(x + 0.5)), int(np.floor(y + 0.5))
        xa, xb = max(cx - half, 0), min(cx + half + 1, nx)
        ya, yb = max(cy - half, 0), min(cy + half + 1, ny)
        _window(x, sigma, xa, xb, window_x)
        _window(y, sigma, ya, yb, window_y)
        total, along_x, along_y = 0.0, 0.0, 0.0
        for j in range(ya, yb):
            row, row_x = 0.0, 0.0
            for i in range(xa, xb):
                value = window_x[i - xa] * pixels[j, i]
                row += value
                row_x += value * (i - x)
            total += window_y[j - ya] * row
            along_x += window_y[j - ya] * row_x
            along_y += window_y[j - ya] * row * (j - y)
        if total <= 0.0:
            return start_x, start_y
        # Twice: a window as wide as the star shows half of an offset.
        step_x, step_y = 2.0 * along_x / total, 2.0 * along_y / total
        x += step_x
        y += step_y
        if (x - start_x) ** 2 + (y - start_y) ** 2 > (2.0 * sigma) ** 2:
            return start_x, start_y
        if step_x**2 + step_y**2 < _CENTROID_STEP**2:
            break
    return x, y


@njit(nogil=True, cache=True)
def measure_stars(
    first_star: int,
    last_star: int,
    inputs: tuple[PixelArray, PixelArray, MaskArray],
    places: FloatArray,
    sigma: float,
    aperture: float,
    out: FloatArray,
    out_bits: MaskArray,
) -> None:
    """Windowed centroid, moments and aperture flux of some stars.

    ``inputs`` are pixels free of sky, their variance and mask; ``places[n]`` is
    where star n is about; the window is a Gaussian of ``sigma``.  Row n of
    ``out`` becomes x, y, position variance of one coordinate, flux, flux
    variance, and the windowed second moments xx, yy, xy; ``out_bits[n]`` what
    the mask says within the aperture.
    """
    pixels, variance, mask = inputs
    ny, nx = pixels.shape
    half = int(np.ceil(max(4.0 * sigma, aperture + 1.0)))
    window_x, window_y = np.empty(2 * half + 1), np.empty(2 * half + 1)
    for n in range(first_star, last_star):
        x, y = _centroid(
            pixels, places[n, 0], places[n, 1], sigma, half, window_x, window_y
        )
        cx, cy = int(np.floor(x + 0.5)), int(np.floor(y + 0.5))
        xa, xb = max(cx - half, 0), min(cx + half + 1, nx)
        ya, yb = max(cy - half, 0), min(cy + half + 1, ny)
        _window(x, sigma, xa, xb, window_x)
        _window(y, sigma, ya, yb, window_y)
        total, xx, yy, xy, position = 0.0, 0.0, 0.0, 0.0, 0.0
        flux, flux_variance, bits = 0.0, 0.0, 0
        for j in range(ya, yb):
            for i in range(xa, xb):
                dx, dy = i - x, j - y
                r2 = dx * dx + dy * dy
                weight = window_x[i - xa] * window_y[j - ya]
                value = weight * pixels[j, i]
                total += value
                xx += value * dx * dx
                yy += value * dy * dy
                xy += value * dx * dy
                position += weight**2 * variance[j, i] * r2
                # The aperture's rim is one pixel soft.
                share = min(max(aperture + 0.5 - np.sqrt(r2), 0.0), 1.0)
                if share > 0.0:
                    flux += share * pixels[j, i]
                    flux_variance += share**2 * variance[j, i]
                    bits |= mask[j, i]
        total = max(total, 1e-30)
        # 4 sum w^2 v dx^2 / (sum w I)^2, the mean of the two coordinates.
        out[n, 0], out[n, 1], out[n, 2] = x, y, 2.0 * position / total**2
        out[n, 3], out[n, 4] = flux, flux_variance
        out[n, 5], out[n, 6], out[n, 7] = xx / total, yy / total, xy / total
        out_bits[n] = bits
