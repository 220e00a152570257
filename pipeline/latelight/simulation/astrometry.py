"""True and stated world coordinates of simulated frames.

A frame's true WCS is TAN with SIP distortion (Shupe et al. 2005, ASPC 347, 491);
what its header says is the same, slightly wrong, as in life.
"""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
from astropy.wcs import WCS, FITSFixedWarning, Sip

from latelight.records import FloatArray
from latelight.sky import offset_position

__all__ = [
    "PlateCoordinates",
    "frame_wcs",
    "misstate",
    "pixel_to_pixel",
    "sky_to_pixel",
]

ARCSEC_PER_RADIAN = 180.0 * 3600.0 / np.pi


def frame_wcs(
    *,
    ra: float,
    dec: float,
    shape: tuple[int, int],
    scale_arcsec: float,
    rotation_deg: float,
    offset_px: tuple[float, float],
    distortion: FloatArray,
) -> Any:
    """Build the true WCS of one exposure.

    Parameters
    ----------
    ra, dec : float
        Sky position that falls ``offset_px`` from the frame's centre, degrees.
    shape : (int, int)
        Frame shape (ny, nx).
    scale_arcsec : float
        Arcsec per pixel.
    rotation_deg : float
        Rotation of the detector, degrees; at 0 north is up and east left.
    offset_px : (float, float)
        Pointing offset in x and y, pixels.
    distortion : float64 array, shape (8,)
        Displacement in pixels at the frame's edge: radial cubic, its asymmetry,
        and three quadratic terms in each of x and y.

    Returns
    -------
    astropy.wcs.WCS
    """
    ny, nx = shape
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN-SIP", "DEC--TAN-SIP"]
    wcs.wcs.crval = [ra, dec]
    wcs.wcs.crpix = [0.5 * (nx + 1) + offset_px[0], 0.5 * (ny + 1) + offset_px[1]]
    c, s = np.cos(np.radians(rotation_deg)), np.sin(np.radians(rotation_deg))
    wcs.wcs.cd = scale_arcsec / 3600.0 * np.array([[-c, s], [s, c]])
    wcs.wcs.radesys = "ICRS"
    half = 0.5 * max(shape)
    a, b = np.zeros((4, 4)), np.zeros((4, 4))
    radial, skew = distortion[0] / half**3, distortion[1] / half**3
    a[3, 0], a[1, 2] = radial, radial + skew
    b[0, 3], b[2, 1] = radial, radial - skew
    a[2, 0], a[1, 1], a[0, 2] = distortion[2:5] / half**2
    b[2, 0], b[1, 1], b[0, 2] = distortion[5:8] / half**2
    wcs.sip = Sip(a, b, None, None, wcs.wcs.crpix)
    wcs.wcs.set()
    wcs.array_shape = shape
    return wcs


def misstate(
    wcs: Any, rng: np.random.Generator, *, error_px: float, rotation_err_deg: float
) -> Any:
    """Return the WCS a header would state: shifted and turned by a little.

    Parameters
    ----------
    wcs : astropy.wcs.WCS
        The true one.
    rng : numpy.random.Generator
        Draws the direction.
    error_px, rotation_err_deg : float
        Size of the shift, pixels, and 1 sigma of the rotation, degrees.
    """
    stated = wcs.deepcopy()
    scale = np.sqrt(abs(np.linalg.det(wcs.wcs.cd)))
    pointing, direction = wcs.wcs.crval, rng.uniform(0.0, 360.0)
    ra, dec = offset_position(pointing[0], pointing[1], direction, error_px * scale)
    angle = np.radians(rng.normal(0.0, rotation_err_deg))
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    stated.wcs.crval = [float(ra), float(dec)]
    stated.wcs.cd = turn @ wcs.wcs.cd
    stated.wcs.set()
    return stated


def sky_to_pixel(
    wcs: Any, ra: FloatArray, dec: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return pixels of sky positions to 1e-9 px; far outside the frame, NaN."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", FITSFixedWarning)
        x, y = wcs.all_world2pix(
            np.ravel(ra), np.ravel(dec), 0, tolerance=1e-9, maxiter=60, quiet=True
        )
    shape = np.shape(ra)
    return np.reshape(x, shape), np.reshape(y, shape)


def pixel_to_pixel(
    start: Any, end: Any, x: FloatArray, y: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Carry pixels of one frame to another through the sky."""
    ra, dec = start.all_pix2world(np.ravel(x), np.ravel(y), 0)
    shape = np.shape(x)
    return sky_to_pixel(end, np.reshape(ra, shape), np.reshape(dec, shape))


class PlateCoordinates:
    """Gnomonic offsets from one place on the sky, arcsec east and north.

    Parameters
    ----------
    ra, dec : float
        The place, degrees.
    """

    def __init__(self, ra: float, dec: float) -> None:
        self.ra, self.dec = ra, dec
        a, d = np.radians(ra), np.radians(dec)
        self._centre = np.array(
            [np.cos(d) * np.cos(a), np.cos(d) * np.sin(a), np.sin(d)]
        )
        self._east = np.array([-np.sin(a), np.cos(a), 0.0])
        self._north = np.cross(self._centre, self._east)

    def from_sky(
        self, ra: FloatArray, dec: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return offsets east and north, arcsec, of sky positions in degrees."""
        toward = _unit_vectors(ra, dec)
        along = toward @ self._centre
        east = toward @ self._east / along * ARCSEC_PER_RADIAN
        return east, toward @ self._north / along * ARCSEC_PER_RADIAN

    def to_sky(
        self, east: FloatArray, north: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return sky positions, degrees, of offsets in arcsec."""
        toward = self._directions(east, north)
        ra = np.degrees(np.arctan2(toward[..., 1], toward[..., 0])) % 360.0
        across = np.hypot(toward[..., 0], toward[..., 1])
        return ra, np.degrees(np.arctan2(toward[..., 2], across))

    def angle_from(
        self, ra: float, dec: float, east: FloatArray, north: FloatArray
    ) -> FloatArray:
        """Return the angle on the sky between offsets and a place, degrees."""
        toward = self._directions(east, north)
        place = _unit_vectors(np.asarray(ra), np.asarray(dec))
        across = np.linalg.norm(np.cross(toward, place), axis=-1)
        return np.degrees(np.arctan2(across, toward @ place))

    def _directions(self, east: FloatArray, north: FloatArray) -> FloatArray:
        """Return vectors (not of unit length) towards offsets."""
        e = np.asarray(east, dtype=float)[..., None] / ARCSEC_PER_RADIAN
        n = np.asarray(north, dtype=float)[..., None] / ARCSEC_PER_RADIAN
        return self._centre + e * self._east + n * self._north


def _unit_vectors(ra: FloatArray, dec: FloatArray) -> FloatArray:
    a, d = np.radians(ra), np.radians(dec)
    return np.stack([np.cos(d) * np.cos(a), np.cos(d) * np.sin(a), np.sin(d)], axis=-1)
