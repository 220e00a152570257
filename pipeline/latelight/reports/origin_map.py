"""The likelihood of an origin as an image with a WCS, and over the whole sky."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from astropy_healpix import HEALPix

import latelight
from latelight.origin.joint_arcs import sky_of, unit_vectors
from latelight.origin.joint_likelihood import OriginLikelihood
from latelight.products.fits_file import fits_bytes
from latelight.records import FloatArray, PixelArray

__all__ = ["OriginMap", "make_map", "map_bytes"]

# Beyond this radius, degrees, a tangent plane stretches the sky too much, and the
# region counts as wide.
WIDE_DEG = 20.0
_LEAST_DEG, _MOST_DEG = 0.25, 100.0
_MARGIN = 1.25
# Places times arcs that are asked for at most: seconds.
_EFFORT = 8e7
_SIDES = (96, 400)
_NSIDES = (64, 32, 16)


@dataclass(frozen=True, slots=True)
class OriginMap:
    """log10 likelihood ratio of a single origin against random directions.

    Attributes
    ----------
    image : float32 array, shape (n, n)
        Rows run north, columns west; NaN beyond the sky.
    wcs : astropy.wcs.WCS
        Celestial, tangent plane where the region is small, else zenithal equidistant.
    ra, dec, radius : float
        Middle, and half of the side, degrees.
    healpix : float32 array or None
        Over the whole sky, nested; None where the region is small.
    """

    image: PixelArray
    wcs: Any
    ra: float
    dec: float
    radius: float
    healpix: PixelArray | None


def make_map(likelihood: OriginLikelihood, places: FloatArray) -> OriginMap:
    """Map the likelihood over the arcs and what surrounds them.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of a single origin.
    places : float64 array, shape (m, 3)
        What must be on the map: arcs and origins, unit vectors; at least one.
    """
    total = places.sum(axis=0)
    # Places all round the sky have no middle: any will do.
    middle = total if np.linalg.norm(total) > 1e-6 else places[0]
    ra, dec = (float(v) for v in sky_of(middle / np.linalg.norm(middle)))
    gaps = np.degrees(np.arccos(np.clip(places @ unit_vectors(ra, dec), -1.0, 1.0)))
    radius = float(np.clip(_MARGIN * gaps.max(), _LEAST_DEG, _MOST_DEG))
    wide = radius > WIDE_DEG
    n_arcs = max(1, len(likelihood.arcs))
    side = int(np.clip(np.sqrt(_EFFORT / n_arcs), *_SIDES)) // 2 * 2
    wcs = _wcs(ra, dec, radius, side, wide=wide)
    y, x = np.mgrid[:side, :side]
    lon, lat = wcs.all_pix2world(x.ravel(), y.ravel(), 0)
    known = np.isfinite(lon) & np.isfinite(lat)
    image = np.full(side * side, np.nan, np.float32)
    image[known] = _dex(likelihood, unit_vectors(lon[known], lat[known]))
    return OriginMap(
        image=image.reshape(side, side),
        wcs=wcs,
        ra=ra,
        dec=dec,
        radius=radius,
        healpix=_whole_sky(likelihood, n_arcs) if wide else None,
    )


def map_bytes(made: OriginMap) -> bytes:
    """Return the map as a FITS file: the image first, then the HEALPix table."""
    header = made.wcs.to_header()
    header["OBJECT"] = ("origin map", "log10 likelihood ratio of a common origin")
    header["CREATOR"] = f"latelight {latelight.__version__}"
    hdus: list[Any] = [fits.PrimaryHDU(made.image, header)]
    if made.healpix is not None:
        column = fits.Column(name="LOG10_LR", format="E", array=made.healpix)
        table = fits.BinTableHDU.from_columns([column], name="HEALPIX")
        n_pixels = made.healpix.size
        for key, value, comment in (
            ("PIXTYPE", "HEALPIX", "HEALPix pixelisation"),
            ("ORDERING", "NESTED", "pixel ordering scheme"),
            ("COORDSYS", "C", "equatorial, ICRS"),
            ("NSIDE", int(np.sqrt(n_pixels // 12)), "resolution parameter"),
            ("FIRSTPIX", 0, "first pixel, counted from 0"),
            ("LASTPIX", n_pixels - 1, "last pixel, counted from 0"),
            ("INDXSCHM", "IMPLICIT", "the row is the pixel"),
            ("OBJECT", "FULLSKY", "sky coverage"),
        ):
            table.header[key] = (value, comment)
        hdus.append(table)
    return fits_bytes(hdus)


def _wcs(ra: float, dec: float, radius: float, side: int, *, wide: bool) -> Any:
    wcs = WCS(naxis=2)
    kind = "ARC" if wide else "TAN"
    wcs.wcs.ctype = [f"RA---{kind}", f"DEC--{kind}"]
    wcs.wcs.crval = [ra, dec]
    wcs.wcs.crpix = [0.5 * (side + 1)] * 2
    wcs.wcs.cdelt = [-2.0 * radius / side, 2.0 * radius / side]
    wcs.wcs.cunit = ["deg", "deg"]
    wcs.wcs.radesys = "ICRS"
    wcs.wcs.set()
    return wcs


def _whole_sky(likelihood: OriginLikelihood, n_arcs: int) -> PixelArray:
    fit = [n for n in _NSIDES if 12 * n * n * n_arcs <= _EFFORT]
    nside = fit[0] if fit else _NSIDES[-1]
    grid = HEALPix(nside=nside, order="nested")
    lon, lat = grid.healpix_to_lonlat(np.arange(grid.npix))
    return _dex(likelihood, unit_vectors(lon.to_value("deg"), lat.to_value("deg")))


def _dex(likelihood: OriginLikelihood, points: FloatArray) -> PixelArray:
    return (likelihood.marginal(points) / np.log(10.0)).astype(np.float32)
