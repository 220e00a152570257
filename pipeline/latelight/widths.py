"""The width of a PSF image."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.records import FloatArray

__all__ = ["FWHM_PER_SIGMA", "fwhm_of"]

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))


def fwhm_of(image: FloatArray) -> float:
    """Return the full width at half maximum of a PSF image, pixels.

    The diameter of the circle with the area above half of the peak, measured on
    a spline-refined copy; the PSF is at the centre of the image.

    Parameters
    ----------
    image : float64 array, shape (k, k)
        k odd, at least 5.

    Raises
    ------
    ValueError
        If the image has no positive peak.
    """
    zoom = 8
    middle = image.shape[0] // 2
    # Wide enough for the half-maximum contour, found coarsely first.
    peak = float(image.max())
    if not peak > 0:
        msg = f"image must have a positive peak, got {peak}"
        raise ValueError(msg)
    coarse = np.sqrt(np.sum(image > 0.5 * peak) / np.pi)
    reach = min(middle, int(np.ceil(2.0 * coarse)) + 3)
    step = np.arange(-reach * zoom, reach * zoom + 1) / zoom + middle
    fine = ndimage.map_coordinates(
        image, np.meshgrid(step, step, indexing="ij"), order=3
    )
    labels, _ = ndimage.label(fine > 0.5 * fine.max())
    core = labels == labels[np.unravel_index(np.argmax(fine), fine.shape)]
    return float(2.0 * np.sqrt(core.sum() / np.pi) / zoom)
