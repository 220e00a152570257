"""The matching stage: two registered frames in, one PSF and flux scale out."""

from __future__ import annotations

from typing import Literal

import numpy as np

from latelight.errors import StageError
from latelight.mask_growth import disc, grow_mask
from latelight.matching.basis import make_basis
from latelight.matching.convolution import kernel_sum
from latelight.matching.fit import KernelFit, fit_kernel
from latelight.matching.layers import (
    KEEP_VALUE,
    Layer,
    convolved,
    layer_of,
    plane_of,
    scaled,
    smoothed,
)
from latelight.matching.psf import measure_psf
from latelight.matching.settings import MatchingSettings
from latelight.matching.sharpness import Roles, assign_roles, smoothing_needed
from latelight.matching.stars import choose_stars, matched_clean, spread_over_cells
from latelight.matching.system import FitImages, build_systems, disc_offsets
from latelight.records import (
    Alignment,
    FloatArray,
    IntArray,
    MatchedPair,
    PixelArray,
    Plane,
    SpatialKernel,
    SpatialPsf,
    StarList,
)
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["match_pair", "smoothing_for"]

_STAGE = "matching"

# Disc of the fit, in FWHM of the broader PSF: a Moffat of exponent 3 has 0.1 % of
# its light farther out.
_RADIUS_IN_FWHM = 6.0
# Disc in which held-out stars are judged: where a star's light matters.
_JUDGED_IN_FWHM = 2.5
# Stars enough to tell the sharper frame.
_STARS_FOR_ROLES = 120


def match_pair(
    science: Plane,
    template: Plane,
    *,
    science_stars: StarList,
    template_stars: StarList,
    alignment: Alignment,
    settings: MatchingSettings,
    convolve: Literal["sharper", "template"] = "sharper",
) -> MatchedPair:
    """Bring a template and a science frame to one PSF and one flux scale.

    Parameters
    ----------
    science : Plane
        The science frame.
    template : Plane
        The template, resampled onto the science grid.
    science_stars, template_stars : StarList
        Stars of each frame, on its own grid.
    alignment : Alignment
        Which stars are the same.
    settings : MatchingSettings
        Table ``[matching]``.
    convolve : {"sharper", "template"}
        ``"template"`` leaves the science frame as it is, so that many templates are
        brought to one PSF; :func:`smoothing_for` says how much the science frame must
        be smoothed beforehand.

    Returns
    -------
    MatchedPair
        Fluxes on the science frame's scale.

    Raises
    ------
    ValueError
        If the two planes differ in shape.
    StageError
        If there are too few common clean stars, before or after clipping, or the
        kernel's sum is not positive everywhere.

    Notes
    -----
    The sharper frame is convolved with a kernel of Gaussians times polynomials
    that varies over the frame (Alard & Lupton 1998, ApJ 503, 325,
    doi:10.1086/305984; Alard 2000, A&AS 144, 363, doi:10.1051/aas:2000214).
    Where neither is sharper in every direction and at every place, the frame that
    is not convolved is smoothed first, by the least that leaves nothing to sharpen.
    """
    if science.pixels.shape != template.pixels.shape:
        msg = (
            "template must be resampled onto the science grid: shapes "
            f"{template.pixels.shape} and {science.pixels.shape} differ"
        )
        raise ValueError(msg)
    rows, snr = matched_clean(science_stars, template_stars, alignment)
    roles = Roles(convolve_template=True, smoothing_px=0.0)
    if convolve == "sharper":
        psfs = _psfs(science, template, science_stars, rows, settings)
        roles = assign_roles(*psfs, sharpening=settings.sharpening)
    layers = {True: layer_of(template), False: layer_of(science)}
    sharp = layers[roles.convolve_template]
    broad = smoothed(layers[not roles.convolve_template], roles.smoothing_px)

    ratio = _flux_ratio(science_stars, template_stars, alignment)
    fwhm = _widths(science_stars, template_stars, roles)
    fit, stars = _fit(
        sharp,
        broad,
        rows,
        snr,
        science_stars,
        fwhm=fwhm,
        ratio=ratio if roles.convolve_template else 1.0 / ratio,
        settings=settings,
    )
    total = _positive_sum(fit.kernel)
    matched = convolved(sharp, fit.kernel)
    middle = float(fit.kernel.planes[0].sum())
    if roles.convolve_template:
        scale, science_layer, template_layer = middle, broad, matched
    else:
        # The kernel took the science frame to template counts: bring both back.
        scale, science_layer, template_layer = (
            1.0 / middle,
            scaled(matched, 1.0 / total),
            scaled(broad, 1.0 / total),
        )
    science_plane, template_plane = plane_of(science_layer), plane_of(template_layer)
    return MatchedPair(
        science=science_plane,
        template=template_plane,
        model=template_layer.light,
        convolved="template" if roles.convolve_template else "science",
        kernel=fit.kernel,
        smoothing_px=roles.smoothing_px,
        scale=scale,
        scale_err=fit.sum_err / middle * scale,
        fwhm_px=fwhm[1],
        n_fit=int(fit.fitted.sum()),
        n_held_out=int(fit.held_out.sum()),
        held_out_chi2=_held_out_chi2(
            science_plane,
            template_plane,
            stars[fit.held_out],
            radius=int(np.ceil(_JUDGED_IN_FWHM * fwhm[1])),
        ),
    )


