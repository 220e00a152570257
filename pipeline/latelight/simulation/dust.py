"""Dust sheets: where the dust lies and how patchy it is."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft, ndimage

from latelight.records import FloatArray

__all__ = [
    "DustSheet",
    "DustTexture",
    "Relief",
    "filamentary_texture",
    "random_relief",
]


@dataclass(frozen=True, slots=True)
class DustTexture:
    """Column density of a cloud on a grid of sky offsets.

    Attributes
    ----------
    values : float64 array, shape (n, n)
        Relative column density; rows run north, columns east, zero at the rim.
    spacing_arcsec : float
        Distance between grid points; the middle point is the cloud's centre.
    """

    values: FloatArray
    spacing_arcsec: float

    @property
    def half_size_arcsec(self) -> float:
        """Return the distance from the centre to the edge of the grid."""
        return 0.5 * (self.values.shape[0] - 1) * self.spacing_arcsec

    def at(self, east: FloatArray, north: FloatArray) -> FloatArray:
        """Return the density at sky offsets (arcsec), linear between points."""
        middle = 0.5 * (self.values.shape[0] - 1)
        rows = north / self.spacing_arcsec + middle
        cols = east / self.spacing_arcsec + middle
        return ndimage.map_coordinates(
            self.values, [rows, cols], order=1, mode="constant", cval=0.0
        )


@dataclass(frozen=True, slots=True)
class Relief:
    """Gentle hills of a sheet: a sum of plane waves.

    Attributes
    ----------
    wave_east, wave_north : float64 array, shape (n,)
        Wave numbers, radians per arcsec.
    phase : float64 array, shape (n,)
        Phases, radians.
    height_pc : float
        1 sigma of the hills, pc of depth.
    """

    wave_east: FloatArray
    wave_north: FloatArray
    phase: FloatArray
    height_pc: float

    def at(self, east: FloatArray, north: FloatArray) -> FloatArray:
        """Return the hills' depth, pc, at sky offsets (arcsec)."""
        e, n = np.asarray(east)[..., None], np.asarray(north)[..., None]
        waves = np.cos(self.wave_east * e + self.wave_north * n + self.phase)
        return self.height_pc * np.sqrt(2.0 / self.phase.size) * waves.sum(axis=-1)


@dataclass(frozen=True, slots=True)
class DustSheet:
    """A tilted, gently rolling sheet of dust.

    Attributes
    ----------
    ra, dec : float
        Centre of the cloud, degrees.
    depth_pc : float
        Depth at the centre, pc from the source, positive towards the observer.
    slope_east, slope_north : float
        Change of depth with distance across the sky at the dust, pc per pc.
    thickness_pc : float
        1 sigma of the Gaussian density along the line of sight, pc.
    texture : DustTexture
        Column density over the sky.
    relief : Relief
        How it departs from a plane.
    """

    ra: float
    dec: float
    depth_pc: float
    slope_east: float
    slope_north: float
    thickness_pc: float
    texture: DustTexture
    relief: Relief


def random_relief(rng: np.random.Generator, *, height_pc: float) -> Relief:
    """Draw hills of 35 to 120 arcsec from crest to crest."""
    wavelength = 35.0 * (120.0 / 35.0) ** rng.random(8)
    angle = rng.uniform(0.0, 2.0 * np.pi, 8)
    return Relief(
        wave_east=2.0 * np.pi / wavelength * np.sin(angle),
        wave_north=2.0 * np.pi / wavelength * np.cos(angle),
        phase=rng.uniform(0.0, 2.0 * np.pi, 8),
        height_pc=height_pc,
    )


def filamentary_texture(
    rng: np.random.Generator,
    *,
    along_arcsec: float,
    across_arcsec: float,
    along_pa: float,
    spacing_arcsec: float = 0.3,
    contrast: float = 1.0,
) -> DustTexture:
    """Draw a cloud: filaments in a log-normal medium inside a ragged outline.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    along_arcsec, across_arcsec : float
        Full extent of the cloud along ``along_pa`` and across it, arcsec.
    along_pa : float
        Position angle of its long side, degrees.
    spacing_arcsec : float
        Grid spacing.
    contrast : float
        0 for smooth dust, 1 for the usual patchiness.

    Notes
    -----
    Both random fields have power spectra falling as k**-3.2 beyond an outer scale
    (interstellar dust maps: k**-2.7 to -3.6); filaments are the neighbourhoods of
    the zero contours of the second one.
    """
    half = 0.75 * max(along_arcsec, across_arcsec) + 5.0
    n = 2 * int(np.ceil(half / spacing_arcsec)) + 1
    grid = (np.arange(n) - n // 2) * spacing_arcsec
    clumps, ridges, warp_e, warp_n = (
        _random_field(rng, n, scale=scale / spacing_arcsec)
        for scale in (12.0, 14.0, 30.0, 30.0)
    )
    density = np.exp(contrast * 0.45 * clumps)
    filaments = np.exp(-((ridges / 0.35) ** 2))
    density *= 1.0 - contrast * 0.6 * (1.0 - filaments)

    warp = contrast * 0.12 * along_arcsec
    east, north = grid[None, :] + warp * warp_e, grid[:, None] + warp * warp_n
    c, s = np.cos(np.radians(along_pa)), np.sin(np.radians(along_pa))
    along, across = east * s + north * c, east * c - north * s
    # Long sides fade slowly, the far and near side of the cloud end more sharply.
    density *= np.exp(-(np.abs(2.0 * along / along_arcsec) ** 2.5))
    density *= np.exp(-((2.0 * across / across_arcsec) ** 4))
    rim = np.minimum.outer(half - np.abs(grid), half - np.abs(grid))
    density *= np.clip(rim / 4.0, 0.0, 1.0)
    density[density < 1e-3 * density.max()] = 0.0
    return DustTexture(values=density / density.max(), spacing_arcsec=spacing_arcsec)


def _random_field(rng: np.random.Generator, n: int, *, scale: float) -> FloatArray:
    """Return a Gaussian field of zero mean and unit variance, shape (n, n).

    ``scale`` is the outer scale in grid points.
    """
    size = fft.next_fast_len(n, real=True)
    white = fft.rfft2(rng.standard_normal((size, size)))
    k = np.hypot(fft.fftfreq(size)[:, None], fft.rfftfreq(size)[None, :])
    white *= (k**2 + (0.5 / scale) ** 2) ** (-0.25 * 3.2)
    field = fft.irfft2(white, (size, size))[:n, :n]
    field -= field.mean()
    return field / field.std()
