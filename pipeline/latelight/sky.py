"""Angles on the sky and their tie to pixels.

Position angles are degrees east of north, 0-360; pixel angles are degrees
counter-clockwise from +x towards +y.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from latelight.records import FloatArray

__all__ = [
    "offset_position",
    "pixel_angle_to_position_angle",
    "pixel_scale_arcsec",
    "position_angle",
    "position_angle_to_pixel_angle",
    "separation_deg",
    "wrap_180",
]


def wrap_180(angle: ArrayLike) -> FloatArray:
    """Wrap angles in degrees to the half-open range [-180, 180)."""
    return (np.asarray(angle, dtype=float) + 180.0) % 360.0 - 180.0


def separation_deg(
    ra1: ArrayLike, dec1: ArrayLike, ra2: ArrayLike, dec2: ArrayLike
) -> FloatArray:
    """Return the angle between two places on the sky, degrees.

    Vincenty's form of the great circle: exact at every distance, the poles and
    antipodes included.  All arguments in degrees; they broadcast.
    """
    lon, lat1, lat2 = _radians(ra1, dec1, ra2, dec2)
    across = np.hypot(
        np.cos(lat2) * np.sin(lon),
        np.cos(lat1) * np.sin(lat2) - np.sin(lat1) * np.cos(lat2) * np.cos(lon),
    )
    along = np.sin(lat1) * np.sin(lat2) + np.cos(lat1) * np.cos(lat2) * np.cos(lon)
    return np.degrees(np.arctan2(across, along))


def position_angle(
    ra1: ArrayLike, dec1: ArrayLike, ra2: ArrayLike, dec2: ArrayLike
) -> FloatArray:
    """Return the position angle of place 2 as seen from place 1, degrees 0-360.

    All arguments in degrees; they broadcast.
    """
    lon, lat1, lat2 = _radians(ra1, dec1, ra2, dec2)
    east = np.cos(lat2) * np.sin(lon)
    north = np.cos(lat1) * np.sin(lat2) - np.sin(lat1) * np.cos(lat2) * np.cos(lon)
    return np.degrees(np.arctan2(east, north)) % 360.0


def offset_position(
    ra: ArrayLike, dec: ArrayLike, pa: ArrayLike, distance_deg: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Return the place at a position angle and distance from another.

    All arguments and results in degrees; they broadcast.
    """
    lon, lat, angle, arc = (
        np.radians(np.asarray(v, dtype=float)) for v in (ra, dec, pa, distance_deg)
    )
    sin_lat = np.sin(lat) * np.cos(arc) + np.cos(lat) * np.sin(arc) * np.cos(angle)
    new_lat = np.arcsin(np.clip(sin_lat, -1.0, 1.0))
    new_lon = lon + np.arctan2(
        np.sin(angle) * np.sin(arc) * np.cos(lat),
        np.cos(arc) - np.sin(lat) * sin_lat,
    )
    return np.degrees(new_lon) % 360.0, np.degrees(new_lat)


def _radians(
    ra1: ArrayLike, dec1: ArrayLike, ra2: ArrayLike, dec2: ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray]:
    lon = np.radians(np.asarray(ra2, dtype=float) - np.asarray(ra1, dtype=float))
    return (
        lon,
        np.radians(np.asarray(dec1, dtype=float)),
        np.radians(np.asarray(dec2, dtype=float)),
    )


def _sky_jacobian(wcs: Any, x: float, y: float) -> FloatArray:
    """Return d(east, north)/d(x, y) at a pixel, arcsec per pixel, shape (2, 2)."""
    # Half a pixel each way: small against any distortion, large against rounding.
    step = 0.5
    px = np.array([x - step, x + step, x, x, x])
    py = np.array([y, y, y - step, y + step, y])
    ra, dec = wcs.all_pix2world(px, py, 0)
    east = wrap_180(ra - ra[4]) * np.cos(np.radians(dec[4])) * 3600.0
    north = (dec - dec[4]) * 3600.0
    if abs(dec[4]) > 89.0:  # the flat form fails at the pole: use great circles
        dist = separation_deg(ra[4], dec[4], ra, dec) * 3600.0
        pa = np.radians(position_angle(ra[4], dec[4], ra, dec))
        east, north = dist * np.sin(pa), dist * np.cos(pa)
    return np.array(
        [
            [east[1] - east[0], east[3] - east[2]],
            [north[1] - north[0], north[3] - north[2]],
        ]
    )


def pixel_scale_arcsec(wcs: Any, x: float, y: float) -> float:
    """Return the pixel scale at a pixel, arcsec: square root of the area of one."""
    return float(np.sqrt(abs(np.linalg.det(_sky_jacobian(wcs, x, y)))))


def pixel_angle_to_position_angle(
    wcs: Any, x: float, y: float, angle: float
) -> tuple[float, float]:
    """Turn a direction on the frame into one on the sky.

    Parameters
    ----------
    wcs : astropy.wcs.WCS
        Celestial WCS of the frame.
    x, y : float
        Where, pixels.
    angle : float
        Pixel angle, degrees.

    Returns
    -------
    position_angle : float
        Degrees, 0-360.
    scale : float
        Arcsec per pixel along that direction.
    """
    radians = np.radians(angle)
    east, north = _sky_jacobian(wcs, x, y) @ np.array(
        [np.cos(radians), np.sin(radians)]
    )
    return float(np.degrees(np.arctan2(east, north)) % 360.0), float(
        np.hypot(east, north)
    )


def position_angle_to_pixel_angle(wcs: Any, x: float, y: float, pa: float) -> float:
    """Turn a position angle at a pixel into a pixel angle, degrees 0-360."""
    radians = np.radians(pa)
    step = np.linalg.solve(
        _sky_jacobian(wcs, x, y), np.array([np.sin(radians), np.cos(radians)])
    )
    return float(np.degrees(np.arctan2(step[1], step[0])) % 360.0)
