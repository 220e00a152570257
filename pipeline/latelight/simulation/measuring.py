"""Measure what an ideal observer would say of an echo: its true numbers."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.records import FloatArray, PixelArray
from latelight.simulation.astrometry import pixel_to_pixel, sky_to_pixel
from latelight.simulation.echoes import Echo, Viewpoint, age_yr, render_echo
from latelight.simulation.exposures import Exposure, Patch
from latelight.simulation.truth import EchoTruth
from latelight.sky import pixel_scale_arcsec

__all__ = [
    "Ridge",
    "delay_gradient",
    "front_paths",
    "measure_echo",
    "resampled_variance",
    "ridge_size",
]

# Bins along and across the ridge when an image is unrolled, arcsec.
ALONG_BIN = 1.0
ACROSS_BIN = 0.25


def delay_gradient(echo: Echo, east: FloatArray, north: FloatArray) -> FloatArray:
    """Return d(delay)/d(east, north) on the sheet, yr/arcsec, shape (2, n)."""
    h = 0.25
    return np.array(
        [
            echo.delay(east + h, north) - echo.delay(east - h, north),
            echo.delay(east, north + h) - echo.delay(east, north - h),
        ]
    ) / (2.0 * h)


def ridge_size(echo: Echo, view: Viewpoint) -> tuple[float, float]:
    """Return peak (counts per pixel) and length (arcsec) of an echo's ridge."""
    ridge = Ridge(echo, view, render_echo(echo, view))
    return ridge.peak, ridge.length


def measure_echo(
    echo: Echo,
    science: Exposure,
    template: Exposure,
    *,
    science_variance: PixelArray,
    template_variance: PixelArray,
) -> EchoTruth:
    """Return the truth of one echo in a pair.

    Parameters
    ----------
    echo : Echo
        The echo.
    science, template : Exposure
        The two epochs.
    science_variance, template_variance : float32 array
        True pixel variance of each frame on its own grid, counts squared.
    """
    view = Viewpoint.of(echo, science)
    image = render_echo(echo, view)
    ridge = Ridge(echo, view, image)
    years = age_yr(echo.source, template.mjd) - age_yr(echo.source, science.mjd)
    gradient = ridge.mean_gradient(echo, 0.5 * years)
    speed = 1.0 / float(np.hypot(*gradient))
    # Where the front was (or will be), straight along its mean normal.
    path = speed * years * gradient * speed
    east, north = ridge.middle
    ra, dec = echo.plate().to_sky(
        np.array([east, east + path[0]]), np.array([north, north + path[1]])
    )
    x, y = sky_to_pixel(science.wcs, ra, dec)
    area = pixel_scale_arcsec(science.wcs, float(x[0]), float(y[0])) ** 2
    bounds = _bounds(
        echo, science, template, image, science_variance, template_variance
    )
    return EchoTruth(
        source=echo.source.name,
        ra=float(ra[0]),
        dec=float(dec[0]),
        x=float(x[0]),
        y=float(y[0]),
        normal_pa=float(np.degrees(np.arctan2(*gradient)) % 360.0),
        speed_arcsec_yr=speed,
        shift_arcsec=speed * abs(years),
        shift_px=float(np.hypot(x[1] - x[0], y[1] - y[0])),
        surface_brightness=float(
            science.zero_point - 2.5 * np.log10(ridge.peak / area)
        ),
        length_arcsec=ridge.length,
        width_arcsec=ridge.width,
        depth_pc=float(echo.depth(np.array([east]), np.array([north]))[0]),
        bound=bounds[0],
        bound_positive=bounds[1],
        bound_negative=bounds[2],
    )


