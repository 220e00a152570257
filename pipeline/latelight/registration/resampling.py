"""Resampling: one frame onto another's pixels, with its noise.

One pass: a pixel of the output is a weighted sum of 8 x 8 pixels of the input,
times the Jacobian of the map.  The Jacobian multiplies the whole pixel, sky
included: counts per pixel scale with the sky area of a pixel, and so the flux of
a star is kept.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import BSpline, make_interp_spline

from latelight.records import FloatArray, IntArray, PixelArray, PixelMap, Plane
from latelight.registration._kernels import (
    lag_covariance,
    mark_near_bad,
    resample_rows,
)
from latelight.registration.interpolation import kernel_weights
from latelight.registration.pixel_map import evaluate, jacobian_determinant
from latelight.registration.settings import RegistrationSettings
from latelight.threads import over_rows

__all__ = ["noise_power", "resample"]

# The sky put where the template has no pixel is known in blocks of this side.
_SKY_BLOCK_PX, _SKY_STRIDE_PX = 64, 4
_POWER_SIZE, _POWER_REACH, _POWER_SAMPLES = 64, 15, 24


def resample(
    plane: Plane,
    pixel_map: PixelMap,
    *,
    shape: tuple[int, int],
    settings: RegistrationSettings,
) -> Plane:
    """Bring a plane onto another frame's pixels.

    Parameters
    ----------
    plane : Plane
        The template as it was read: white noise, finite filler in bad pixels.
    pixel_map : PixelMap
        Science pixels to template pixels.
    shape : (int, int)
        Shape (ny, nx) of the science frame.
    settings : RegistrationSettings
        ``interpolation`` and ``bad_weight`` are used.

    Returns
    -------
    Plane
        On the science frame's grid.  The variance is that of one pixel,
        ``sum w^2 v``; how neighbours go together is in ``noise_power``.  A pixel
        takes the mask bits of the bad pixels it drew on when their share of the
        absolute weight exceeds ``bad_weight``; off the template it is
        ``NO_DATA`` and holds the sky of the nearest template pixels.

    Raises
    ------
    ValueError
        If the plane has been resampled before, or the map does not cover the
        shape.
    """
    if plane.noise_power is not None:
        msg = "plane has been resampled before; resample the frame as it was read"
        raise ValueError(msg)
    _check_cover(pixel_map, shape)
    weights = kernel_weights(settings.interpolation)
    tables = _spline_tables(pixel_map, shape)
    sky = (*_block_sky(plane), _SKY_BLOCK_PX)
    near_bad = np.zeros(plane.mask.shape, dtype=np.bool_)
    mark_near_bad(plane.mask, near_bad)
    out = (
        np.empty(shape, np.float32),
        np.empty(shape, np.float32),
        np.zeros(shape, np.uint16),
    )
    inputs = (plane.pixels, plane.variance, plane.mask)

    def rows(first: int, last: int) -> None:
        resample_rows(
            first,
            last,
            inputs,
            near_bad,
            sky,
            tables.columns,
            tables.row_basis,
            tables.row_start,
            weights,
            settings.bad_weight,
            out,
        )

    over_rows(rows, shape[0])
    power = noise_power(pixel_map, shape=shape, interpolation=settings.interpolation)
    return Plane(*out, noise_power=power)


def noise_power(
    pixel_map: PixelMap, *, shape: tuple[int, int], interpolation: str
) -> FloatArray:
    """Return the power spectrum of white noise once a map has resampled it.

    Parameters
    ----------
    pixel_map : PixelMap
        The map; its true sub-pixel phases, rotation and scale all count.
    shape : (int, int)
        Shape (ny, nx) of the output.
    interpolation : {"least-squares", "lanczos4", "lanczos3"}
        The kernel.

    Returns
    -------
    float64 array, shape (64, 64)
        On the FFT's frequency grid, mean 1.

    Notes
    -----
    The transform of the exact covariance ``sum_k W(p - k) W(p + J d - k)`` at
    lag d, averaged over output pixels spread over the frame; for a pure shift
    it is ``|sum_k W(p - k) exp(i w k)|^2``.
    """
    ny, nx = shape
    # A golden-ratio sequence: no beat with a map whose phase runs with x or y.
    n = np.arange(_POWER_SAMPLES**2)
    x = np.floor((n + 0.5) / n.size * (nx - 2.0)) + 0.5
    y = np.floor((n * 0.6180339887498949) % 1.0 * (ny - 2.0)) + 0.5
    here = np.array(evaluate(pixel_map, x - 0.5, y - 0.5))
    step_x = np.array(evaluate(pixel_map, x + 0.5, y - 0.5)) - here
    step_y = np.array(evaluate(pixel_map, x - 0.5, y + 0.5)) - here
    jacobian = np.moveaxis(np.stack([step_x, step_y], axis=1), -1, 0)
    covariance = lag_covariance(
        here[0],
        here[1],
        np.ascontiguousarray(jacobian),
        kernel_weights(interpolation),
        _POWER_REACH,
    )
    lags = np.zeros((_POWER_SIZE, _POWER_SIZE))
    size = 2 * _POWER_REACH + 1
    lags[:size, :size] = covariance / covariance[_POWER_REACH, _POWER_REACH]
    lags = np.roll(lags, (-_POWER_REACH, -_POWER_REACH), axis=(0, 1))
    power = np.maximum(np.fft.fft2(lags).real, 0.0)
    return power / power.mean()


@dataclass(frozen=True, slots=True)
class _SplineTables:
    """A map as spline coefficients across the rows, at every output column.

    A row of pixels then costs four terms a pixel, and no map of the size of the
    frame is ever held.
    """

    columns: tuple[FloatArray, FloatArray, FloatArray]
    row_basis: FloatArray
    row_start: IntArray


def _spline_tables(pixel_map: PixelMap, shape: tuple[int, int]) -> _SplineTables:
    rows, columns = np.arange(shape[0], dtype=float), np.arange(shape[1], dtype=float)
    # Of unit vectors: a product then does for all columns what a solver would do
    # for each.
    across = make_interp_spline(pixel_map.node_y, np.eye(pixel_map.node_y.size), k=3)
    tables = []
    for values in (pixel_map.map_x, pixel_map.map_y, jacobian_determinant(pixel_map)):
        along_x = make_interp_spline(pixel_map.node_x, values, k=3, axis=1)(columns)
        tables.append(across.c @ along_x)
    basis = BSpline.design_matrix(rows, across.t, 3)
    return _SplineTables(
        columns=(tables[0], tables[1], tables[2]),
        row_basis=basis.data.reshape(-1, 4),
        row_start=basis.indices.reshape(-1, 4)[:, 0].astype(np.int64),
    )


def _block_sky(plane: Plane) -> tuple[PixelArray, PixelArray]:
    """Median level and variance of blocks of pixels, good pixels only."""
    step = slice(None, None, _SKY_STRIDE_PX)
    good = plane.mask[step, step] == 0
    block = _SKY_BLOCK_PX // _SKY_STRIDE_PX
    blocks = []
    for image in (plane.pixels, plane.variance):
        sample = image[step, step]
        middle = np.median(sample[good]) if good.any() else np.median(sample)
        sample = np.where(good, sample, middle)
        pad = [(0, -n % block) for n in sample.shape]
        sample = np.pad(sample, pad, mode="edge")
        ny, nx = (n // block for n in sample.shape)
        cells = sample.reshape(ny, block, nx, block).swapaxes(1, 2)
        blocks.append(np.median(cells.reshape(ny, nx, -1), axis=2).astype(np.float32))
    return blocks[0], blocks[1]


def _check_cover(pixel_map: PixelMap, shape: tuple[int, int]) -> None:
    ends = (
        (pixel_map.node_y[0], pixel_map.node_y[-1], shape[0]),
        (pixel_map.node_x[0], pixel_map.node_x[-1], shape[1]),
    )
    if any(low > 0.0 or high < size - 1.0 for low, high, size in ends):
        msg = (
            f"pixel_map must cover the shape {shape}, its nodes reach from "
            f"({ends[0][0]:g}, {ends[1][0]:g}) to ({ends[0][1]:g}, {ends[1][1]:g})"
        )
        raise ValueError(msg)
