"""Cosmic rays: pixels that stand out more sharply than any star can.

The telltale is that of van Dokkum (2001, PASP 113, 1420, DOI 10.1086/323894):
light has passed the optics, a cosmic ray has not, so the second difference of a
cosmic ray is larger than that of a star of its height.  His Laplacian is taken
here along four directions apart, so that a track of any direction is as sharp
across as a single hit; and where he compares with a fixed contrast, the limit is
the second difference of the sharpest stars of the same frame, so that stars
survive at any sampling.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.frames.flags._kernels import (
    cosmic_ray_rows,
    grow_cosmic_rays,
    star_sharpness,
)
from latelight.frames.noise import NoiseModel
from latelight.records import BoolArray, FloatArray, MaskArray, PixelArray
from latelight.threads import over_rows

__all__ = ["Sharpness", "find_cosmic_rays", "measure_sharpness"]

# A Gaussian of 2 px FWHM centred on a pixel drops by this much to the next pixel
# and to the next on the diagonal: what is assumed when no star can be measured.
DEFAULT_DROP = (0.50, 0.75)
# Stars that show their PSF: this many sigma at the peak.
STAR_SIGMA = 60.0
MIN_STARS = 4
MAX_STARS = 20000
# The sharpest stars, those centred on a pixel, without the odd hit on a star.
QUANTILE = 0.95
# Drops spread towards small values (stars between pixels, blends); a peak this many
# half-widths above their middle is no star.
OUTLIER = 2.5
GAP = 0.2
# Faint neighbours of a hit are hits at this many sigma.
GROW_SIGMA = 1.5
GROW_PASSES = 4


@dataclass(frozen=True, slots=True)
class Sharpness:
    """How far the sharpest stars drop from their peak to the next pixels.

    Attributes
    ----------
    axis, diagonal : float
        Fraction of the peak's height, along rows or columns and diagonals.
    n_stars : int
        Stars measured; 0 when the default stands in.
    """

    axis: float
    diagonal: float
    n_stars: int

    @property
    def fwhm_px(self) -> float:
        """Full width at half maximum of a Gaussian that drops as far, pixels."""
        drop = min(max(self.axis, 0.01), 0.9)
        # exp(-1 / (2 s^2)) = 1 - drop, and FWHM = 2.3548 s.
        return float(2.3548 / np.sqrt(-2.0 * np.log(1.0 - drop)))


def measure_sharpness(
    pixels: PixelArray, sky: PixelArray, mask: MaskArray, *, noise: NoiseModel
) -> Sharpness:
    """Measure the sharpest stars of a frame.

    Parameters
    ----------
    pixels, sky : float32 array, shape (ny, nx)
        Counts, and the smooth sky.
    mask : uint16 array, shape (ny, nx)
        Stars with a masked pixel are left out.
    noise : NoiseModel
        Of this frame.
    """
    sigma = float(np.sqrt(noise.sky_variance))
    drops = np.empty((MAX_STARS, 2))
    n_stars = star_sharpness(pixels, sky, mask, sigma, STAR_SIGMA * sigma, drops)
    if n_stars < MIN_STARS:
        return Sharpness(*DEFAULT_DROP, 0)
    stars = _without_gap(drops[:n_stars])
    return Sharpness(_sharpest(stars[:, 0]), _sharpest(stars[:, 1]), len(stars))


def _without_gap(drops: FloatArray) -> FloatArray:
    """Leave out the cosmic rays that passed for stars in a frame with few of these.

    Along the diagonal they drop to nothing, far beyond any sampled star.
    """
    ordered = drops[np.argsort(drops[:, 1])]
    gaps = np.diff(ordered[:, 1])
    gaps[: MIN_STARS - 2] = 0.0
    wide = np.flatnonzero(gaps > GAP)
    return ordered[: wide[0] + 1] if wide.size else ordered


def _sharpest(drops: FloatArray) -> float:
    """Return the upper end of the stars' drops; cosmic rays among them left out."""
    kept = np.sort(drops)
    for _ in range(10):
        low, middle = np.quantile(kept, [0.1587, 0.5])
        limit = middle + OUTLIER * max(middle - low, 0.05 * middle)
        if kept[-1] <= limit:
            break
        kept = kept[kept <= limit]
    return float(np.quantile(kept, QUANTILE))


def find_cosmic_rays(
    pixels: PixelArray,
    sky: PixelArray,
    mask: MaskArray,
    *,
    noise: NoiseModel,
    sharpness: Sharpness,
    n_sigma: float,
    margin: float,
) -> BoolArray:
    """Mark cosmic rays.

    Parameters
    ----------
    pixels, sky : float32 array, shape (ny, nx)
        Counts, and the smooth sky.
    mask : uint16 array, shape (ny, nx)
        Pixels known to be bad; they neither are nor make cosmic rays.
    noise : NoiseModel
        Of this frame.
    sharpness : Sharpness
        Of its stars.
    n_sigma : float
        Height over the sides, beyond what a star may show, in sigma.
    margin : float
        How many times sharper than the sharpest stars.

    Returns
    -------
    bool array, shape (ny, nx)
    """
    limits = (
        noise.sky_variance,
        1.0 / noise.gain,
        margin * sharpness.axis,
        margin * sharpness.diagonal,
    )
    hits = np.zeros(pixels.shape, dtype=np.uint8)
    over_rows(
        lambda first, last: cosmic_ray_rows(
            pixels, sky, mask, *limits, n_sigma, hits, first, last
        ),
        pixels.shape[0],
    )
    # Whole rows of bytes are searched many times faster as truth values.
    ys, xs = np.nonzero(hits.view(np.bool_))
    cleaned = pixels.copy()
    for _ in range(GROW_PASSES):
        if ys.size == 0:
            break
        new_ys, new_xs = (np.empty(8 * ys.size, dtype=np.int64) for _ in range(2))
        found = grow_cosmic_rays(
            pixels,
            cleaned,
            sky,
            mask,
            *limits,
            GROW_SIGMA,
            ys,
            xs,
            hits,
            new_ys,
            new_xs,
        )
        ys, xs = new_ys[:found], new_xs[:found]
    return hits != 0
