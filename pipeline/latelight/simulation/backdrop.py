"""What every simulated field has: ordinary sky, clutter, and frames with headers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from astropy.io import fits

from latelight.simulation.echoes import Echo
from latelight.simulation.exposures import Exposure
from latelight.simulation.objects import random_galaxies, random_stars
from latelight.simulation.observing import Clutter, Scene
from latelight.simulation.writing import STANDARD_WORDS, chip_words, exposure_words

__all__ = [
    "OBSERVATORY",
    "STARS_PER_ARCMIN2",
    "Kind",
    "SimulatedFrame",
    "check_order",
    "random_backdrop",
    "random_clutter",
    "standard_header",
]

Kind = Literal["echoes", "nuisances"]

# Stars of 13-23 mag per square arcminute at the default density.
STARS_PER_ARCMIN2 = 36.0
MARGIN_ARCSEC = 30.0
LEAST_SIZE = 256
OBSERVATORY = "Larkspur Hill 1.5-m"


@dataclass(frozen=True, slots=True)
class SimulatedFrame:
    """One frame as a telescope delivers it.

    Attributes
    ----------
    pixels : uint16 array, shape (ny, nx)
        Counts, sky included.
    header : astropy.io.fits.Header
        Its header; the world coordinates there may be slightly wrong.
    """

    pixels: np.ndarray
    header: fits.Header


def check_order(kind: str, size: int) -> None:
    """Refuse a field that cannot be made.

    Raises
    ------
    ValueError
        If ``kind`` is unknown or ``size`` too small.
    """
    if kind not in ("echoes", "nuisances"):
        msg = f'kind must be "echoes" or "nuisances", got {kind!r}'
        raise ValueError(msg)
    if size < LEAST_SIZE:
        msg = f"size must be at least {LEAST_SIZE} pixels, got {size}"
        raise ValueError(msg)


def random_backdrop(
    rng: np.random.Generator,
    exposure: Exposure,
    *,
    n_stars: int | None,
    kind: Kind,
    echoes: tuple[Echo, ...],
    n_epochs: int,
) -> Scene:
    """Draw stars and galaxies around an exposure's pointing.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    exposure : Exposure
        Where and how large the field is.
    n_stars : int or None
        Stars of 13 to 23 mag on a frame; None for 36 per square arcminute.
    kind : {"echoes", "nuisances"}
        How much there is of what may look like an echo.
    echoes : tuple of Echo
        The echoes of the field.
    n_epochs : int
        How often it is looked at.
    """
    size, scale = exposure.camera.shape[0], exposure.camera.scale_arcsec
    ra, dec = (float(v) for v in exposure.wcs.wcs.crval)
    half = 0.5 * size * scale + MARGIN_ARCSEC
    arcmin2 = (size * scale / 60.0) ** 2
    wanted = STARS_PER_ARCMIN2 * arcmin2 if n_stars is None else n_stars
    count = round(wanted * (2.0 * half / (size * scale)) ** 2)
    many = kind == "nuisances"
    return Scene(
        stars=random_stars(
            rng,
            ra=ra,
            dec=dec,
            half_size_arcsec=half,
            count=count,
            n_epochs=n_epochs,
            variable_share=0.04 if many else 0.015,
            very_bright=int(rng.integers(1, 4)) if many else int(rng.random() < 0.3),
        ),
        galaxies=random_galaxies(
            rng,
            ra=ra,
            dec=dec,
            half_size_arcsec=half,
            count=round(arcmin2 * (2.0 if many else 0.8)),
        ),
        echoes=echoes,
    )


def random_clutter(rng: np.random.Generator, size: int, kind: Kind) -> Clutter:
    """Draw how much of what is not sky gets into one exposure."""
    area = (size / 1024) ** 2
    if kind == "nuisances":
        return Clutter(
            trails=int(rng.integers(0, 3)),
            cosmic_rays=int(rng.poisson(140 * area)),
            movers=int(rng.poisson(4 * area)),
        )
    return Clutter(
        trails=int(rng.random() < 0.25),
        cosmic_rays=int(rng.poisson(70 * area)),
        movers=int(rng.poisson(1 * area)),
    )


def standard_header(exposure: Exposure) -> fits.Header:
    """Return the header of a frame of one chip."""
    header = exposure_words(exposure, words=STANDARD_WORDS, observatory=OBSERVATORY)
    header.update(chip_words(exposure, words=STANDARD_WORDS))
    return header
