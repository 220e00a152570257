"""Compact residuals of a difference: variables and movers, but no piece of an arc."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import ndimage

from latelight.masks import MaskBit
from latelight.records import (
    BoolArray,
    CompactResidual,
    FloatArray,
    IntArray,
    MaskArray,
    PixelArray,
)
from latelight.statistics import robust_sigma
from latelight.subtraction._kernels import smooth_columns, smooth_rows
from latelight.threads import over_rows
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["find_compact", "mask_compact"]

# A point source seen through a filter of its own width falls to exp(-1) two sigmas
# away; a ridge hardly falls along itself.
_PROBE_SIGMAS = 2.0
_LEAST_DROP = 0.30
# Response to a filter of twice the width: 0.8 for a Gaussian point source.
_MOST_SPREAD = 0.97
# A fast mover leaves a short streak: neither a point nor narrow, but bright and alone.
# A line without end responds 1.26 times as much to twice the width.
_STREAK_SIGMA = 10.0
_STREAK_SPREAD = 1.2
# Where the neighbourhood is searched for the rest of a ridge, in FWHM.
_ALONG_FWHM = (2.0, 3.0, 4.0, 5.0, 6.0)
_N_ANGLES = 24
# Most that an elongated PSF's wings may add there along its long axis, of the peak,
# at the first of these distances; they fall with its cube.
_WINGS = 0.05
_LINE_SIGMA = 4.0
# Share of the filter's weight that must be unmasked.
_LEAST_WEIGHT = 0.6
# Largest masked radius, FWHM, and its growth for each factor ten of S/N.
_LARGEST = 4.0
_GROWTH = 0.75
# Most that a source wider than the PSF widens it.
_LONGEST = 2.0


@dataclass(frozen=True, slots=True)
class _Filtered:
    """A difference seen through its PSF: ``flux = top / bottom``."""

    top: PixelArray
    bottom: PixelArray
    weight: PixelArray

    def snr(self) -> PixelArray:
        """Return the S/N of a point source at every pixel."""
        noise = np.sqrt(np.maximum(self.bottom, 1e-30)).astype(np.float32, copy=False)
        return self.top / noise


def find_compact(
    pixels: PixelArray,
    variance: PixelArray,
    mask: MaskArray,
    model: PixelArray,
    *,
    fwhm_px: float,
    sigma: float,
) -> tuple[CompactResidual, ...]:
    """Find point-like residuals of both signs.

    Parameters
    ----------
    pixels, variance : float32 array, shape (ny, nx)
        Difference and its variance, star noise included.
    mask : uint16 array, shape (ny, nx)
        Mask bits.
    model : float32 array, shape (ny, nx)
        Light of the template's stars in the difference, counts.
    fwhm_px : float
        PSF width, pixels.
    sigma : float
        Least S/N, in units of the filtered map's own scatter.

    Returns
    -------
    tuple of CompactResidual
        Most significant first.

    Notes
    -----
    Peaks of the PSF-filtered S/N (inverse-variance weights) are kept when they

    - fall off in every direction as a point does (no ridge);
    - respond less to a filter of twice the width (nothing wide; a bright one may be
      a streak as short as a fast mover's);
    - have no signal of their sign lined up beyond the reach of their own PSF, on
      one side or both, over what all directions share (no knot of an arc or trail).
    """
    psf_sigma = fwhm_px / FWHM_PER_SIGMA
    weight = np.where(mask == 0, np.float32(1.0) / variance, np.float32(0.0))
    weighted = pixels * weight
    seen = _filtered(weighted, weight, psf_sigma)
    snr = seen.snr()
    typical = (
        np.float32(np.median(seen.bottom[mask == 0][::53])) if seen.bottom.any() else 0
    )
    solid = (seen.weight > _LEAST_WEIGHT) & (mask == 0)
    # Noise in a difference is correlated, so its filtered map is wider than 1.
    width = max(1.0, robust_sigma(snr[solid & (seen.bottom > 0.5 * typical)][::7]))
    row, col = _peaks(snr, solid, sigma * width, reach=int(np.ceil(psf_sigma)))
    if row.size == 0:
        return ()
    sign = np.sign(snr[row, col])
    spread = _spread(weighted, weight, row, col, psf_sigma)
    kept = _is_point(snr, row, col, sign, psf_sigma) & (spread < _MOST_SPREAD)
    bright = np.abs(snr[row, col]) > _STREAK_SIGMA * width
    kept |= bright & (spread < _STREAK_SPREAD)
    kept &= ~_on_a_line(seen, row, col, sign, fwhm_px, width)
    row, col = row[kept], col[kept]
    starlight = replace(seen, top=_smooth(model * weight, _gaussian_taps(psf_sigma)))
    found = [
        _describe(r, c, snr, seen, starlight, psf_sigma, width)
        for r, c in zip(row.tolist(), col.tolist(), strict=True)
    ]
    return tuple(sorted(found, key=lambda f: (-abs(f.snr), f.y, f.x)))


def mask_compact(
    mask: MaskArray,
    found: tuple[CompactResidual, ...],
    *,
    fwhm_px: float,
    radius_fwhm: float,
) -> MaskArray:
    """Return the mask with a circle about each compact residual.

    The radius is ``radius_fwhm`` at S/N 5 and grows with the logarithm of the S/N.
    """
    out = mask.copy()
    ny, nx = mask.shape
    for source in found:
        growth = _GROWTH * np.log10(max(abs(source.snr) / 5.0, 1.0))
        radius = fwhm_px * min(radius_fwhm + growth, max(_LARGEST, radius_fwhm))
        radius *= np.clip(source.fwhm_px / fwhm_px, 1.0, _LONGEST)
        y0, y1 = max(int(source.y - radius), 0), min(int(source.y + radius) + 2, ny)
        x0, x1 = max(int(source.x - radius), 0), min(int(source.x + radius) + 2, nx)
        y, x = np.ogrid[y0:y1, x0:x1]
        inside = (y - source.y) ** 2 + (x - source.x) ** 2 <= radius**2
        out[y0:y1, x0:x1][inside] |= np.uint16(MaskBit.COMPACT)
    return out


def _gaussian_taps(sigma: float) -> PixelArray:
    half = int(np.ceil(3.5 * sigma))
    taps = np.exp(-0.5 * (np.arange(-half, half + 1) / sigma) ** 2)
    return (taps / taps.sum()).astype(np.float32)


def _smooth(image: PixelArray, taps: PixelArray) -> PixelArray:
    along_x, out = np.empty_like(image), np.empty_like(image)
    over_rows(lambda a, b: smooth_rows(image, taps, along_x, a, b), image.shape[0])
    over_rows(lambda a, b: smooth_columns(along_x, taps, out, a, b), image.shape[0])
    return out


def _filtered(weighted: PixelArray, weight: PixelArray, sigma: float) -> _Filtered:
    """Filter with a Gaussian PSF of unit sum."""
    taps = _gaussian_taps(sigma)
    return _Filtered(
        top=_smooth(weighted, taps),
        bottom=_smooth(weight, taps**2),
        weight=_smooth((weight > 0).astype(np.float32), taps),
    )


def _peaks(
    snr: PixelArray, solid: BoolArray, limit: float, *, reach: int
) -> tuple[IntArray, IntArray]:
    """Return local extremes of the S/N above a limit, away from the frame's rim."""
    rim = reach + 2
    height = np.abs(snr)
    height *= solid
    row, col = np.nonzero(height[rim:-rim, rim:-rim] > limit)
    row, col = row + rim, col + rim
    top = np.ones(row.size, dtype=bool)
    for dy in range(-reach, reach + 1):
        for dx in range(-reach, reach + 1):
            if (dy, dx) != (0, 0):
                other = height[row + dy, col + dx]
                here = height[row, col]
                # Of two equal neighbours the first in reading order is the peak.
                top &= (here > other) | ((here == other) & ((dy, dx) > (0, 0)))
    return row[top], col[top]


def _sample(image: PixelArray, y: FloatArray, x: FloatArray) -> FloatArray:
    return ndimage.map_coordinates(image, [y, x], order=1, mode="constant", cval=0.0)


def _ring(
    row: IntArray, col: IntArray, distance: float, n: int
) -> tuple[FloatArray, FloatArray]:
    """Return the coordinates of n places around each peak, shape (n_peaks, n)."""
    angle = 2.0 * np.pi * np.arange(n) / n
    return (
        row[:, None] + distance * np.sin(angle),
        col[:, None] + distance * np.cos(angle),
    )


def _is_point(
    snr: PixelArray, row: IntArray, col: IntArray, sign: FloatArray, sigma: float
) -> BoolArray:
    """Return which peaks fall off in every direction."""
    around = _sample(snr, *_ring(row, col, _PROBE_SIGMAS * sigma, 16))
    along = 0.5 * (around[:, :8] + around[:, 8:]) * sign[:, None]
    drop = 1.0 - along / np.abs(snr[row, col])[:, None]
    return drop.min(axis=1) > _LEAST_DROP


def _spread(
    weighted: PixelArray, weight: PixelArray, row: IntArray, col: IntArray, sigma: float
) -> FloatArray:
    """Return the S/N in a filter of twice the width over that in the PSF's."""
    snr = []
    half = int(np.ceil(6.0 * sigma))
    step = np.arange(-half, half + 1)
    ny, nx = weight.shape
    y = np.clip(row[:, None, None] + step[:, None], 0, ny - 1)
    x = np.clip(col[:, None, None] + step, 0, nx - 1)
    top, bottom = weighted[y, x], weight[y, x]
    for width in (sigma, 2.0 * sigma):
        profile = np.exp(-0.5 * (step / width) ** 2)
        psf = np.outer(profile, profile)
        signal = np.tensordot(top, psf, axes=2)
        snr.append(signal / np.sqrt(np.tensordot(bottom, psf**2, axes=2)))
    return snr[1] / snr[0]


def _on_a_line(
    seen: _Filtered,
    row: IntArray,
    col: IntArray,
    sign: FloatArray,
    fwhm_px: float,
    width: float,
) -> BoolArray:
    """Return which peaks have the rest of a ridge beside them."""
    points = []
    for distance in _ALONG_FWHM:
        at = _ring(row, col, distance * fwhm_px, _N_ANGLES)
        top = _sample(seen.top, *at) * sign[:, None]
        points.append(top / np.sqrt(np.maximum(_sample(seen.bottom, *at), 1e-30)))
    # (n_peaks, n_distances, n_angles); what all directions share (the PSF's own
    # wings) is no line, nor is what an elongated PSF has of them.
    s = np.stack(points, axis=1) / width
    s -= np.median(s, axis=2, keepdims=True)
    own = np.abs(seen.top[row, col]) / np.sqrt(seen.bottom[row, col]) / width
    fall = _WINGS * (_ALONG_FWHM[0] / np.array(_ALONG_FWHM)) ** 3
    s -= own[:, None, None] * fall[:, None]
    # One bright neighbour must not pass for a line: no point counts for more than 3.
    s = np.clip(s, -3.0, 3.0)
    root = np.sqrt(len(_ALONG_FWHM))
    ray = s.sum(axis=1) / root
    half = _N_ANGLES // 2
    # Both sides, an arc's slight bend allowed for.
    beyond = np.maximum.reduce(
        [np.roll(ray, half + turn, axis=1) for turn in (-1, 0, 1)]
    )
    both = (ray + beyond) / np.sqrt(2.0)
    through = (both > _LINE_SIGMA) & (np.minimum(ray, beyond) > 1.0)
    one_sided = (s > 1.0).all(axis=1) & (ray > _LINE_SIGMA)
    return (through | one_sided).any(axis=1)


def _describe(
    row: int,
    col: int,
    snr: PixelArray,
    seen: _Filtered,
    starlight: _Filtered,
    sigma: float,
    width: float,
) -> CompactResidual:
    """Measure one compact residual."""
    box = np.abs(snr[row - 1 : row + 2, col - 1 : col + 2]).astype(float)
    flux = float(seen.top[row, col] / seen.bottom[row, col])
    flux_err = float(width / np.sqrt(seen.bottom[row, col]))
    one = np.array([row]), np.array([col])
    around = _sample(snr, *_ring(*one, _PROBE_SIGMAS * sigma, 16))[0].mean()
    fall = np.clip(around / snr[row, col], 0.02, 0.95)
    # exp(-h^2 / 2 (s^2 + filter^2)) at h gives the source's own s.
    own = (_PROBE_SIGMAS * sigma) ** 2 / (-2.0 * np.log(fall)) - sigma**2
    template_flux = _flux_above_surroundings(starlight, *one, sigma)
    science_flux = template_flux + flux
    on_star = min(template_flux, science_flux) > 5.0 * flux_err
    return CompactResidual(
        x=col + _parabola(box[1]),
        y=row + _parabola(box[:, 1]),
        flux=flux,
        flux_err=flux_err,
        snr=flux / flux_err,
        fwhm_px=float(FWHM_PER_SIGMA * np.sqrt(max(own, 0.0))),
        kind="variable" if on_star else "new",
    )


def _flux_above_surroundings(
    seen: _Filtered, row: IntArray, col: IntArray, sigma: float
) -> float:
    """Return the PSF flux at a place over what its surroundings show."""

    def flux(y: FloatArray, x: FloatArray) -> FloatArray:
        return _sample(seen.top, y, x) / np.maximum(_sample(seen.bottom, y, x), 1e-30)

    here = flux(row.astype(float), col.astype(float))
    return float(here[0] - np.median(flux(*_ring(row, col, 5.0 * sigma, 16))))


def _parabola(three: FloatArray) -> float:
    """Return the offset of the top of a parabola through three values."""
    bend = three[0] - 2.0 * three[1] + three[2]
    return (
        float(np.clip(0.5 * (three[0] - three[2]) / bend, -0.5, 0.5))
        if bend < 0
        else 0.0
    )
