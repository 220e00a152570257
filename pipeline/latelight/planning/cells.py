"""Which cells of the sky show a layer's echo: HEALPix probabilities and MOC cells.

In every direction a layer echoes at one delay.  It shows there at the date when that
delay is the outburst's age; so the probability of a cell follows from how far its
delay lies from the age, with the errors of age and distance, the layer's thickness,
the outburst's duration and the size of the cell all turned into years.  That holds for
an age known to a third as well as for a good one.

Cells are HEALPix, nested, ICRS (Gorski et al. 2005, ApJ 622, 759); lists of cells of
several orders are those of the IVOA's MOC 2.0, with ``uniq = 4 * 4**order + cell``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from astropy import units
from astropy_healpix import HEALPix
from numpy.typing import NDArray

from latelight.echo.constants import DAYS_PER_YEAR
from latelight.echo.geometry import delay_yr
from latelight.planning.rings import Layer, Ring, layer_depth_pc, ring_of
from latelight.records import FloatArray
from latelight.sky import offset_position, position_angle, separation_deg
from latelight.widths import FWHM_PER_SIGMA

__all__ = [
    "CellArray",
    "Cells",
    "cell_corners",
    "cell_places",
    "cells_of",
    "joined",
    "likeliest",
    "uniq",
]

CellArray = NDArray[np.int64]

# Cells farther from the ring than this, in sigmas, count for nothing.
_FARTHEST = 5.0
# The coarse cells that are searched first are this much smaller than the ring.
_COARSE = 6.0
_MOST_CELLS = 3_000_000
_LARGEST_ANGLE = 89.0
# Side of a HEALPix cell of order 0, degrees: the root of a twelfth of the sky.
_SIDE_0 = float(np.degrees(np.sqrt(np.pi / 3.0)))


@dataclass(frozen=True, slots=True)
class Cells:
    """Cells of one order with what each is worth.

    Attributes
    ----------
    order : int
        HEALPix order: the sky has ``12 * 4**order`` cells.
    cell : int64 array, shape (n,)
        Nested numbers, rising.
    probability : float64 array, shape (n,)
        Share of the probability that the echo shows there; they add up to 1.
    """

    order: int
    cell: CellArray
    probability: FloatArray


def cells_of(
    layer: Layer,
    *,
    ra: float,
    dec: float,
    age_yr: float,
    distance_pc: float,
    order: int,
    age_err_yr: float = 0.0,
    distance_err_pc: float = 0.0,
    duration_days: float = 0.0,
) -> Cells:
    """Return the cells in which a layer echoes a source.

    Parameters
    ----------
    layer, ra, dec, age_yr, distance_pc, age_err_yr, distance_err_pc
        As for :func:`latelight.planning.rings.ring_of`.
    order : int
        HEALPix order, 0 to 29.
    duration_days : float
        FWHM of the outburst, days.

    Raises
    ------
    ValueError
        As :func:`latelight.planning.rings.ring_of`, or if there would be more than
        three million cells.
    """
    ring = ring_of(layer, ra=ra, dec=dec, age_yr=age_yr, distance_pc=distance_pc)
    delays = _Delays(layer, ra, dec, distance_pc, distance_err_pc)
    known = np.hypot(age_err_yr, duration_days / DAYS_PER_YEAR / FWHM_PER_SIGMA)
    wanted = _COARSE * _SIDE_0 / max(ring.radius_deg, 1e-6)
    level = int(np.clip(np.ceil(np.log2(wanted)), 0, order))
    cell = _near(ra, dec, delays.reach(ring, age_yr, known), level)
    while True:
        side = _SIDE_0 / 2.0**level
        years, slope, others = delays.at(*cell_places(cell, level), 0.25 * side)
        sigma = np.hypot(known, others)
        miss = np.abs(years - age_yr)
        if level == order:
            break
        # Nowhere in a cell is the delay farther off than its slope allows.
        cell = cell[miss <= _FARTHEST * sigma + 1.5 * slope * side]
        _refuse_too_many(4 * cell.size, layer, level + 1)
        cell = (4 * cell[:, None] + np.arange(4)).ravel()
        level += 1
    # An even spread over a cell has a variance of a twelfth of its width squared.
    sigma = np.hypot(sigma, slope * side / np.sqrt(12.0))
    weight: FloatArray = np.zeros(cell.size)
    near = (miss < _FARTHEST * sigma) & (sigma > 0.0)
    weight[near] = np.exp(-0.5 * (miss[near] / sigma[near]) ** 2) / sigma[near]
    kept = np.flatnonzero(weight)
    kept = kept[np.argsort(cell[kept])]
    return Cells(order, cell[kept], weight[kept] / weight[kept].sum())


def joined(parts: Sequence[Cells]) -> Cells:
    """Return the cells of several layers, each worth the same.

    Parameters
    ----------
    parts : sequence of Cells
        At least one, all of one order.
    """
    cell, place = np.unique(
        np.concatenate([part.cell for part in parts]), return_inverse=True
    )
    worth = np.concatenate([part.probability for part in parts]) / len(parts)
    total = np.bincount(place, weights=worth).astype(np.float64)
    return Cells(parts[0].order, cell, total)


def likeliest(cells: Cells, share: float) -> Cells:
    """Return the fewest cells that together hold a share of the probability.

    Parameters
    ----------
    cells : Cells
        Cells whose probabilities add up to 1; those of the result keep theirs.
    share : float
        0 < share < 1.
    """
    best = np.lexsort((cells.cell, -cells.probability))
    total = np.cumsum(cells.probability[best])
    kept = np.sort(best[: int(np.searchsorted(total, share)) + 1])
    return Cells(cells.order, cells.cell[kept], cells.probability[kept])


def uniq(cells: Cells) -> CellArray:
    """Return a list of cells as MOC numbers, rising, four sisters as their mother.

    Returns
    -------
    int64 array, shape (m,)
        ``4 * 4**order + cell``, each place of the sky once.
    """
    found = []
    cell, order = np.unique(cells.cell), cells.order
    while cell.size:
        mothers, count = np.unique(cell // 4, return_counts=True)
        whole = mothers[count == 4] if order > 0 else mothers[:0]
        alone = cell[~np.isin(cell // 4, whole)] if order > 0 else cell
        found.append(4 * 4**order + alone)
        cell, order = whole, order - 1
    return np.sort(np.concatenate(found)) if found else np.zeros(0, np.int64)


def cell_places(cell: CellArray, order: int) -> tuple[FloatArray, FloatArray]:
    """Return RA and Dec of the middles of cells, degrees."""
    lon, lat = _pixels(order).healpix_to_lonlat(cell)
    return lon.to_value(units.deg), lat.to_value(units.deg)


def cell_corners(cell: CellArray, order: int) -> tuple[FloatArray, FloatArray]:
    """Return RA and Dec of the corners of cells, degrees, shape (n, 4) each."""
    lon, lat = _pixels(order).boundaries_lonlat(cell, step=1)
    return lon.to_value(units.deg), lat.to_value(units.deg)


class _Delays:
    """The delay of a layer in any direction, and what makes it uncertain."""

    def __init__(
        self, layer: Layer, ra: float, dec: float, distance: float, distance_err: float
    ) -> None:
        self._layer, self._ra, self._dec = layer, ra, dec
        self._distance, self._distance_err = distance, distance_err

    def reach(self, ring: Ring, age_yr: float, known: float) -> float:
        """Return how far from the source the echo may show, degrees."""
        pa = np.arange(0.0, 360.0, 30.0)
        ra, dec = offset_position(ring.ra, ring.dec, pa, ring.radius_deg)
        _, _, others = self.at(ra, dec, 0.1 * ring.radius_deg + 1e-6)
        latest = age_yr + 1.5 * _FARTHEST * float(np.hypot(known, others).max())
        widest = ring_of(
            self._layer,
            ra=self._ra,
            dec=self._dec,
            age_yr=latest,
            distance_pc=self._distance,
        )
        return min(widest.shift_deg + widest.radius_deg, _LARGEST_ANGLE)

    def at(
        self, ra: FloatArray, dec: FloatArray, step: float
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return delays, their slopes over the sky, and 1 sigma but for the age.

        Parameters
        ----------
        ra, dec : float64 arrays, shape (n,)
            Directions, degrees.
        step : float
            Over which the slope is taken, degrees.

        Returns
        -------
        years, slope, sigma : float64 arrays, shape (n,)
            Years, infinite where the layer is not in view; years per degree; years.
        """
        years = self._years(ra, dec)
        # The layer goes out of view where the delay becomes infinite.
        with np.errstate(invalid="ignore"):
            rises = [
                self._years(*offset_position(ra, dec, pa, step)) - years
                for pa in (0.0, 90.0)
            ]
            nudge = 1e-3 * self._distance
            by_distance = self._years(ra, dec, distance=self._distance + nudge) - years
            by_depth = self._years(ra, dec, deeper=nudge) - years
        slope = np.hypot(*rises) / step
        sigma = np.hypot(
            by_distance / nudge * self._distance_err,
            by_depth / nudge * self._layer.thickness_pc / FWHM_PER_SIGMA,
        )
        return years, _finite(slope), _finite(sigma)

    def _years(
        self,
        ra: FloatArray,
        dec: FloatArray,
        *,
        distance: float | None = None,
        deeper: float = 0.0,
    ) -> FloatArray:
        """Return the delays in some directions; ``deeper`` pc away from us."""
        distance = self._distance if distance is None else distance
        layer = self._layer
        depth = layer_depth_pc(layer, distance) - deeper
        theta = separation_deg(self._ra, self._dec, ra, dec)
        turn = position_angle(self._ra, self._dec, ra, dec) - layer.slope_pa
        seen = theta < _LARGEST_ANGLE
        # Depth of the plane in a direction: z = z0 + s x with x = (D - z) u / s.
        u = np.zeros(theta.shape)
        u[seen] = layer.slope * np.tan(np.radians(theta[seen]))
        u *= np.cos(np.radians(turn))
        seen &= u > -1.0
        there = (depth + u[seen] * distance) / (1.0 + u[seen])
        years = np.full(theta.shape, np.inf)
        years[seen] = delay_yr(theta[seen], there, distance)
        return years


def _finite(values: FloatArray) -> FloatArray:
    return np.where(np.isfinite(values), values, 0.0)


def _near(ra: float, dec: float, reach: float, order: int) -> CellArray:
    """Return the cells that a circle touches."""
    pixels = _pixels(order)
    radius = reach + 1.5 * _SIDE_0 / 2.0**order
    if radius > 60.0 and order < 6:
        return np.arange(pixels.npix)
    found = pixels.cone_search_lonlat(
        ra * units.deg, dec * units.deg, radius * units.deg
    )
    return np.asarray(found)


def _pixels(order: int) -> HEALPix:
    return HEALPix(nside=2**order, order="nested")


def _refuse_too_many(number: int, layer: Layer, order: int) -> None:
    if number > _MOST_CELLS:
        msg = (
            f"layer {layer.name!r} would light {number} cells of order {order}, more "
            f"than {_MOST_CELLS}; lower the order"
        )
        raise ValueError(msg)
