"""From expected counts to the integers a detector delivers."""

from __future__ import annotations

import numpy as np

from latelight.records import BoolArray, FloatArray
from latelight.simulation._kernels import bleed, deposit_charge
from latelight.simulation.exposures import BadColumn, Camera

__all__ = ["cosmic_rays", "read_out", "true_variance"]

# Charge spreads by a third of a pixel before it is collected: hits stay sharp.
DIFFUSION_PX = 0.3


def true_variance(expected: FloatArray, camera: Camera) -> FloatArray:
    """Return the variance of one pixel, counts squared: photons, read-out, rounding."""
    photons = np.maximum(expected, 0.0) / camera.gain
    return photons + (camera.read_noise / camera.gain) ** 2 + 1.0 / 12.0


def cosmic_rays(
    rng: np.random.Generator, *, shape: tuple[int, int], count: int
) -> FloatArray:
    """Draw cosmic-ray hits.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    shape : (int, int)
        Frame shape (ny, nx).
    count : int
        Number of hits.

    Returns
    -------
    float64 array, shape (ny, nx)
        Charge, electrons.

    Notes
    -----
    Four in five are muons: straight, their length that of the projected path
    through the silicon, isotropic above; the rest are electrons that scatter
    and leave short crooked tracks.  Charge per pixel of path is log-normal, a
    stand-in for the Landau law.
    """
    ny, nx = shape
    charge = np.zeros(shape)
    for _ in range(count):
        x, y = rng.uniform(-0.5, nx - 0.5), rng.uniform(-0.5, ny - 0.5)
        angle = rng.uniform(0.0, 2.0 * np.pi)
        if rng.random() < 0.8:
            # sin(2 z) is the zenith-angle law of a flux through a flat surface.
            zenith = np.arcsin(np.sqrt(rng.random()))
            length = min(1.5 * np.tan(zenith), 80.0)
            steps = np.linspace(0.0, length, max(2, int(4 * length)))
            px, py = x + steps * np.cos(angle), y + steps * np.sin(angle)
        else:
            turns = np.cumsum(rng.normal(0.0, 0.35, int(rng.integers(8, 60))))
            px = x + np.cumsum(0.25 * np.cos(angle + turns))
            py = y + np.cumsum(0.25 * np.sin(angle + turns))
            length = 0.25 * turns.size
        per_pixel = rng.lognormal(np.log(1300.0), 0.9)
        dose = per_pixel * max(length, 0.7) * rng.gamma(4.0, 0.25, px.size) / px.size
        deposit_charge(charge, px, py, dose, DIFFUSION_PX)
    return charge


def read_out(
    expected: FloatArray,
    hits: FloatArray,
    camera: Camera,
    rng: np.random.Generator,
) -> tuple[np.ndarray, BoolArray]:
    """Expose and read the detector.

    Parameters
    ----------
    expected : float64 array, shape (ny, nx)
        Expected counts, sky included.
    hits : float64 array, shape (ny, nx)
        Cosmic-ray charge, electrons.
    camera : Camera
        The detector.
    rng : numpy.random.Generator
        Photon and read-out noise.

    Returns
    -------
    pixels : uint16 array, shape (ny, nx)
        Counts.
    saturated : bool array, shape (ny, nx)
        Cut at the full well, or filled to it by a neighbour's charge.
    """
    electrons = rng.poisson(np.maximum(expected, 0.0) * camera.gain).astype(float)
    electrons += hits
    saturated = np.zeros(expected.shape, dtype=bool)
    bleed(electrons, camera.saturation * camera.gain, saturated)
    electrons += camera.read_noise * rng.standard_normal(expected.shape)
    counts = electrons / camera.gain
    for column in camera.bad_columns:
        _spoil(counts, column)
    counts[saturated] = np.maximum(counts[saturated], camera.saturation)
    return np.clip(np.rint(counts), 0, 65535).astype(np.uint16), saturated


def _spoil(counts: FloatArray, column: BadColumn) -> None:
    part = counts[column.first : column.last, column.col]
    part *= column.gain
    part += column.excess
