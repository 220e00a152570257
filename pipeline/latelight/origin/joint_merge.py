"""Count every arc once: the same one is seen in several pairs, nights and fields."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import KDTree

from latelight.echo.constants import ARCSEC_PER_RADIAN, DAYS_PER_YEAR
from latelight.origin.joint_arcs import unit_vectors
from latelight.records import BoolArray, FloatArray, IntArray
from latelight.sky import position_angle, separation_deg, wrap_180

__all__ = ["Sightings", "same_arcs"]

_SIGMAS = 3.0
# Directions of one arc differ by its curvature, its knots and the errors; places by
# the relief of the dust.
_TURN_DEG = 12.0
_PLACE_ARCSEC = 2.0
# The speed of an arc that shows one lobe only is not known: at most this, arcsec/yr.
_FASTEST = 30.0
# A share by which speeds of one arc may differ, as the dust rolls.
_SPEED_SHARE = 0.25


@dataclass(frozen=True, slots=True)
class Sightings:
    """Rows of tables that may show one arc several times; arrays of shape (n,).

    Attributes
    ----------
    ra, dec : float64 array
        Degrees.
    mjd : float64 array
        Epoch of the place.
    pa, pa_err : float64 array
        Direction of the motion and 1 sigma, degrees.
    speed, speed_err : float64 array
        arcsec per Julian year; NaN when unknown.
    length : float64 array
        Along the arc, arcsec.
    width : float64 array
        Across it, arcsec.
    snr : float64 array
        Significance: the best sighting stands for the arc.
    sure : bool array
        Whether the sense of the motion is all but certain.
    rank : int64 array
        Lower ranks stand for the arc before any S/N: tracks before candidates.
    """

    ra: FloatArray
    dec: FloatArray
    mjd: FloatArray
    pa: FloatArray
    pa_err: FloatArray
    speed: FloatArray
    speed_err: FloatArray
    length: FloatArray
    width: FloatArray
    snr: FloatArray
    sure: BoolArray
    rank: IntArray


def same_arcs(seen: Sightings) -> tuple[IntArray, IntArray]:
    """Group the sightings of each arc.

    Two sightings are one arc when one, moved along its direction at its speed to the
    epoch of the other, comes to lie on it: within 3 sigma and 2 arcsec across, within
    half the longer one's length along, directions and speeds agreeing within their
    errors and what rolling dust adds.

    Returns
    -------
    group : int64 array, shape (n,)
        Number of the arc, 0, 1, ...
    best : int64 array, shape (number of arcs,)
        The sighting that stands for each.
    """
    n = seen.ra.size
    if n == 0:
        return np.zeros(0, np.int64), np.zeros(0, np.int64)
    first, second = _neighbours(seen)
    one = _agree(seen, first, second)
    links = coo_array((np.ones(one.sum()), (first[one], second[one])), shape=(n, n))
    _, group = connected_components(links, directed=False)
    order = np.lexsort((np.arange(n), -seen.snr, seen.rank))
    _, first_of = np.unique(group[order], return_index=True)
    return group.astype(np.int64), order[first_of].astype(np.int64)


def _neighbours(seen: Sightings) -> tuple[IntArray, IntArray]:
    """Return pairs that are near enough to be one arc, whatever their direction."""
    span = float(np.ptp(seen.mjd)) / DAYS_PER_YEAR
    fastest = max(_FASTEST, float(np.nanmax(seen.speed, initial=0.0)))
    reach = fastest * span + float(seen.length.max()) + _PLACE_ARCSEC
    tree = KDTree(unit_vectors(seen.ra, seen.dec))
    pairs = tree.query_pairs(reach / ARCSEC_PER_RADIAN, output_type="ndarray")
    return pairs[:, 0], pairs[:, 1]


def _agree(seen: Sightings, one: IntArray, two: IntArray) -> BoolArray:
    """Say which pairs of sightings show one arc."""
    turn = wrap_180(seen.pa[two] - seen.pa[one])
    unsure = ~(seen.sure[one] & seen.sure[two])
    back = unsure & (np.abs(turn) > 90.0)
    bent = np.where(back, np.abs(wrap_180(turn + 180.0)), np.abs(turn))
    turn_ok = bent <= np.hypot(
        _TURN_DEG, _SIGMAS * np.hypot(seen.pa_err[one], seen.pa_err[two])
    )
    # From the one to the other, along the motion of the better known and across it.
    lead = np.where(seen.rank[one] <= seen.rank[two], one, two)
    gap = separation_deg(seen.ra[one], seen.dec[one], seen.ra[two], seen.dec[two])
    way = np.radians(
        position_angle(seen.ra[one], seen.dec[one], seen.ra[two], seen.dec[two])
        - seen.pa[lead]
    )
    ahead, beside = 3600.0 * gap * np.cos(way), 3600.0 * gap * np.sin(way)
    years = (seen.mjd[two] - seen.mjd[one]) / DAYS_PER_YEAR
    speed, error, known = _common_speed(seen, one, two)
    slack = np.hypot(_SIGMAS * error * years, _PLACE_ARCSEC) + 0.5 * (
        seen.width[one] + seen.width[two]
    )
    place_ok = np.abs(ahead - speed * years) <= slack
    # Without a speed: somewhere ahead, no farther than the fastest could come.
    reach = _FASTEST * np.abs(years) + slack
    unknown_ok = (np.abs(ahead) <= reach) & (unsure | (ahead * years >= -(slack**2)))
    along_ok = np.abs(beside) <= 0.5 * np.maximum(seen.length[one], seen.length[two])
    return (
        turn_ok & along_ok & np.where(known, place_ok, unknown_ok)
        & _speeds_agree(seen, one, two)
    )  # fmt: skip


def _common_speed(
    seen: Sightings, one: IntArray, two: IntArray
) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Return the better known speed of two, its error, and whether there is any."""
    errors = np.stack([seen.speed_err[one], seen.speed_err[two]])
    speeds = np.stack([seen.speed[one], seen.speed[two]])
    fit = np.isfinite(speeds) & np.isfinite(errors)
    errors = np.where(fit, errors, np.inf)
    pick = np.argmin(errors, axis=0)
    at = np.arange(one.size)
    known: BoolArray = np.asarray(fit.any(axis=0))
    speed = np.where(known, speeds[pick, at], 0.0)
    return speed, np.where(known, errors[pick, at], 0.0), known


def _speeds_agree(seen: Sightings, one: IntArray, two: IntArray) -> BoolArray:
    gap = np.abs(seen.speed[one] - seen.speed[two])
    room = np.hypot(
        _SIGMAS * np.hypot(seen.speed_err[one], seen.speed_err[two]),
        _SPEED_SHARE * np.fmax(seen.speed[one], seen.speed[two]),
    )
    both = np.isfinite(gap) & np.isfinite(room)
    return ~both | (gap <= room)
