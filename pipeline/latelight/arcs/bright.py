"""The stars that may cast spikes, bleeds, ghosts, haloes and residues."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from latelight.arcs.footprint import mask_disc
from latelight.masks import MaskBit
from latelight.records import BoolArray, Difference, FloatArray, MaskArray, StarList

__all__ = ["BrightStars", "bright_stars"]

_RESIDUE_WIDTHS = 3.0
"""Reach of a bright star's residue beyond its saturated core, PSF widths."""


@dataclass(frozen=True, slots=True)
class BrightStars:
    """Saturated stars, from the mask, and the brightest of the others.

    Attributes
    ----------
    x, y : float64 array, shape (n,)
        Pixels.
    flux : float64 array, shape (n,)
        Counts; of a saturated star roughly, from the size of its core and the
        highest peak below saturation, and infinite without one.
    core_px : float64 array, shape (n,)
        Radius of the saturated core, pixels; 0 for the others.
    residues : bool array, shape (ny, nx)
        Where they, and compact residuals, leave light.
    """

    x: FloatArray
    y: FloatArray
    flux: FloatArray
    core_px: FloatArray
    residues: BoolArray


def bright_stars(
    difference: Difference, stars: StarList, *, least_snr: float
) -> BrightStars:
    """Gather the bright stars of a difference.

    Parameters
    ----------
    difference : Difference
        Its mask shows the saturated cores.
    stars : StarList
        Stars of the science frame.
    least_snr : float
        Signal-to-noise ratio from which an unsaturated star counts.
    """
    snr = stars.flux / np.maximum(stars.flux_err, 1e-30)
    chosen = ~stars.saturated & (snr >= least_snr)
    x, y, flux = stars.x[chosen], stars.y[chosen], stars.flux[chosen]
    peaks = stars.peak[~stars.saturated]
    full_well = float(peaks.max()) if peaks.size else np.inf

    saturated = np.uint16(MaskBit.SATURATED | MaskBit.BLEED)
    label, n = ndimage.label(difference.mask & saturated)
    rows, cols = np.nonzero(label)
    which = label[rows, cols] - 1
    area = np.bincount(which, minlength=n).astype(float)
    centre_x = np.bincount(which, weights=cols, minlength=n) / np.maximum(area, 1.0)
    centre_y = np.bincount(which, weights=rows, minlength=n) / np.maximum(area, 1.0)
    core = np.sqrt(area / np.pi)
    all_x = np.concatenate([x, centre_x])
    all_y = np.concatenate([y, centre_y])
    all_core = np.concatenate([np.zeros(x.size), core])
    residues: MaskArray = np.zeros(difference.mask.shape, np.uint16)
    for star_x, star_y, radius in zip(all_x, all_y, all_core, strict=True):
        reach = float(radius) + _RESIDUE_WIDTHS * difference.fwhm_px
        mask_disc(residues, float(star_x), float(star_y), reach)
    for spot in difference.compact:
        mask_disc(residues, spot.x, spot.y, _RESIDUE_WIDTHS * difference.fwhm_px)
    # Twice the core's charge: the wings hold about as much as the core.
    all_flux = np.concatenate([flux, 2.0 * area * full_well])
    return BrightStars(all_x, all_y, all_flux, all_core, residues > 0)
