"""Light echoes from physics: dust lit by an outburst, seen through a telescope.

Brightness at a place on the sky is the integral along the line of sight of dust
density times the outburst's light curve at ``age - delay``, the delay being that
of the exact ellipsoid.  How an echo moves, how wide it is and which edge is the
sharper one are not put in: they follow.

The dust column sets the brightness, so scattering efficiency and geometric
dilution, which hardly vary over one cloud, are part of the amplitude.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from scipy import ndimage, special
from scipy.interpolate import make_interp_spline

from latelight.echo.geometry import delay_yr
from latelight.records import FloatArray, Source
from latelight.simulation._kernels import light_sheet
from latelight.simulation.astrometry import (
    ARCSEC_PER_RADIAN,
    PlateCoordinates,
    sky_to_pixel,
)
from latelight.simulation.dust import DustSheet
from latelight.simulation.exposures import Exposure, Patch
from latelight.simulation.optics import MoffatField, convolve_sampled
from latelight.simulation.outburst import DAYS_PER_YEAR, LightCurve
from latelight.sky import pixel_scale_arcsec
from latelight.threads import over_rows

__all__ = ["Echo", "Viewpoint", "age_yr", "render_echo", "sheet_slopes"]

OVERSAMPLE = 2
NODES = 21
DEPTH_CELLS = 24
DEPTH_SIGMAS = 3.0
# Samples of the light curve; an echo moves less than 0.05 arcsec in the time.
LIGHT_CURVE_STEP_D = 0.5


@dataclass(frozen=True, slots=True)
class Echo:
    """A dust sheet and the outburst that lights it.

    Attributes
    ----------
    source : Source
        The outburst: place, distance and age all known.
    light_curve : LightCurve
        How its brightness went.
    sheet : DustSheet
        The dust.
    amplitude : float
        Surface brightness where the densest dust is lit by steady peak light,
        in units of magnitude 0 per square arcsec.
    """

    source: Source
    light_curve: LightCurve
    sheet: DustSheet
    amplitude: float

    def plate(self) -> PlateCoordinates:
        """Return sky offsets about the cloud's centre."""
        return PlateCoordinates(self.sheet.ra, self.sheet.dec)

    def delay(
        self, east: FloatArray, north: FloatArray, depth_sigmas: float = 0.0
    ) -> FloatArray:
        """Return the delay of light from the sheet at sky offsets, years.

        Parameters
        ----------
        east, north : float64 array
            Offsets from the cloud's centre, arcsec.
        depth_sigmas : float
            Distance from the mid-plane along the line of sight, in thicknesses.
        """
        depth = self.depth(east, north) + depth_sigmas * self.sheet.thickness_pc
        theta = self.plate().angle_from(self.source.ra, self.source.dec, east, north)
        return delay_yr(theta, depth, float(self.source.distance_pc or 0.0))

    def depth(self, east: FloatArray, north: FloatArray) -> FloatArray:
        """Return the depth of the sheet's middle at sky offsets, pc."""
        sheet, distance = self.sheet, float(self.source.distance_pc or 0.0)
        to_pc = (distance - sheet.depth_pc) / ARCSEC_PER_RADIAN
        plane = to_pc * (sheet.slope_east * east + sheet.slope_north * north)
        return sheet.depth_pc + plane + sheet.relief.at(east, north)


@dataclass(frozen=True, slots=True)
class Viewpoint:
    """What an echo is rendered onto: a pixel grid, a PSF, a flux scale, a time.

    Attributes
    ----------
    wcs : astropy.wcs.WCS
        True world coordinates of the grid.
    psf : MoffatField
        Point-spread function.
    psf_x, psf_y : float
        Where on the PSF's own frame, pixels.
    zero_point : float
        Magnitude of one count.
    mjd : float
        When.
    """

    wcs: Any
    psf: MoffatField
    psf_x: float
    psf_y: float
    zero_point: float
    mjd: float

    @classmethod
    def of(cls, echo: Echo, exposure: Exposure) -> Viewpoint:
        """Return an exposure's own view of an echo."""
        x, y = _cloud_centre(echo, exposure.wcs)
        return cls(
            wcs=exposure.wcs,
            psf=exposure.psf,
            psf_x=x,
            psf_y=y,
            zero_point=exposure.zero_point,
            mjd=exposure.mjd,
        )


def age_yr(source: Source, mjd: float) -> float:
    """Return the outburst's age at a time, Julian years."""
    if source.age_yr is None or source.age_at_mjd is None:
        msg = f"source {source.name} must have an age and the time it holds"
        raise ValueError(msg)
    return source.age_yr + (mjd - source.age_at_mjd) / DAYS_PER_YEAR


def sheet_slopes(
    source: Source, *, ra: float, dec: float, depth_pc: float, speed: float, pa: float
) -> tuple[float, float]:
    """Return the slopes a sheet needs for its echo to move in a given way.

    Parameters
    ----------
    source : Source
        The outburst.
    ra, dec, depth_pc : float
        Where the sheet is.
    speed : float
        Speed along the echo's normal, arcsec/yr.
    pa : float
        Position angle of the motion, degrees.

    Returns
    -------
    east, north : float
        Change of depth with distance across the sky, pc per pc.

    Notes
    -----
    The front is where the delay equals the age, so it moves along the delay's
    gradient ``g`` at ``1/|g|``; along the sheet ``g = d(delay)/d(sky) +
    d(delay)/d(depth) * slope``, which is solved for the slope.
    """
    distance = float(source.distance_pc or 0.0)
    plate = PlateCoordinates(ra, dec)
    step = 0.5
    e = np.array([step, -step, 0.0, 0.0])
    n = np.array([0.0, 0.0, step, -step])
    t = delay_yr(plate.angle_from(source.ra, source.dec, e, n), depth_pc, distance)
    flat = np.array([t[0] - t[1], t[2] - t[3]]) / (2.0 * step)
    zero = np.zeros(1)
    theta = plate.angle_from(source.ra, source.dec, zero, zero)
    z = depth_pc + np.array([1.0, -1.0]) * 1e-4 * distance
    t = delay_yr(theta, z, distance)
    per_pc = (t[0] - t[1]) / (z[0] - z[1])
    wanted = np.array([np.sin(np.radians(pa)), np.cos(np.radians(pa))]) / speed
    slope = (wanted - flat) / per_pc * ARCSEC_PER_RADIAN / (distance - depth_pc)
    return float(slope[0]), float(slope[1])


