"""Stars, galaxies and moving bodies of a field."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from latelight.records import BoolArray, FloatArray
from latelight.simulation._kernels import add_stars
from latelight.simulation.astrometry import PlateCoordinates, sky_to_pixel
from latelight.simulation.exposures import Exposure, Patch
from latelight.simulation.optics import convolve_sampled
from latelight.simulation.truth import StarTruth
from latelight.threads import over_rows

__all__ = [
    "Galaxies",
    "StarField",
    "paint_stars",
    "random_galaxies",
    "random_movers",
    "random_stars",
    "render_galaxies",
    "stars_on_frame",
]

# Star counts rise by this power of ten a magnitude: a high-latitude field.
COUNT_SLOPE = 0.22
BRIGHTEST, FAINTEST = 13.0, 23.0
# A star is painted out to where it is fainter than this, counts per pixel ...
LEAST_COUNTS = 0.01
# ... and at least to this many Moffat radii: all but 5e-4 of the light at beta 3.5.
LEAST_RADII = 4.5


@dataclass(frozen=True, slots=True)
class StarField:
    """The stars of a field at several epochs.

    Attributes
    ----------
    ra, dec : float64 array, shape (n,)
        Degrees.
    mag : float64 array, shape (n_epochs, n)
        Magnitudes.
    variable : bool array, shape (n,)
        Whether the magnitude differs between epochs.
    """

    ra: FloatArray
    dec: FloatArray
    mag: FloatArray
    variable: BoolArray


@dataclass(frozen=True, slots=True)
class Galaxies:
    """Galaxies with Sersic profiles; one array element each.

    Attributes
    ----------
    ra, dec : float64 array
        Degrees.
    mag, radius_arcsec, index, axis_ratio, pa : float64 array
        Total magnitude, half-light radius along the major axis, Sersic index,
        minor over major axis, position angle of the major axis (degrees).
    """

    ra: FloatArray
    dec: FloatArray
    mag: FloatArray
    radius_arcsec: FloatArray
    index: FloatArray
    axis_ratio: FloatArray
    pa: FloatArray


def random_stars(
    rng: np.random.Generator,
    *,
    ra: float,
    dec: float,
    half_size_arcsec: float,
    count: int,
    n_epochs: int,
    variable_share: float,
    very_bright: int,
) -> StarField:
    """Draw a star field.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    ra, dec : float
        Centre, degrees.
    half_size_arcsec : float
        Half the side of the square that is filled.
    count : int
        Stars of 13 to 23 mag in the square.
    n_epochs : int
        Epochs.
    variable_share : float
        Share of stars that vary, 0-1.
    very_bright : int
        Extra stars of 10 to 12.5 mag.
    """
    n = count + very_bright
    east, north = rng.uniform(-half_size_arcsec, half_size_arcsec, (2, n))
    sky = PlateCoordinates(ra, dec).to_sky(east, north)
    low, high = 10.0 ** (COUNT_SLOPE * np.array([BRIGHTEST, FAINTEST]))
    mag = np.log10(rng.uniform(low, high, n)) / COUNT_SLOPE
    mag[count:] = rng.uniform(10.0, 12.5, very_bright)
    variable = rng.random(n) < variable_share
    swing = rng.lognormal(np.log(0.35), 0.8, n) * variable
    change = swing * rng.uniform(-1.0, 1.0, (n_epochs, n))
    return StarField(ra=sky[0], dec=sky[1], mag=mag + change, variable=variable)


def random_galaxies(
    rng: np.random.Generator,
    *,
    ra: float,
    dec: float,
    half_size_arcsec: float,
    count: int,
) -> Galaxies:
    """Draw galaxies of 16.5 to 22 mag; the brighter, the larger."""
    east, north = rng.uniform(-half_size_arcsec, half_size_arcsec, (2, count))
    sky = PlateCoordinates(ra, dec).to_sky(east, north)
    mag = 22.0 + np.log10(rng.uniform(10.0 ** (0.35 * -5.5), 1.0, count)) / 0.35
    radius = 10.0 ** (-0.12 * (mag - 21.0)) * rng.lognormal(np.log(0.6), 0.3, count)
    return Galaxies(
        ra=sky[0],
        dec=sky[1],
        mag=mag,
        radius_arcsec=np.clip(radius, 0.3, 5.0),
        index=np.where(rng.random(count) < 0.7, 1.0, rng.uniform(2.0, 3.5, count)),
        axis_ratio=rng.uniform(0.25, 0.95, count),
        pa=rng.uniform(0.0, 180.0, count),
    )


def random_movers(
    rng: np.random.Generator, exposure: Exposure, *, count: int
) -> FloatArray:
    """Draw moving bodies on one frame.

    Returns
    -------
    float64 array, shape (count, 5)
        x, y, magnitude, and the motion during the exposure in x and y, pixels.
    """
    ny, nx = exposure.camera.shape
    pace = rng.uniform(0.2, 1.2, count) * exposure.exposure_s / 60.0
    pace /= exposure.camera.scale_arcsec
    angle = rng.uniform(0.0, 2.0 * np.pi, count)
    return np.column_stack(
        [
            rng.uniform(20.0, nx - 20.0, count),
            rng.uniform(20.0, ny - 20.0, count),
            rng.uniform(18.0, 22.0, count),
            pace * np.cos(angle),
            pace * np.sin(angle),
        ]
    )


def stars_on_frame(field: StarField, exposure: Exposure, epoch: int) -> StarTruth:
    """Return where the stars fall on a frame and how bright they are there."""
    x, y = sky_to_pixel(exposure.wcs, field.ra, field.dec)
    mag = field.mag[epoch]
    return StarTruth(
        x=x, y=y, mag=mag, counts=exposure.counts(mag), variable=field.variable
    )


def paint_stars(
    image: FloatArray,
    exposure: Exposure,
    x: FloatArray,
    y: FloatArray,
    counts: FloatArray,
) -> None:
    """Add point sources to an image in place."""
    psf = exposure.psf
    form = psf.parameters(x, y)
    alpha = (form[:, 0] * form[:, 2] - form[:, 1] ** 2) ** -0.25
    # Moffat wings: height (r/alpha)^(-2 beta) = least counts.
    brightness = np.maximum(counts * form[:, 3] / LEAST_COUNTS, 1.0)
    radius = alpha * np.maximum(brightness ** (0.5 / psf.beta), LEAST_RADII)
    table = np.column_stack([x, y, counts, form, radius])
    ny, nx = image.shape
    table = table[(x > -radius) & (x < nx + radius) & (y > -radius) & (y < ny + radius)]

    def rows(first: int, last: int) -> None:
        add_stars(image, table, psf.beta, first, last)

    over_rows(rows, ny)


def render_galaxies(galaxies: Galaxies, exposure: Exposure) -> list[Patch]:
    """Render the galaxies that fall on a frame, blurred by the PSF."""
    ny, nx = exposure.camera.shape
    x, y = sky_to_pixel(exposure.wcs, galaxies.ra, galaxies.dec)
    inside = (x > -40) & (x < nx + 40) & (y > -40) & (y < ny + 40)
    return [
        _galaxy(galaxies, int(i), float(x[i]), float(y[i]), exposure)
        for i in np.flatnonzero(inside)
    ]


def _galaxy(
    galaxies: Galaxies, i: int, x: float, y: float, exposure: Exposure
) -> Patch:
    """Render one Sersic profile: exp(-b (r/r_e)^(1/n)), half the light inside r_e."""
    oversample = 3
    radius = float(galaxies.radius_arcsec[i]) / exposure.camera.scale_arcsec
    half = int(np.ceil(6.0 * radius + 3.0 * exposure.psf.fwhm_px))
    row, col = round(y) - half, round(x) - half
    d = np.arange(oversample * 2 * half + 1) / oversample - half
    dx, dy = (d + round(x) - x)[None, :], (d + round(y) - y)[:, None]
    # Position angle on the frame, east to the left: close enough for a galaxy.
    angle = np.radians(90.0 + float(galaxies.pa[i]))
    along = dx * np.cos(angle) + dy * np.sin(angle)
    across = (dy * np.cos(angle) - dx * np.sin(angle)) / float(galaxies.axis_ratio[i])
    n = float(galaxies.index[i])
    b = float(special.gammaincinv(2.0 * n, 0.5))
    # Softened by a third of a sample: the cusp of n > 1 has no finite peak.
    r = np.sqrt(along**2 + across**2 + (0.3 / oversample) ** 2) / radius
    profile = np.exp(-b * r ** (1.0 / n))
    profile[r > 6.0 * max(1.0, 1.0 / float(galaxies.axis_ratio[i]))] = 0.0
    blurred = convolve_sampled(profile, exposure.psf, x=x, y=y, oversample=oversample)[
        ::oversample, ::oversample
    ]
    counts = float(exposure.counts(galaxies.mag[i]))
    return Patch(row, col, (counts * blurred / blurred.sum()).astype(np.float32))
