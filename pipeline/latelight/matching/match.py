"""The matching stage: two registered frames in, one PSF and flux scale out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import sep

from latelight.errors import StageError
from latelight.mask_growth import disc, grow_mask
from latelight.masks import MaskBit
from latelight.matching._kernels import fill_bad
from latelight.matching.basis import make_basis
from latelight.matching.convolution import (
    convolve,
    convolve_mask,
    convolve_variance,
    convolved_power,
    gaussian_kernel,
    kernel_sum,
)
from latelight.matching.fit import KernelFit, fit_kernel
from latelight.matching.psf import measure_psf
from latelight.matching.settings import MatchingSettings
from latelight.matching.sharpness import Roles, assign_roles, smoothing_needed
from latelight.matching.stars import choose_stars, matched_clean, spread_over_cells
from latelight.matching.system import FitImages, build_systems, disc_offsets
from latelight.records import (
    Alignment,
    FloatArray,
    IntArray,
    MaskArray,
    MatchedPair,
    PixelArray,
    Plane,
    SpatialKernel,
    SpatialPsf,
    StarList,
)
from latelight.threads import over_rows
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["match_pair", "smoothing_for"]

_STAGE = "matching"

# Disc of the fit, in FWHM of the broader PSF: a Moffat of exponent 3 has 0.1 % of
# its light farther out.
_RADIUS_IN_FWHM = 6.0
# Disc in which held-out stars are judged: where a star's light matters.
_JUDGED_IN_FWHM = 2.5
_SKY_BOX = 128
# Stars enough to tell the sharper frame.
_STARS_FOR_ROLES = 120
# Pixels whose own value still says most about a bright star's light.
_KEEP_VALUE = MaskBit.SATURATED | MaskBit.BLEED | MaskBit.SPIKE


@dataclass(frozen=True, slots=True)
class _Layer:
    """A frame ready for convolution: sky removed, bad pixels filled."""

    light: PixelArray
    sky: PixelArray
    variance: PixelArray
    mask: MaskArray
    noise_power: FloatArray | None


def match_pair(
    science: Plane,
    template: Plane,
    *,
    science_stars: StarList,
    template_stars: StarList,
    alignment: Alignment,
    settings: MatchingSettings,
    smoothing_px: float | None = None,
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
    smoothing_px : float or None
        When given, the template is convolved whatever the PSFs, and the science
        frame first smoothed by a Gaussian of this sigma, pixels: so many templates
        are brought to one PSF (:func:`smoothing_for` says how much they need).

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
    if smoothing_px is None:
        psfs = _psfs(science, template, science_stars, rows, settings)
        roles = assign_roles(*psfs, sharpening=settings.sharpening)
    else:
        roles = Roles(convolve_template=True, smoothing_px=smoothing_px)
    layers = {True: _layer(template), False: _layer(science)}
    sharp = layers[roles.convolve_template]
    broad = _smoothed(layers[not roles.convolve_template], roles.smoothing_px)

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
    matched = _convolved(sharp, fit.kernel)
    middle = float(fit.kernel.planes[0].sum())
    if roles.convolve_template:
        scale, science_layer, template_layer = middle, broad, matched
    else:
        # The kernel took the science frame to template counts: bring both back.
        scale, science_layer, template_layer = (
            1.0 / middle,
            _scaled(matched, 1.0 / total),
            _scaled(broad, 1.0 / total),
        )
    science_plane, template_plane = _plane(science_layer), _plane(template_layer)
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


def _layer(plane: Plane) -> _Layer:
    """Take the sky off and fill the pixels that must not be spread."""
    bad = plane.mask != 0
    height, width = plane.pixels.shape
    sky = sep.Background(
        plane.pixels, mask=bad, bw=min(_SKY_BOX, width), bh=min(_SKY_BOX, height)
    ).back(dtype=np.float32)
    light = plane.pixels - sky
    lost = (plane.mask & ~np.uint16(_KEEP_VALUE)) != 0
    over_rows(lambda first, last: fill_bad(light, lost, 2, first, last), height)
    return _Layer(light, sky, plane.variance, plane.mask, plane.noise_power)


def _convolved(layer: _Layer, kernel: SpatialKernel) -> _Layer:
    total = kernel_sum(kernel)
    return _Layer(
        light=convolve(layer.light, kernel),
        sky=layer.sky * total,
        variance=convolve_variance(
            layer.variance, layer.mask, kernel, noise_power=layer.noise_power
        ),
        mask=convolve_mask(layer.mask, kernel),
        noise_power=convolved_power(kernel.at(*_middle(kernel)), layer.noise_power),
    )


def _middle(kernel: SpatialKernel) -> tuple[float, float]:
    ny, nx = kernel.shape
    return (nx - 1) / 2, (ny - 1) / 2


def _smoothed(layer: _Layer, sigma: float) -> _Layer:
    if sigma == 0.0:
        return layer
    ny, nx = layer.light.shape
    return _convolved(layer, gaussian_kernel(sigma, shape=(ny, nx)))


def _scaled(layer: _Layer, factor: PixelArray) -> _Layer:
    return _Layer(
        layer.light * factor,
        layer.sky * factor,
        layer.variance * factor**2,
        layer.mask,
        layer.noise_power,
    )


def _plane(layer: _Layer) -> Plane:
    light, sky = layer.light, layer.sky
    return Plane(light + sky, layer.variance, layer.mask, layer.noise_power)


def _fit(
    sharp: _Layer,
    broad: _Layer,
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


def _fit_images(sharp: _Layer, broad: _Layer, *, spoil: float) -> FitImages:
    """Mark what a star's disc must leave out."""
    mask = sharp.mask | broad.mask
    # The light missing from a saturated core is missing around it once convolved.
    unknown = (mask & np.uint16(_KEEP_VALUE)).astype(np.uint16)
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
