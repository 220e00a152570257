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
_DEBLEND_LEVELS, _DEBLEND_CONTRAST = 16, 0.001
# Widths of this many bright stars set the window.
_WINDOW_STARS, _WINDOW_ROUNDS = 300, 6
# A narrower window would see one pixel of an undersampled star.
_MIN_WINDOW_PX = 0.7
_APERTURE_FWHM = 1.5
# A neighbour this near (FWHM) with this share of the peak spoils a centroid.
_NEIGHBOUR_FWHM, _NEIGHBOUR_SHARE = 2.0, 0.1
# Star-like: width and elongation within so many sigmas of the stars around, the
# noise of a star's own logarithm (in units of 1 / SNR; measured on Moffat stars,
# 0.6-0.9 and 1.4-1.8) added, and no gate narrower than a PSF's changes.
_LOCUS_SIGMA = 4.0
_WIDTH_NOISE, _LEAST_WIDTH_GATE = 0.9, 0.08
_ELONGATION_NOISE, _LEAST_ELONGATION_GATE = 1.8, 0.12
# Within 1.3 sigma the parabola gives the width of Moffat stars of any beta above
# 2.5 to 0.2 %; the Gaussian of the same moments is up to 16 % wider.
_PROFILE_STARS, _PROFILE_SIGMA, _PROFILE_MIN_PIXELS = 100, 1.3, 12


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
        ``fwhm_px`` is read off the mean profile of the clean stars; ``fwhm`` is
        ``fwhm_px`` times the star's windowed size over theirs.
        Empty, with a ``fwhm_px`` of NaN, when nothing stands out.

    Raises
    ------
    StageError
        If the extraction cannot hold the frame: its background is not flat, or
        its variance far too small.
    """
    if plane.mask.all():
        return _empty(np.array(plane.pixels))
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
    cut_off = (found["flag"][order] & sep.OBJ_TRUNC) != 0
    candidate = (
        ~cut_off
        & (moments.bits == 0)
        & (moments.flux > settings.clean_snr * moments.flux_err)
        & np.isfinite(moments.fwhm)
        & ~_has_neighbour(moments, peak, _NEIGHBOUR_FWHM * _FWHM_OF_SIGMA * sigma)
    )
    clean = _star_like(moments, candidate, plane.pixels.shape)
    middle = float(np.nanmedian(moments.fwhm[clean] if clean.any() else moments.fwhm))
    fwhm_px = _half_maximum(above, moments, clean, sigma)
    if not np.isfinite(fwhm_px):
        fwhm_px = middle
    return StarList(
        x=moments.x,
        y=moments.y,
        position_err=moments.position_err,
        flux=moments.flux,
        flux_err=moments.flux_err,
        peak=peak,
        fwhm=moments.fwhm * (fwhm_px / middle),
        elongation=moments.elongation,
        saturated=saturated,
        clean=clean,
        sky=sky,
        fwhm_px=fwhm_px,
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
    variance = np.require(plane.variance, np.float32, ["C", "W", "O"])
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
                # Smooth pixels against plain noise: half the time of sep's
                # matched filter, and as many stars.
                filter_type="conv",
                # sep's cleaning would swallow true neighbours of bright stars.
                clean=False,
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
        width = float(np.median(moments.fwhm[good])) / _FWHM_OF_SIGMA
        last, sigma = sigma, max(width, _MIN_WINDOW_PX)
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


def _has_neighbour(moments: _Moments, peak: FloatArray, reach: float) -> BoolArray:
    """Whether a source of some weight lies within reach of each star.

    Peaks are compared: the aperture of a faint star holds its neighbour's light.
    """
    crowded = np.zeros(moments.x.size, dtype=bool)
    tree = cKDTree(np.column_stack([moments.x, moments.y]))
    first, second = tree.query_pairs(reach, output_type="ndarray").T
    crowded[first[peak[second] > _NEIGHBOUR_SHARE * peak[first]]] = True
    crowded[second[peak[first] > _NEIGHBOUR_SHARE * peak[second]]] = True
    return crowded


def _star_like(
    moments: _Moments, candidate: BoolArray, shape: tuple[int, int]
) -> BoolArray:
    """Which candidates have the width and shape of the stars around them."""
    clean = candidate.copy()
    places = np.column_stack([moments.x, moments.y])
    noise = moments.flux_err / np.maximum(moments.flux, 1e-30)
    for values, noise_share, least in (
        (moments.fwhm, _WIDTH_NOISE, _LEAST_WIDTH_GATE),
        (moments.elongation, _ELONGATION_NOISE, _LEAST_ELONGATION_GATE),
    ):
        kept = np.flatnonzero(clean)
        if kept.size < 3:
            return clean
        size = np.log(values[kept])
        residual = size - fit_surface(places[kept], size, shape)
        # The brighter half tells how much stars differ when noise does not.
        own = robust_sigma(residual[: (kept.size + 1) // 2], center=0.0)
        gate = np.hypot(
            max(_LOCUS_SIGMA * own, least), _LOCUS_SIGMA * noise_share * noise[kept]
        )
        clean[kept[np.abs(residual) > gate]] = False
    return clean


def _half_maximum(
    above: PixelArray, moments: _Moments, clean: BoolArray, sigma: float
) -> float:
    """Full width at half maximum of the mean star, pixels.

    The logarithm of the profile is fitted by a parabola of the squared radius
    near the centre, pixels of the brightest clean stars together.  NaN where
    that cannot be.
    """
    rows = np.flatnonzero(clean)[:_PROFILE_STARS]
    half = int(np.ceil(_PROFILE_SIGMA * sigma)) + 1
    offset = np.mgrid[-half : half + 1, -half : half + 1].reshape(2, -1)
    y = np.rint(moments.y[rows]).astype(int)[:, None] + offset[0]
    x = np.rint(moments.x[rows]).astype(int)[:, None] + offset[1]
    inside = (x >= 0) & (y >= 0) & (y < above.shape[0]) & (x < above.shape[1])
    r2 = (x - moments.x[rows, None]) ** 2 + (y - moments.y[rows, None]) ** 2
    use = inside & (r2 <= (_PROFILE_SIGMA * sigma) ** 2)
    star = np.broadcast_to(rows[:, None], use.shape)[use]
    value = above[y[use], x[use]] / moments.flux[star]
    positive = value > 0.0
    q = r2[use][positive] / sigma**2
    if q.size < _PROFILE_MIN_PIXELS:
        return float("nan")
    c2, c1, _ = np.polyfit(q, np.log(value[positive]), 2)
    # c2 q^2 + c1 q = -ln 2, the nearer root.
    inside_root = c1**2 - 4.0 * c2 * np.log(2.0)
    if c1 >= 0.0 or inside_root <= 0.0:
        return float("nan")
    q_half = 2.0 * np.log(2.0) / (-c1 + np.sqrt(inside_root))
    return float(2.0 * sigma * np.sqrt(q_half))


def _empty(sky: PixelArray) -> StarList:
    none, no = np.empty(0), np.empty(0, dtype=bool)
    return StarList(
        none, none, none, none, none, none, none, none, no, no, sky, float("nan")
    )
