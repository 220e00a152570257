"""Unroll an image along a ridge: rows run along the normal, columns along the arc."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.records import ArcTrace, FloatArray

__all__ = ["straighten"]


def straighten(
    image: np.ndarray,
    trace: ArcTrace,
    offsets: FloatArray,
    *,
    order: int = 1,
    fill: float = 0.0,
) -> FloatArray:
    """Sample an image at distances along the normals of a trace.

    Parameters
    ----------
    image : array, shape (ny, nx)
        Any image on the frame's grid.
    trace : ArcTrace
        Centre line with n points and normals.
    offsets : float64 array, shape (m,) or (m, n)
        Distances along the normal, pixels, positive in the normal's sense; the
        same for all points of the trace, or for each point its own.
    order : {0, 1, 3}
        Spline order; 0 for masks.
    fill : float
        Value outside the image.

    Returns
    -------
    float64 array, shape (m, n)
        Row i holds the image at ``offsets[i]`` from each point of the trace.
    """
    angle = np.radians(trace.normal_angle)
    across = offsets if offsets.ndim == 2 else offsets[:, None]
    x = trace.x[None, :] + across * np.cos(angle)[None, :]
    y = trace.y[None, :] + across * np.sin(angle)[None, :]
    # Only the neighbourhood of the arc is touched, never the whole frame.
    pad = 4
    y0, y1 = int(np.floor(y.min())) - pad, int(np.ceil(y.max())) + pad + 1
    x0, x1 = int(np.floor(x.min())) - pad, int(np.ceil(x.max())) + pad + 1
    y0, x0 = max(y0, 0), max(x0, 0)
    y1, x1 = min(y1, image.shape[0]), min(x1, image.shape[1])
    if y1 <= y0 or x1 <= x0:
        return np.full(x.shape, fill)
    return ndimage.map_coordinates(
        np.asarray(image[y0:y1, x0:x1], dtype=float),
        [y - y0, x - x0],
        order=order,
        mode="constant",
        cval=fill,
    )