def smoothing_for(
    science: Plane,
    template: Plane,
    *,
    science_stars: StarList,
    template_stars: StarList,
    alignment: Alignment,
    settings: MatchingSettings,
) -> float:
    """Return the smoothing a science frame needs for a template to be convolved to it.

    Parameters
    ----------
    science, template, science_stars, template_stars, alignment, settings
        As for :func:`match_pair`.

    Returns
    -------
    float
        Sigma of the Gaussian, pixels; 0 when the template is the sharper everywhere.

    Raises
    ------
    StageError
        If there are too few common clean stars for the PSFs.
    """
    rows, _ = matched_clean(science_stars, template_stars, alignment)
    psfs = _psfs(science, template, science_stars, rows, settings)
    return smoothing_needed(*psfs, sharpening=settings.sharpening)[0]


def _positive_sum(kernel: SpatialKernel) -> PixelArray:
    """Return the kernel's sum at every pixel; refuse one that is not positive."""
    total = kernel_sum(kernel)
    if not total.min() > 0:
        msg = (
            f"the kernel's sum falls to {total.min():.3g}, it must be positive; lower "
            "scale_degree in [matching], or leave the pair out"
        )
        raise StageError(_STAGE, msg)
    return total


def _psfs(
    science: Plane,
    template: Plane,
    stars: StarList,
    rows: IntArray,
    settings: MatchingSettings,
) -> tuple[SpatialPsf, SpatialPsf]:
    """Return the PSFs of both frames from the same stars."""
    x, y = stars.x[rows], stars.y[rows]
    spread = spread_over_cells(
        np.arange(rows.size), x, y, shape=science.mask.shape, most=_STARS_FOR_ROLES
    )
    x, y = x[spread], y[spread]
    return (
        measure_psf(science, x=x, y=y, settings=settings),
        measure_psf(template, x=x, y=y, settings=settings),
    )


def _flux_ratio(science: StarList, template: StarList, alignment: Alignment) -> float:
    """Return a first guess of science counts per template count."""
    s, t = alignment.science_index, alignment.template_index
    good = science.clean[s] & template.clean[t] & (template.flux[t] > 0)
    return float(np.median(science.flux[s][good] / template.flux[t][good]))


def _widths(science: StarList, template: StarList, roles: Roles) -> tuple[float, float]:
    """Return the FWHM of the frame to be convolved and of the other, smoothed."""
    pair = (template.fwhm_px, science.fwhm_px)
    sharp, broad = pair if roles.convolve_template else pair[::-1]
    return sharp, float(np.hypot(broad, FWHM_PER_SIGMA * roles.smoothing_px))


def _radius(fwhm: float) -> int:
    return max(5, int(np.ceil(_RADIUS_IN_FWHM * fwhm)))


def _fit(
    sharp: Layer,
    broad: Layer,
    rows: IntArray,
    snr: FloatArray,
    stars: StarList,
    *,
    fwhm: tuple[float, float],
    ratio: float,
    settings: MatchingSettings,
) -> tuple[KernelFit, IntArray]:
    """Fit the kernel; also return the (row, column) of its stars, shape (n, 2)."""
    sigma = fwhm[0] / FWHM_PER_SIGMA, fwhm[1] / FWHM_PER_SIGMA
    basis = make_basis(sharp_sigma=sigma[0], broad_sigma=sigma[1])
    radius = _radius(fwhm[1])
    images = _fit_images(sharp, broad, spoil=1.5 * fwhm[1])
    chosen = choose_stars(
        rows,
        snr,
        stars=stars,
        bad=images.bad,
        core=int(np.ceil(1.5 * fwhm[1])),
        radius=radius,
        settings=settings,
    )
    x, y = stars.x[chosen], stars.y[chosen]
    centre = np.stack([np.rint(y), np.rint(x)], axis=1).astype(np.int64)
    systems = build_systems(
        images,
        centre,
        basis=basis,
        radius=radius,
        scale=ratio,
        sharp_sigma=sigma[0],
        broad_sigma=sigma[1],
    )
    ny, nx = sharp.mask.shape
    fit = fit_kernel(systems, x=x, y=y, shape=(ny, nx), basis=basis, settings=settings)
    return fit, centre


def _fit_images(sharp: Layer, broad: Layer, *, spoil: float) -> FitImages:
    """Mark what a star's disc must leave out."""
    mask = sharp.mask | broad.mask
    # The light missing from a saturated core is missing around it once convolved.
    unknown = (mask & np.uint16(KEEP_VALUE)).astype(np.uint16)
    return FitImages(
        sharp=sharp.light,
        target=broad.light,
        sharp_variance=sharp.variance,
        target_variance=broad.variance,
        bad=(grow_mask(unknown, footprint=disc(spoil)) | mask) != 0,
        noise_power=sharp.noise_power,
    )


def _held_out_chi2(
    science: Plane, template: Plane, centre: IntArray, *, radius: int
) -> float:
    """Return the median reduced chi-square of stars in the matched difference."""
    if len(centre) == 0:
        return float("nan")
    ny, nx = science.mask.shape
    offsets = disc_offsets(radius)
    row = centre[:, 0, None] + offsets[:, 0]
    col = centre[:, 1, None] + offsets[:, 1]
    inside = (row >= 0) & (col >= 0) & (row < ny) & (col < nx)
    at = (np.clip(row, 0, ny - 1), np.clip(col, 0, nx - 1))
    good = inside & ((science.mask[at] | template.mask[at]) == 0)
    difference = (science.pixels[at] - template.pixels[at]).astype(float)
    variance = science.variance[at].astype(float) + template.variance[at]
    weight = np.where(good, 1.0 / variance, 0.0)
    mean = (weight * difference).sum(axis=1) / weight.sum(axis=1)
    chi2 = (weight * (difference - mean[:, None]) ** 2).sum(axis=1)
    return float(np.median(chi2 / (good.sum(axis=1) - 1)))