def render_echo(echo: Echo, view: Viewpoint) -> Patch:
    """Render one echo, without noise.

    Returns
    -------
    Patch
        Counts per pixel around the cloud.
    """
    x, y = _cloud_centre(echo, view.wcs)
    scale = pixel_scale_arcsec(view.wcs, x, y)
    half = int(np.ceil(1.5 * echo.sheet.texture.half_size_arcsec / scale))
    col, row = round(x) - half, round(y) - half
    samples = np.arange(OVERSAMPLE * 2 * half + 1) / OVERSAMPLE
    lit = _lit_dust(echo, view, samples + col, samples + row)
    blurred = convolve_sampled(
        lit, view.psf, x=view.psf_x, y=view.psf_y, oversample=OVERSAMPLE
    )
    counts = echo.amplitude * 10.0 ** (0.4 * view.zero_point) * scale**2
    pixels = counts * blurred[::OVERSAMPLE, ::OVERSAMPLE]
    return Patch(row=row, col=col, pixels=pixels.astype(np.float32))


def _lit_dust(echo: Echo, view: Viewpoint, x: FloatArray, y: FloatArray) -> FloatArray:
    """Return density times light at ``y, x`` sample positions, peak light = 1."""
    # All coordinates and delays are smooth: exact at nodes, splines between.
    node_x, node_y = np.linspace(x[0], x[-1], NODES), np.linspace(y[0], y[-1], NODES)
    grid_x, grid_y = np.meshgrid(node_x, node_y)
    ra, dec = view.wcs.all_pix2world(grid_x.ravel(), grid_y.ravel(), 0)
    east, north = echo.plate().from_sky(ra, dec)
    age = age_yr(echo.source, view.mjd)
    ends = (DEPTH_SIGMAS, 0.0, -DEPTH_SIGMAS)
    times = [age - echo.delay(east, north, depth_sigmas=s) for s in ends]
    cumulative = echo.light_curve.cumulative(LIGHT_CURVE_STEP_D)
    years = cumulative.size * LIGHT_CURVE_STEP_D / DAYS_PER_YEAR
    image = np.zeros((y.size, x.size))
    lit = _lit_part(np.reshape(times, (3, NODES, NODES)), years, y.size, x.size)
    by_row, by_col = _spline(y.size)[lit[0]], _spline(x.size)[lit[1]]

    def spread(values: FloatArray) -> FloatArray:
        return by_row @ values.reshape(grid_x.shape) @ by_col.T

    density = echo.sheet.texture.at(spread(east), spread(north))
    early, middle, late = (spread(values) for values in times)
    edges = np.linspace(-DEPTH_SIGMAS, DEPTH_SIGMAS, DEPTH_CELLS + 1)
    weights = np.diff(special.ndtr(edges))
    out = np.empty_like(density)

    def rows(first: int, last: int) -> None:
        light_sheet(
            out,
            density,
            early,
            middle,
            late,
            weights / weights.sum(),
            cumulative,
            LIGHT_CURVE_STEP_D / DAYS_PER_YEAR,
            first,
            last,
        )

    over_rows(rows, out.shape[0])
    image[lit] = out
    return image


def _lit_part(
    times: FloatArray, years: float, n_rows: int, n_cols: int
) -> tuple[slice, slice]:
    """Return the rows and columns that the light curve can reach.

    ``times`` holds the time since the light seen at the nodes left the outburst, at
    three depths, shape (3, NODES, NODES); it shines from 0 to ``years``.  A mesh
    counts when it or a neighbour has such times between its corners.
    """
    early = ndimage.maximum_filter(times.max(axis=0), 3, mode="nearest")
    late = ndimage.minimum_filter(times.min(axis=0), 3, mode="nearest")
    rows, cols = np.nonzero((early >= 0.0) & (late <= years))
    if rows.size == 0:
        return slice(0, 0), slice(0, 0)

    def part(nodes: np.ndarray, count: int) -> slice:
        step = (count - 1) / (NODES - 1)
        return slice(
            max(0, int((nodes.min() - 1) * step)),
            min(count, int(np.ceil((nodes.max() + 1) * step)) + 1),
        )

    return part(rows, n_rows), part(cols, n_cols)


@lru_cache(maxsize=64)
def _spline(count: int) -> FloatArray:
    """Return the weights of even nodes in a cubic spline at even points.

    Shape (count, NODES); nodes and points begin and end together.
    """
    nodes = np.linspace(0.0, 1.0, NODES)
    spline = make_interp_spline(nodes, np.eye(NODES), k=3)
    return np.asarray(spline(np.linspace(0.0, 1.0, count)))


def _cloud_centre(echo: Echo, wcs: Any) -> tuple[float, float]:
    x, y = sky_to_pixel(wcs, np.array([echo.sheet.ra]), np.array([echo.sheet.dec]))
    return float(x[0]), float(y[0])
