"""Follow an echo through all epochs of a field: its true track."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from latelight.records import FloatArray, PixelArray
from latelight.simulation.astrometry import sky_to_pixel
from latelight.simulation.echoes import Echo, Viewpoint, render_echo
from latelight.simulation.exposures import Exposure, Patch
from latelight.simulation.measuring import (
    Ridge,
    front_paths,
    resampled_variance,
)
from latelight.simulation.outburst import DAYS_PER_YEAR
from latelight.simulation.truth import TrackTruth
from latelight.sky import pixel_scale_arcsec

__all__ = ["measure_track"]


def measure_track(
    echo: Echo,
    exposures: Sequence[Exposure],
    *,
    variances: Sequence[PixelArray],
    grid: int,
) -> TrackTruth:
    """Return the truth of one echo at all epochs.

    Parameters
    ----------
    echo : Echo
        The echo.
    exposures : sequence of Exposure
        The epochs, at least two, in order of time.
    variances : sequence of float32 array
        True pixel variance of each frame on its own grid, counts squared.
    grid : int
        Index of the exposure on whose pixels the epochs are compared.
    """
    base = exposures[grid]
    views = [_view(echo, exposure, base) for exposure in exposures]
    images = [render_echo(echo, view) for view in views]
    ridges = [Ridge(echo, *pair) for pair in zip(views, images, strict=True)]
    mjds = np.array([exposure.mjd for exposure in exposures])
    middle = 0.5 * float(mjds[0] + mjds[-1])
    halfway = replace(views[grid], mjd=middle)
    ridge = Ridge(echo, halfway, render_echo(echo, halfway))
    gradient = ridge.mean_gradient(echo, 0.0)
    normal = gradient / np.hypot(*gradient)
    years = (mjds - middle) / DAYS_PER_YEAR
    lines, offsets = _follow(echo, ridge, years)
    path = ridge.middle[:, None] + normal[:, None] * np.append(offsets, 0.0)
    ra, dec = echo.plate().to_sky(*path)
    x, y = sky_to_pixel(base.wcs, ra[-1:], dec[-1:])
    area = pixel_scale_arcsec(base.wcs, float(x[0]), float(y[0])) ** 2
    span = float(years[-1] - years[0])
    pairs, together = _bounds(images, exposures, variances, base)
    return TrackTruth(
        source=echo.source.name,
        mjd=middle,
        ra=float(ra[-1]),
        dec=float(dec[-1]),
        x=float(x[0]),
        y=float(y[0]),
        normal_pa=float(np.degrees(np.arctan2(*gradient)) % 360.0),
        speed_arcsec_yr=float(offsets[-1] - offsets[0]) / span,
        change_arcsec_yr2=float(4.0 * (offsets[0] + offsets[-1])) / span**2,
        offsets_arcsec=tuple(offsets.tolist()),
        ras=tuple(ra[:-1].tolist()),
        decs=tuple(dec[:-1].tolist()),
        surface_brightness=tuple(
            float(base.zero_point - 2.5 * np.log10(r.peak / area)) for r in ridges
        ),
        length_arcsec=ridges[grid].length,
        width_arcsec=ridges[grid].width,
        depth_pc=float(echo.depth(*ridge.middle[:, None])[0]),
        bound_pairs=pairs,
        bound_all=together,
        ridges=lines,
        weights=ridge.weight,
    )


def _view(echo: Echo, exposure: Exposure, base: Exposure) -> Viewpoint:
    """Return an exposure's view with the pixels and flux scale of another."""
    own = Viewpoint.of(echo, exposure)
    return replace(own, wcs=base.wcs, zero_point=base.zero_point)


def _follow(
    echo: Echo, ridge: Ridge, years: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the ridge at times from its own, degrees, and its mean way, arcsec."""
    now = echo.delay(*ridge.line)
    plate: Any = echo.plate()
    lines, offsets = [], []
    for time in years:
        paths = front_paths(echo, ridge.line, now + time)
        lines.append(np.array(plate.to_sky(*(ridge.line + paths))))
        offsets.append(np.sign(time) * float(np.hypot(*paths) @ ridge.weight))
    return np.array(lines), np.array(offsets)


def _bounds(
    images: Sequence[Patch],
    exposures: Sequence[Exposure],
    variances: Sequence[PixelArray],
    base: Exposure,
) -> tuple[tuple[tuple[float, ...], ...], float]:
    """Return the perfect filters' S/N on every pair, and on all epochs together."""
    shape = base.camera.shape
    where, _ = images[0].overlap(shape)
    light = np.array([image.overlap(shape)[1] for image in images], dtype=float)
    noise = np.array(
        [
            resampled_variance(variance, exposure, base, where)
            for variance, exposure in zip(variances, exposures, strict=True)
        ]
    )
    pairs = tuple(
        tuple(
            float(np.sqrt(((f - g) ** 2 / (v + w)).sum()))
            for g, w in zip(light, noise, strict=True)
        )
        for f, v in zip(light, noise, strict=True)
    )
    weight = 1.0 / noise
    sky = (weight * light).sum(axis=0) / weight.sum(axis=0)
    return pairs, float(np.sqrt((weight * (light - sky) ** 2).sum()))
