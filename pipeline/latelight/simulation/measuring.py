"""Measure what an ideal observer would say of an echo: its true numbers."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.records import FloatArray
from latelight.simulation.astrometry import (
    ARCSEC_PER_RADIAN,
    pixel_to_pixel,
    sky_to_pixel,
)
from latelight.simulation.echoes import Echo, Viewpoint, age_yr, render_echo
from latelight.simulation.exposures import Exposure, Patch
from latelight.simulation.truth import EchoTruth
from latelight.sky import pixel_scale_arcsec

__all__ = ["delay_gradient", "measure_echo", "ridge_peak"]

# Bins along and across the ridge when an image is unrolled, arcsec.
ALONG_BIN = 1.0
ACROSS_BIN = 0.25


def delay_gradient(echo: Echo, east: float, north: float) -> FloatArray:
    """Return d(delay)/d(east, north) on the sheet, yr/arcsec, shape (2,)."""
    step = 0.25
    e = east + np.array([step, -step, 0.0, 0.0])
    n = north + np.array([0.0, 0.0, step, -step])
    t = echo.delay(e, n)
    return np.array([t[0] - t[1], t[2] - t[3]]) / (2.0 * step)


def ridge_peak(echo: Echo, view: Viewpoint) -> float:
    """Return the peak of an echo's ridge, counts per pixel."""
    return _Ridge(echo, view, render_echo(echo, view)).peak


def measure_echo(
    echo: Echo,
    science: Exposure,
    template: Exposure,
    *,
    science_variance: FloatArray,
    template_variance: FloatArray,
) -> EchoTruth:
    """Return the truth of one echo in a pair.

    Parameters
    ----------
    echo : Echo
        The echo.
    science, template : Exposure
        The two epochs.
    science_variance, template_variance : array
        True pixel variance of each frame on its own grid, counts squared.
    """
    view = Viewpoint.of(echo, science)
    image = render_echo(echo, view)
    ridge = _Ridge(echo, view, image)
    east, north = ridge.middle
    years = age_yr(echo.source, template.mjd) - age_yr(echo.source, science.mjd)
    there = _follow(echo, east, north, years)
    halfway = _follow(echo, east, north, 0.5 * years)
    gradient = delay_gradient(echo, *halfway)

    ra, dec = echo.plate().to_sky(
        np.array([east, there[0]]), np.array([north, there[1]])
    )
    x, y = sky_to_pixel(science.wcs, ra, dec)
    area = pixel_scale_arcsec(science.wcs, float(x[0]), float(y[0])) ** 2
    bounds = _bounds(
        echo, science, template, image, science_variance, template_variance
    )
    distance = float(echo.source.distance_pc or 0.0)
    to_pc = (distance - echo.sheet.depth_pc) / ARCSEC_PER_RADIAN
    depth = echo.sheet.depth_pc + to_pc * (
        echo.sheet.slope_east * east + echo.sheet.slope_north * north
    )
    return EchoTruth(
        source=echo.source.name,
        ra=float(ra[0]),
        dec=float(dec[0]),
        x=float(x[0]),
        y=float(y[0]),
        normal_pa=float(np.degrees(np.arctan2(*gradient)) % 360.0),
        speed_arcsec_yr=float(1.0 / np.hypot(*gradient)),
        shift_arcsec=float(np.hypot(east - there[0], north - there[1])),
        shift_px=float(np.hypot(x[1] - x[0], y[1] - y[0])),
        surface_brightness=float(
            science.zero_point - 2.5 * np.log10(ridge.peak / area)
        ),
        length_arcsec=ridge.length,
        width_arcsec=ridge.width,
        depth_pc=float(depth),
        bound=bounds[0],
        bound_positive=bounds[1],
        bound_negative=bounds[2],
    )


