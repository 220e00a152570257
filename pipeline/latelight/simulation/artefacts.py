"""What is in the way: trails, diffraction spikes, haloes, ghosts."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from latelight.records import FloatArray
from latelight.simulation.exposures import Exposure, Patch
from latelight.simulation.truth import StarTruth, TrailTruth

__all__ = ["add_trail", "random_trail", "reflections", "spikes"]

# Share of a star's light that goes into its four spikes, its halo, its ghost.
SPIKE_SHARE = 0.012
HALO_SHARE = 0.008
GHOST_SHARE = 0.004
# Fainter than this (counts per pixel) an artefact is not rendered.
LEAST_HEIGHT = 0.15


def random_trail(rng: np.random.Generator, exposure: Exposure) -> TrailTruth:
    """Draw a satellite's trail across the frame.

    Its peak is log-uniform from half a sigma of the sky to 150 sigma.
    """
    ny, nx = exposure.camera.shape
    noise = np.sqrt(exposure.sky_counts / exposure.camera.gain)
    return TrailTruth(
        x=float(rng.uniform(0.15, 0.85) * nx),
        y=float(rng.uniform(0.15, 0.85) * ny),
        angle=float(rng.uniform(0.0, 180.0)),
        peak_counts=float(noise * 10.0 ** rng.uniform(-0.3, 2.2)),
    )


def add_trail(image: FloatArray, trail: TrailTruth, exposure: Exposure) -> None:
    """Add a trail, as wide as the PSF, to an image in place.

    Notes
    -----
    A Moffat of exponent b integrated along a line is ``(1 + d^2/alpha^2)**(1/2 -
    b)`` of the distance d.
    """
    psf = exposure.psf
    ny, nx = image.shape
    c, s = np.cos(np.radians(trail.angle)), np.sin(np.radians(trail.angle))
    y, x = np.ogrid[0:ny, 0:nx]
    distance = (x - trail.x) * s - (y - trail.y) * c
    rows, cols = np.nonzero(np.abs(distance) < 8.0 * psf.fwhm_px)
    a, _, d, _ = psf.parameters(cols, rows).T
    form = distance[rows, cols] ** 2 * np.sqrt(a * d)
    image[rows, cols] += trail.peak_counts * (1.0 + form) ** (0.5 - psf.beta)


def spikes(stars: StarTruth, exposure: Exposure) -> Iterator[Patch]:
    """Render the four diffraction spikes of every star bright enough to show them."""
    width = 0.45 * exposure.psf.fwhm_px
    for x, y, flux in _bright(stars, exposure):
        # Brighter stars show longer spikes; each arm fades along its length.
        reach = 12.0 * (flux / 3e5) ** 0.35
        height = SPIKE_SHARE * flux / (4.0 * reach * width * np.sqrt(2.0 * np.pi))
        if height < LEAST_HEIGHT:
            continue
        half = int(min(8.0 * reach, max(exposure.camera.shape)))
        dx, dy = _offsets(x, y, half)
        total = np.zeros(np.broadcast_shapes(dx.shape, dy.shape))
        for arm in (0.0, 90.0):
            angle = np.radians(exposure.camera.spike_angle + arm)
            along = dx * np.cos(angle) + dy * np.sin(angle)
            across = dy * np.cos(angle) - dx * np.sin(angle)
            total += np.exp(-np.abs(along) / reach - 0.5 * (across / width) ** 2)
        yield Patch(
            round(y) - half, round(x) - half, (height * total).astype(np.float32)
        )


def reflections(
    stars: StarTruth, exposure: Exposure, rng: np.random.Generator
) -> tuple[list[Patch], FloatArray]:
    """Render haloes around bright stars and ghosts mirrored in the optical axis.

    Returns
    -------
    patches : list of Patch
        Soft-edged discs with the pupil's dark centre.
    table : float64 array, shape (n, 4)
        x, y, radius (pixels) and height (counts) of each.
    """
    camera = exposure.camera
    halo_radius, ghost_radius = rng.uniform(38.0, 60.0), rng.uniform(22.0, 45.0)
    mirror = -rng.uniform(0.85, 0.97)
    patches, table = [], []
    for x, y, flux in _bright(stars, exposure):
        gx = camera.axis_x + mirror * (x - camera.axis_x)
        gy = camera.axis_y + mirror * (y - camera.axis_y)
        for cx, cy, radius, share in (
            (x, y, halo_radius, HALO_SHARE),
            (gx, gy, ghost_radius, GHOST_SHARE),
        ):
            hole = 0.35 * radius
            height = share * flux / (np.pi * (radius**2 - hole**2))
            if height < LEAST_HEIGHT:
                continue
            half = int(radius + 15.0)
            distance = np.hypot(*_offsets(cx, cy, half))
            disc = _step(distance - radius) - _step(distance - hole)
            patches.append(
                Patch(round(cy) - half, round(cx) - half, (height * disc).astype("f4"))
            )
            table.append([cx, cy, radius, height])
    return patches, np.array(table, dtype=float).reshape(-1, 4)


def _bright(
    stars: StarTruth, exposure: Exposure
) -> Iterator[tuple[float, float, float]]:
    """Yield x, y and counts of stars bright enough for any artefact, in order."""
    ny, nx = exposure.camera.shape
    near = (stars.x > -0.1 * nx) & (stars.x < 1.1 * nx)
    near &= (stars.y > -0.1 * ny) & (stars.y < 1.1 * ny)
    for i in np.flatnonzero(near & (stars.counts > 5e4)):
        yield float(stars.x[i]), float(stars.y[i]), float(stars.counts[i])


def _offsets(x: float, y: float, half: int) -> tuple[FloatArray, FloatArray]:
    d = np.arange(-half, half + 1, dtype=float)
    return (d + round(x) - x)[None, :], (d + round(y) - y)[:, None]


def _step(distance: FloatArray) -> FloatArray:
    """Return 1 inside and 0 outside an edge about 3 px wide."""
    return 1.0 / (1.0 + np.exp(np.clip(distance / 0.8, -40.0, 40.0)))