class Ridge:
    """An echo's noise-free image unrolled along and across its front.

    Parameters
    ----------
    echo : Echo
        The echo.
    view : Viewpoint
        What it was rendered onto.
    image : Patch
        How it looks there.

    Attributes
    ----------
    peak : float
        Highest crest, smoothed over 5 arcsec along the ridge, counts per pixel.
    length, width : float
        Extent along the ridge above half of its peak, and full width at half
        maximum across, arcsec.
    line : float64 array, shape (2, m)
        Points of the crest east and north of the cloud's centre, arcsec.
    weight : float64 array, shape (m,)
        Brightness of the crest there, sum 1.
    middle : float64 array, shape (2,)
        The point that halves the light along the line, to one bin.
    """

    def __init__(self, echo: Echo, view: Viewpoint, image: Patch) -> None:
        rows, cols = np.nonzero(image.pixels > 1e-3 * image.pixels.max())
        flux = image.pixels[rows, cols].astype(float)
        ra, dec = view.wcs.all_pix2world(cols + image.col, rows + image.row, 0)
        east, north = echo.plate().from_sky(ra, dec)
        centre = np.array([flux @ east, flux @ north]) / flux.sum()
        gradient = delay_gradient(echo, *centre[:, None])[:, 0]
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

        # The ridge as a line: points along it, moved on to the crest across it.
        place = first + ALONG_BIN * (np.arange(bright[0], bright[-1] + 1) + 0.5)
        self.weight = crest[bright[0] : bright[-1] + 1]
        self.weight = self.weight / self.weight.sum()
        line = centre[:, None] + place * np.array([normal[1], -normal[0]])[:, None]
        self.line = line + front_paths(echo, line, age + lead / speed)
        middle = place - self.weight @ place
        self.middle = self.line[:, int(np.argmin(np.abs(middle)))]

    def mean_gradient(self, echo: Echo, years: float) -> FloatArray:
        """Return the delay's mean gradient along the ridge ``years`` from now."""
        now = echo.delay(*self.line)
        then = self.line + front_paths(echo, self.line, now + years)
        return delay_gradient(echo, *then) @ self.weight


def _crest(along: FloatArray, flux: FloatArray) -> tuple[float, FloatArray]:
    """Return where the bins along the ridge begin, and the smoothed crest."""
    first = float(along.min())
    index = ((along - first) / ALONG_BIN).astype(int)
    crest = np.zeros(index.max() + 1)
    np.maximum.at(crest, index, flux)
    return first, ndimage.uniform_filter1d(crest, 5, mode="constant")


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


def front_paths(
    echo: Echo, points: FloatArray, delay: FloatArray | float
) -> FloatArray:
    """Return how far points move along the front's normals to reach a delay.

    Parameters
    ----------
    echo : Echo
        The echo.
    points : float64 array, shape (2, m)
        Points east and north of the cloud's centre, arcsec.
    delay : float64 array, shape (m,), or float
        Delay to be reached by each, years.

    Returns
    -------
    float64 array, shape (2, m)
        Paths east and north, straight along the normal at the start, arcsec.
    """
    direction = delay_gradient(echo, *points)
    direction /= np.hypot(*direction)
    path = np.zeros(points.shape[1])
    # Newton along the normal; the delay is nearly linear over an echo's shift.
    for _ in range(6):
        here = points + path * direction
        rate = (delay_gradient(echo, *here) * direction).sum(axis=0)
        path += (delay - echo.delay(*here)) / rate
    return path * direction


def resampled_variance(
    own: PixelArray,
    exposure: Exposure,
    grid: Exposure,
    where: tuple[slice, slice],
) -> PixelArray:
    """Return one exposure's pixel variance on a part of another's grid.

    Parameters
    ----------
    own : float32 array, shape (ny, nx)
        Variance of one pixel of ``exposure``, its counts squared.
    exposure, grid : Exposure
        Whose variance, and whose pixels and counts it shall be given in.
    where : (slice, slice)
        The part of the grid.
    """
    rows, cols = np.mgrid[where]
    x, y = pixel_to_pixel(
        grid.wcs, exposure.wcs, cols.astype(float), rows.astype(float)
    )
    scale = 10.0 ** (0.4 * (grid.zero_point - exposure.zero_point))
    return scale**2 * ndimage.map_coordinates(own, [y, x], order=1, mode="nearest")


def _bounds(
    echo: Echo,
    science: Exposure,
    template: Exposure,
    image: Patch,
    science_variance: PixelArray,
    template_variance: PixelArray,
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
    variance = science_variance[where] + resampled_variance(
        template_variance, template, science, where
    )
    energy = inside.astype(float) ** 2 / variance
    lobes = float(energy[inside > 0].sum()), float(energy[inside < 0].sum())
    return (
        float(np.sqrt(sum(lobes))),
        float(np.sqrt(lobes[0])),
        float(np.sqrt(lobes[1])),
    )