class _Ridge:
    """An echo's noise-free image unrolled along and across its front."""

    def __init__(self, echo: Echo, view: Viewpoint, image: Patch) -> None:
        rows, cols = np.nonzero(image.pixels > 1e-3 * image.pixels.max())
        flux = image.pixels[rows, cols].astype(float)
        ra, dec = view.wcs.all_pix2world(cols + image.col, rows + image.row, 0)
        east, north = echo.plate().from_sky(ra, dec)
        centre = np.array([flux @ east, flux @ north]) / flux.sum()
        gradient = delay_gradient(echo, *centre)
        speed = 1.0 / np.hypot(*gradient)
        age = age_yr(echo.source, view.mjd)
        normal = gradient * speed
        along = (east - centre[0]) * normal[1] - (north - centre[1]) * normal[0]
        ahead = (echo.delay(east, north) - age) * speed

        first, crest = _crest(along, flux)
        self.peak = float(crest.max())
        bright = np.flatnonzero(crest >= 0.5 * self.peak)
        begin = first + ALONG_BIN * bright[0]
        end = first + ALONG_BIN * (bright[-1] + 1)
        self.length = float(end - begin)
        inside = (along >= begin) & (along <= end)
        lead, self.width = _profile(ahead[inside], flux[inside])
        # The middle of the ridge: the light's centroid along it, moved on to the
        # crest across it (a bent arc's centroid lies off the arc).
        middle_along = float(flux[inside] @ along[inside] / flux[inside].sum())
        start = centre + middle_along * np.array([normal[1], -normal[0]])
        now = float(echo.delay(start[:1], start[1:])[0])
        self.middle = _follow(echo, *start, age + lead / speed - now)


def _crest(along: FloatArray, flux: FloatArray) -> tuple[float, FloatArray]:
    """Return where the bins along the ridge begin, and the smoothed crest."""
    first = float(along.min())
    index = ((along - first) / ALONG_BIN).astype(int)
    crest = np.zeros(index.max() + 1)
    np.maximum.at(crest, index, flux)
    return first, ndimage.uniform_filter1d(crest, 3, mode="constant")


def _profile(ahead: FloatArray, flux: FloatArray) -> tuple[float, float]:
    """Return place and full width at half maximum of the profile across, arcsec."""
    edges = np.arange(ahead.min(), ahead.max() + ACROSS_BIN, ACROSS_BIN)
    total, _ = np.histogram(ahead, edges, weights=flux)
    number, _ = np.histogram(ahead, edges)
    mean = ndimage.gaussian_filter1d(total / np.maximum(number, 1), 1.0)
    middle = 0.5 * (edges[1:] + edges[:-1])
    top = int(np.argmax(mean))
    fine = np.linspace(middle[0], middle[-1], 10 * middle.size)
    above = np.interp(fine, middle, mean) >= 0.5 * mean[top]
    at = int(np.argmin(np.abs(fine - middle[top])))
    left, right = at, at
    while left > 0 and above[left - 1]:
        left -= 1
    while right < fine.size - 1 and above[right + 1]:
        right += 1
    return float(middle[top]), float(fine[right] - fine[left])


def _follow(echo: Echo, east: float, north: float, years: float) -> tuple[float, float]:
    """Follow the front's normal until the delay has grown by ``years``."""
    goal = float(echo.delay(np.array([east]), np.array([north]))[0]) + years
    direction = delay_gradient(echo, east, north)
    direction /= np.hypot(*direction)
    path = 0.0
    # Newton along the normal; the delay is nearly linear over an echo's shift.
    for _ in range(8):
        e, n = east + path * direction[0], north + path * direction[1]
        miss = goal - float(echo.delay(np.array([e]), np.array([n]))[0])
        path += miss / float(delay_gradient(echo, e, n) @ direction)
    return east + path * float(direction[0]), north + path * float(direction[1])


def _bounds(
    echo: Echo,
    science: Exposure,
    template: Exposure,
    image: Patch,
    science_variance: FloatArray,
    template_variance: FloatArray,
) -> tuple[float, float, float]:
    """Return the perfect matched filter's S/N: both lobes, positive, negative."""
    own = Viewpoint.of(echo, template)
    moved = Viewpoint(
        wcs=science.wcs,
        psf=own.psf,
        psf_x=own.psf_x,
        psf_y=own.psf_y,
        zero_point=science.zero_point,
        mjd=template.mjd,
    )
    before = render_echo(echo, moved)
    signal = Patch(image.row, image.col, image.pixels - before.pixels)
    where, inside = signal.overlap(science.camera.shape)
    rows, cols = np.mgrid[where]
    x, y = pixel_to_pixel(
        science.wcs, template.wcs, cols.astype(float), rows.astype(float)
    )
    scale = 10.0 ** (0.4 * (science.zero_point - template.zero_point))
    variance = science_variance[where] + scale**2 * ndimage.map_coordinates(
        template_variance, [y, x], order=1, mode="nearest"
    )
    energy = inside.astype(float) ** 2 / variance
    lobes = float(energy[inside > 0].sum()), float(energy[inside < 0].sum())
    return (
        float(np.sqrt(sum(lobes))),
        float(np.sqrt(lobes[0])),
        float(np.sqrt(lobes[1])),
    )
