"""Stars of one frame: found, centred, sized, and judged.

Detection (sky mesh, extraction, deblending) is sep's, after Bertin & Arnouts
(1996, A&AS 117, 393, doi:10.1051/aas:1996164), with the noise of the plane's
variance: in a crowded field the scatter of the sky is confusion, not noise.
Places and sizes come from moments under a Gaussian window as wide as the stars.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import sep
from scipy.spatial import cKDTree

from latelight.errors import StageError
from latelight.masks import MaskBit
from latelight.records import (
    BoolArray,
    FloatArray,
    MaskArray,
    PixelArray,
    Plane,
    StarList,
)
from latelight.registration._kernels import measure_stars
from latelight.registration.polynomial import fit_surface
from latelight.registration.settings import RegistrationSettings
from latelight.statistics import robust_sigma
from latelight.threads import over_rows

__all__ = ["detect_stars"]

_STAGE = "registration"
_FWHM_OF_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
_SATURATED = int(MaskBit.SATURATED | MaskBit.BLEED | MaskBit.SPIKE)
_DEBLEND_LEVELS, _DEBLEND_CONTRAST = 16, 0.02
# Widths of this many bright stars set the window.
_WINDOW_STARS, _WINDOW_ROUNDS = 300, 6
_APERTURE_FWHM = 1.5
# A neighbour this near (FWHM) with this share of the flux spoils a centroid.
_NEIGHBOUR_FWHM, _NEIGHBOUR_SHARE = 2.5, 0.1
# Star-like: width and elongation within so many sigmas of the stars around, and
# never narrower a gate than the PSF's own changes over a frame.
_LOCUS_SIGMA, _LOCUS_FRACTION, _LOCUS_ELONGATION = 4.0, 0.08, 0.12


def detect_stars(plane: Plane, *, settings: RegistrationSettings) -> StarList:
    """Find the stars of a frame.

    Parameters
    ----------
    plane : Plane
        Pixels, variance and mask.
    settings : RegistrationSettings
        ``sky_mesh_px``, ``detect_sigma``, ``min_area_px`` and ``clean_snr`` are
        used.

    Returns
    -------
    StarList
        Brightest first; galaxies and blends are in it too, not ``clean``.
        ``fwhm`` is that of the Gaussian with the star's windowed moments.
        Empty, with a ``fwhm_px`` of NaN, when nothing stands out.

    Raises
    ------
    StageError
        If the extraction cannot hold the frame: its background is not flat, or
        its variance far too small.
    """
    sky, above = _subtract_sky(plane, settings.sky_mesh_px)
    found = _extract(above, plane, settings)
    places = np.column_stack([found["x"], found["y"]])
    if places.shape[0] == 0:
        return _empty(sky)
    sigma = _window_sigma(above, plane, places, found)
    moments = _measure(above, plane, places, sigma, _APERTURE_FWHM * _FWHM_OF_SIGMA)
    order = np.argsort(-moments.flux, kind="stable")
    moments, peak = moments.take(order), found["peak"][order].astype(float)
    saturated = (moments.bits & _SATURATED) != 0
    # sep's flags: deblended, cut off by the frame's edge.
    flawed = (found["flag"][order] & (sep.OBJ_MERGED | sep.OBJ_TRUNC)) != 0
    candidate = (
        ~flawed
        & (moments.bits == 0)
        & (moments.flux > settings.clean_snr * moments.flux_err)
        & np.isfinite(moments.fwhm)
        & ~_has_neighbour(moments, _NEIGHBOUR_FWHM * _FWHM_OF_SIGMA * sigma)
    )
    clean = _star_like(moments, candidate, plane.pixels.shape)
    width = moments.fwhm[clean] if clean.any() else moments.fwhm
    return StarList(
        x=moments.x,
        y=moments.y,
        position_err=moments.position_err,
        flux=moments.flux,
        flux_err=moments.flux_err,
        peak=peak,
        fwhm=moments.fwhm,
        elongation=moments.elongation,
        saturated=saturated,
        clean=clean,
        sky=sky,
        fwhm_px=float(np.nanmedian(width)),
    )


@dataclass(frozen=True, slots=True)
class _Moments:
    """What the window and the aperture say of each star."""

    x: FloatArray
    y: FloatArray
    position_err: FloatArray
    flux: FloatArray
    flux_err: FloatArray
    fwhm: FloatArray
    elongation: FloatArray
    bits: MaskArray

    def take(self, order: np.ndarray) -> _Moments:
        return _Moments(*(getattr(self, name)[order] for name in self.__slots__))


def _subtract_sky(plane: Plane, mesh: int) -> tuple[PixelArray, PixelArray]:
    """Smooth sky level, and the pixels above it."""
    # sep wants native, contiguous, writable arrays and a separate mask.
    pixels = np.array(plane.pixels, dtype=np.float32, order="C")
    ny, nx = pixels.shape
    background = sep.Background(
        pixels,
        mask=plane.mask != 0,
        bw=max(min(mesh, nx // 3), 8),
        bh=max(min(mesh, ny // 3), 8),
    )
    sky = background.back(dtype=np.float32)
    pixels -= sky
    return sky, pixels


def _extract(
    above: PixelArray, plane: Plane, settings: RegistrationSettings
) -> np.ndarray:
    """Run the extraction; once more without deblending when that overflows."""
    # Saturated cores stay in: their stars must be known.
    mask = (plane.mask & ~np.uint16(_SATURATED)) != 0
    variance = np.array(plane.variance, dtype=np.float32, order="C")
    sep.set_extract_pixstack(max(300_000, above.size // 10))
    sep.set_sub_object_limit(4096)
    reason = ""
    for contrast in (_DEBLEND_CONTRAST, 1.0):
        try:
            return sep.extract(
                above,
                settings.detect_sigma,
                var=variance,
                mask=mask,
                minarea=settings.min_area_px,
                deblend_nthresh=_DEBLEND_LEVELS,
                deblend_cont=contrast,
            )
        except Exception as exc:  # sep raises nothing narrower
            reason = str(exc)
    msg = (
        f"star extraction overflowed ({reason}); the sky is not flat on "
        f"{settings.sky_mesh_px} px or the variance is far too small: check gain "
        "and read noise, or lower registration.sky_mesh_px"
    )
    raise StageError(_STAGE, msg)


def _window_sigma(
    above: PixelArray, plane: Plane, places: FloatArray, found: np.ndarray
) -> float:
    """Width of the window: that of the stars it then measures."""
    sigma = float(np.median(np.sqrt(found["a"] * found["b"])))
    whole = found["flag"] == 0
    # The brightest fifth and no more than some hundreds: sharp moments.
    order = np.argsort(-np.where(whole, found["cflux"], -np.inf), kind="stable")
    bright = order[: min(_WINDOW_STARS, max(20, order.size // 5))]
    for _ in range(_WINDOW_ROUNDS):
        moments = _measure(above, plane, places[bright], sigma, 1.0)
        good = np.isfinite(moments.fwhm) & ((moments.bits & _SATURATED) == 0)
        if not good.any():
            break
        last, sigma = sigma, float(np.median(moments.fwhm[good])) / _FWHM_OF_SIGMA
        if abs(sigma - last) < 0.005 * last:
            break
    return sigma


def _measure(
    above: PixelArray,
    plane: Plane,
    places: FloatArray,
    sigma: float,
    aperture_sigma: float,
) -> _Moments:
    out = np.empty((places.shape[0], 8))
    bits = np.empty(places.shape[0], dtype=np.uint16)
    inputs = (above, plane.variance, plane.mask)
    places = np.ascontiguousarray(places, dtype=float)
    radius = aperture_sigma * sigma

    def stars(first: int, last: int) -> None:
        measure_stars(first, last, inputs, places, sigma, radius, out, bits)

    over_rows(stars, places.shape[0])
    long_axis, short_axis = _axes(out[:, 5], out[:, 6], out[:, 7], sigma)
    return _Moments(
        x=out[:, 0].copy(),
        y=out[:, 1].copy(),
        position_err=np.sqrt(out[:, 2]),
        flux=out[:, 3].copy(),
        flux_err=np.sqrt(out[:, 4]),
        fwhm=_FWHM_OF_SIGMA * np.sqrt(long_axis * short_axis),
        elongation=long_axis / short_axis,
        bits=bits,
    )


def _axes(
    xx: FloatArray, yy: FloatArray, xy: FloatArray, sigma: float
) -> tuple[FloatArray, FloatArray]:
    """Sigmas of the Gaussian whose moments under the window are these; or NaN.

    A Gaussian of covariance S under a window W has the moments
    ``(S^-1 + W^-1)^-1``; both have the same axes.
    """
    middle = 0.5 * (xx + yy)
    apart = np.hypot(0.5 * (xx - yy), xy)
    axes = []
    for moment in (middle + apart, middle - apart):
        with np.errstate(divide="ignore", invalid="ignore"):
            inverse = 1.0 / moment - 1.0 / sigma**2
            axis = np.where((moment > 0.0) & (inverse > 0.0), inverse**-0.5, np.nan)
        axes.append(axis)
    return axes[0], axes[1]


def _has_neighbour(moments: _Moments, reach: float) -> BoolArray:
    """Whether a source of some weight lies within reach of each star."""
    crowded = np.zeros(moments.x.size, dtype=bool)
    tree = cKDTree(np.column_stack([moments.x, moments.y]))
    first, second = tree.query_pairs(reach, output_type="ndarray").T
    flux = moments.flux
    crowded[first[flux[second] > _NEIGHBOUR_SHARE * flux[first]]] = True
    crowded[second[flux[first] > _NEIGHBOUR_SHARE * flux[second]]] = True
    return crowded


def _star_like(
    moments: _Moments, candidate: BoolArray, shape: tuple[int, int]
) -> BoolArray:
    """Which candidates have the width and shape of the stars around them."""
    clean = candidate.copy()
    places = np.column_stack([moments.x, moments.y])
    for values, least in (
        (np.log(np.where(candidate, moments.fwhm, 1.0)), _LOCUS_FRACTION),
        (np.log(np.where(candidate, moments.elongation, 1.0)), _LOCUS_ELONGATION),
    ):
        kept = np.flatnonzero(clean)
        if kept.size < 3:
            return clean
        surface = fit_surface(places[kept], values[kept], shape)
        residual = values[kept] - surface
        gate = max(_LOCUS_SIGMA * robust_sigma(residual, center=0.0), least)
        clean[kept[np.abs(residual) > gate]] = False
    return clean


def _empty(sky: PixelArray) -> StarList:
    none, no = np.empty(0), np.empty(0, dtype=bool)
    return StarList(
        none, none, none, none, none, none, none, none, no, no, sky, float("nan")
    )
