"""Many moving arcs as arrays on the unit sphere, ready to be traced back."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import KDTree

from latelight.records import FloatArray, IntArray

__all__ = ["MovingArcs", "moving_arcs", "sky_of", "unit_vectors"]

# Neighbours farther than so many correlation lengths share nothing.
_FAR_LENGTHS = 5.0
# Weights come in steps, so that arcs of one weight can be multiplied.
_WEIGHT_STEPS = 16


@dataclass(frozen=True, slots=True)
class MovingArcs:
    """Places and motions of arcs.

    Attributes
    ----------
    frames : float64 array, shape (n, 3, 3)
        For each arc three unit vectors: its place, its motion (a tangent there), and
        their cross product, the pole of the great circle of the motion.
    pa_err_deg : float64 array, shape (n,)
        1 sigma of the direction of the motion, degrees.
    wrong_sense : float64 array, shape (n,)
        Probability that the arc moves the other way, 0-0.5.
    weight : float64 array, shape (n,)
        Share of an independent arc that it is worth, 0-1: neighbours on one filament
        share their tilt.
    filament : int64 array, shape (n,)
        Group of neighbours to which it belongs.
    log_speed, log_speed_err : float64 array, shape (n,)
        Natural log of the speed in arcsec/yr and 1 sigma; NaN when unknown.
    """

    frames: FloatArray
    pa_err_deg: FloatArray
    wrong_sense: FloatArray
    weight: FloatArray
    filament: IntArray
    log_speed: FloatArray
    log_speed_err: FloatArray

    def __len__(self) -> int:
        return len(self.frames)


def moving_arcs(
    ra: ArrayLike,
    dec: ArrayLike,
    pa: ArrayLike,
    *,
    pa_err: ArrayLike,
    sense_odds: ArrayLike = np.inf,
    speed: ArrayLike = np.nan,
    speed_err: ArrayLike = np.nan,
    correlation_arcmin: float = 0.0,
) -> MovingArcs:
    """Gather arcs into arrays.

    Parameters
    ----------
    ra, dec : array_like of float, shape (n,)
        Places, degrees, ICRS.
    pa, pa_err : array_like of float, shape (n,)
        Position angles of the motions and 1 sigma, degrees; finite.
    sense_odds : array_like of float
        log10 of the odds that the sense of each motion is right, >= 0.
    speed, speed_err : array_like of float
        arcsec per Julian year and 1 sigma; NaN when unknown.
    correlation_arcmin : float
        Distance over which sheets share their tilt; 0 when all are independent.

    Raises
    ------
    ValueError
        If a place, a direction or its error is not finite.

    Notes
    -----
    With ``rho = exp(-distance / length)`` for the correlation of the tilts of two
    arcs, an arc counts as ``1 / sum(rho)`` of an independent one: m arcs in one place
    together as one.
    """
    values = np.broadcast_arrays(*(np.asarray(v, float) for v in (ra, dec, pa, pa_err)))
    lon, lat, angle, error = (np.atleast_1d(v) for v in values)
    for name, value in (("ra", lon), ("dec", lat), ("pa", angle), ("pa_err", error)):
        if not np.isfinite(value).all():
            msg = f"{name} must be finite; leave out arcs without a known motion"
            raise ValueError(msg)
    odds = np.broadcast_to(np.asarray(sense_odds, float), lon.shape)
    place = unit_vectors(lon, lat)
    motion = _tangents(lon, lat, angle)
    weight, filament = _shared_tilts(place, np.radians(correlation_arcmin / 60.0))
    return MovingArcs(
        frames=np.stack([place, motion, np.cross(place, motion)], axis=1),
        pa_err_deg=error,
        wrong_sense=1.0 / (1.0 + 10.0 ** np.clip(odds, 0.0, 300.0)),
        weight=weight,
        filament=filament,
        **_log_speeds(lon.shape, speed, speed_err),
    )


def _log_speeds(
    shape: tuple[int, ...], speed: ArrayLike, speed_err: ArrayLike
) -> dict[str, FloatArray]:
    value = np.broadcast_to(np.asarray(speed, float), shape)
    error = np.broadcast_to(np.asarray(speed_err, float), shape)
    known = np.isfinite(value) & (value > 0.0) & np.isfinite(error)
    safe = np.where(known, value, 1.0)
    return {
        "log_speed": np.where(known, np.log(safe), np.nan),
        "log_speed_err": np.where(known, error / safe, np.nan),
    }


def unit_vectors(ra: ArrayLike, dec: ArrayLike) -> FloatArray:
    """Return unit vectors, shape (..., 3), of places in degrees."""
    lon, lat = np.radians(np.asarray(ra, float)), np.radians(np.asarray(dec, float))
    return np.stack(
        [np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=-1
    )


def sky_of(vectors: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return RA (0-360) and Dec, degrees, of vectors of shape (..., 3)."""
    x, y, z = np.moveaxis(np.asarray(vectors, float), -1, 0)
    return np.degrees(np.arctan2(y, x)) % 360.0, np.degrees(
        np.arctan2(z, np.hypot(x, y))
    )


def _tangents(lon: FloatArray, lat: FloatArray, angle: FloatArray) -> FloatArray:
    """Return the tangent unit vectors at position angles, all in degrees."""
    a, d, p = np.radians(lon), np.radians(lat), np.radians(angle)
    north = np.stack(
        [-np.sin(d) * np.cos(a), -np.sin(d) * np.sin(a), np.cos(d)], axis=-1
    )
    east = np.stack([-np.sin(a), np.cos(a), np.zeros_like(a)], axis=-1)
    return np.cos(p)[:, None] * north + np.sin(p)[:, None] * east


def _shared_tilts(place: FloatArray, length: float) -> tuple[FloatArray, IntArray]:
    """Return weights and groups of neighbours within a length in radians."""
    n = len(place)
    if length <= 0.0 or n < 2:
        return np.ones(n), np.arange(n)
    tree = KDTree(place)
    first, second = tree.query_pairs(_FAR_LENGTHS * length, output_type="ndarray").T
    gap = np.linalg.norm(place[first] - place[second], axis=1)
    rho = np.exp(-gap / length)
    total = np.ones(n)
    np.add.at(total, first, rho)
    np.add.at(total, second, rho)
    near = gap <= length
    links = coo_array((np.ones(near.sum()), (first[near], second[near])), shape=(n, n))
    _, filament = connected_components(links, directed=False)
    steps = np.maximum(np.round(_WEIGHT_STEPS / total), 1.0)
    return steps / _WEIGHT_STEPS, filament.astype(np.int64)
