"""Smooth maps between the pixels of two frames.

A map is held at nodes about 32 px apart and joined by cubic splines: against
the WCS at every pixel of a 2048 x 2048 TAN-SIP frame this errs by some 1e-9 px.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike
from scipy.interpolate import RectBivariateSpline

from latelight.records import FloatArray, PixelMap

__all__ = ["evaluate", "identity_map", "invert", "jacobian_determinant", "wcs_map"]

_SPACING_PX = 32.0
_INVERSE_DEGREE = 5
_NEWTON_STEPS = 4


def evaluate(
    pixel_map: PixelMap, x: ArrayLike, y: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Return where a map takes some points.

    Parameters
    ----------
    pixel_map : PixelMap
        The map.
    x, y : array_like of float, one shape
        Science pixels, within the nodes of the map.

    Returns
    -------
    x, y : float64 array, shape of the input
        Template pixels.
    """
    x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    along_x, along_y = _splines(pixel_map)
    return along_x.ev(y, x), along_y.ev(y, x)


def jacobian_determinant(pixel_map: PixelMap) -> FloatArray:
    """Return template pixels per science pixel at the nodes, shape (my, mx).

    The absolute determinant of d(x', y') / d(x, y).
    """
    along_x, along_y = _splines(pixel_map)
    nodes = pixel_map.node_y, pixel_map.node_x
    determinant = along_x(*nodes, dy=1) * along_y(*nodes, dx=1) - along_x(
        *nodes, dx=1
    ) * along_y(*nodes, dy=1)
    return np.abs(determinant)


def identity_map(shape: tuple[int, int]) -> PixelMap:
    """Return the map that changes nothing, for a frame of shape (ny, nx)."""
    node_y, node_x = _nodes(shape[0]), _nodes(shape[1])
    map_y, map_x = np.meshgrid(node_y, node_x, indexing="ij")
    return PixelMap(node_y, node_x, map_y, map_x, error_px=0.0)


def invert(pixel_map: PixelMap, *, shape: tuple[int, int]) -> PixelMap:
    """Return the map from template pixels back to science pixels.

    Parameters
    ----------
    pixel_map : PixelMap
        Science pixels to template pixels.
    shape : (int, int)
        Shape (ny, nx) of the template frame.

    Returns
    -------
    PixelMap
        Exact to the splines where the science frame reaches, continued smoothly
        beyond it.

    Notes
    -----
    A polynomial of degree 5 of the inverse, fitted to the nodes, then Newton steps
    on the splines at the template's own nodes.
    """
    grid = identity_map(shape)
    wanted = np.array([grid.map_x.ravel(), grid.map_y.ravel()])
    place = _rough_inverse(pixel_map, wanted)
    along_x, along_y = _splines(pixel_map)
    lowest = np.array([[pixel_map.node_x[0]], [pixel_map.node_y[0]]])
    highest = np.array([[pixel_map.node_x[-1]], [pixel_map.node_y[-1]]])
    for _ in range(_NEWTON_STEPS):
        x, y = place
        gap = wanted - np.array([along_x.ev(y, x), along_y.ev(y, x)])
        slope = np.array(
            [
                [along_x.ev(y, x, dy=1), along_x.ev(y, x, dx=1)],
                [along_y.ev(y, x, dy=1), along_y.ev(y, x, dx=1)],
            ]
        )
        step = np.linalg.solve(slope.transpose(2, 0, 1), gap.T[..., None])[..., 0].T
        # Beyond its nodes a spline stands still and knows nothing.
        inside = ((place >= lowest) & (place <= highest)).all(axis=0)
        place = np.where(inside, place + step, place)
    size = grid.map_x.shape
    return PixelMap(
        grid.node_y,
        grid.node_x,
        place[1].reshape(size),
        place[0].reshape(size),
        error_px=pixel_map.error_px,
    )


def _rough_inverse(pixel_map: PixelMap, wanted: FloatArray) -> FloatArray:
    """Return science pixels of template pixels, shape (2, n), by a polynomial."""
    there = np.array([pixel_map.map_x.ravel(), pixel_map.map_y.ravel()])
    middle = there.mean(axis=1, keepdims=True)
    size = np.abs(there - middle).max()
    node_y, node_x = np.meshgrid(pixel_map.node_y, pixel_map.node_x, indexing="ij")
    here = np.array([node_x.ravel(), node_y.ravel()])
    terms = _power_terms((there - middle) / size)
    coefficients, *_ = np.linalg.lstsq(terms, here.T, rcond=None)
    return (_power_terms((wanted - middle) / size) @ coefficients).T


def _power_terms(point: FloatArray) -> FloatArray:
    """Return u**i v**j for i + j up to the degree, shape (n, n_terms)."""
    u, v = point
    return np.stack(
        [
            u**i * v**j
            for i in range(_INVERSE_DEGREE + 1)
            for j in range(_INVERSE_DEGREE + 1 - i)
        ],
        axis=1,
    )


def wcs_map(
    science_wcs: Any, template_wcs: Any, *, shape: tuple[int, int]
) -> PixelMap | None:
    """Return the map two frames' WCS predict.

    Parameters
    ----------
    science_wcs, template_wcs : astropy.wcs.WCS or None
        Celestial WCS of the frames; distortions included.
    shape : (int, int)
        Shape (ny, nx) of the science frame.

    Returns
    -------
    PixelMap or None
        None when a frame has no WCS, or when the template's cannot be inverted
        over the science frame.
    """
    if science_wcs is None or template_wcs is None:
        return None
    grid = identity_map(shape)
    # Flat private copies: a shared (n, 2) input of astropy's WCS is not safe.
    sky = science_wcs.all_pix2world(grid.map_x.ravel(), grid.map_y.ravel(), 0)
    # The projection alone first: the far side of the sky has no place on it.
    if not np.isfinite([*sky, *template_wcs.wcs_world2pix(*sky, 0)]).all():
        return None
    # quiet: an inverse that does not converge is told by its values below.
    x, y = template_wcs.all_world2pix(*sky, 0, quiet=True)
    if not np.isfinite([x, y]).all():
        return None
    size = grid.map_x.shape
    return PixelMap(
        grid.node_y, grid.node_x, y.reshape(size), x.reshape(size), error_px=0.0
    )


def _splines(
    pixel_map: PixelMap,
) -> tuple[RectBivariateSpline, RectBivariateSpline]:
    nodes = pixel_map.node_y, pixel_map.node_x
    return (
        RectBivariateSpline(*nodes, pixel_map.map_x),
        RectBivariateSpline(*nodes, pixel_map.map_y),
    )


def _nodes(size: int) -> FloatArray:
    # Half a spacing beyond the edges: a spline must not be clamped inside a pixel.
    low, high = -_SPACING_PX / 2.0, size - 1.0 + _SPACING_PX / 2.0
    count = max(4, int(np.ceil((high - low) / _SPACING_PX)) + 1)
    return np.linspace(low, high, count)
