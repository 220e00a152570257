"""Draw outbursts and the echoes they light in a field."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.echo.geometry import delay_yr, depth_pc
from latelight.records import FloatArray, Source
from latelight.simulation.astrometry import PlateCoordinates
from latelight.simulation.dust import DustSheet, filamentary_texture, random_relief
from latelight.simulation.echoes import (
    Echo,
    Viewpoint,
    age_yr,
    sheet_slopes,
)
from latelight.simulation.exposures import Exposure
from latelight.simulation.measuring import ridge_size
from latelight.simulation.outburst import LIGHT_CURVES, LightCurve
from latelight.sky import offset_position, pixel_scale_arcsec, position_angle

__all__ = ["EchoPlan", "Outburst", "flat_speed", "place_echoes", "random_outburst"]

SPEEDS = (1.5, 30.0)
LENGTHS_ARCSEC = (18.0, 75.0)
STEEPEST_SLOPE = 2.5
# The fainter of two epochs over the brighter one.
LEAST_LOBE_RATIO = 0.3


@dataclass(frozen=True, slots=True)
class Outburst:
    """A source and its light curve."""

    source: Source
    light_curve: LightCurve


@dataclass(frozen=True, slots=True)
class EchoPlan:
    """What the echoes of a field should be like.

    Attributes
    ----------
    count : int
        How many.
    brightness : (float, float)
        Range of the peak surface brightness, mag/arcsec^2.
    lengths : (float, float)
        Range of the clouds' lengths along the front, arcsec.
    turn_deg : float
        1 sigma of the angle by which sheets turn the motion, degrees.
    shifts : (float, float)
        Range of the way from the first epoch to the last, arcsec.
    depth : (float, float)
        Range of the clouds' extent along the motion, in units of that way and the
        widths of the light at its ends.
    one_each : bool
        Whether every echo has an outburst of its own, in order.
    """

    count: int
    brightness: tuple[float, float] = (21.5, 24.5)
    lengths: tuple[float, float] = (30.0, 85.0)
    turn_deg: float = 6.0
    shifts: tuple[float, float] = (1.5, 15.0)
    depth: tuple[float, float] = (1.0, 1.6)
    one_each: bool = False


def random_outburst(
    rng: np.random.Generator,
    *,
    name: str,
    ra: float,
    dec: float,
    mjd: float,
    far: bool,
    clear_deg: float,
) -> Outburst:
    """Draw an outburst outside a field whose echoes there move at usual speeds.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    name : str
        What to call it.
    ra, dec : float
        Centre of the field, degrees.
    mjd : float
        When its age holds.
    far : bool
        At 42-58 kpc; otherwise at 2.5-10 kpc.
    clear_deg : float
        Least distance from the centre, so that it lies outside the field, degrees.
    """
    while True:
        distance = rng.uniform(42e3, 58e3) if far else 2.5e3 * 4.0 ** rng.random()
        age = 10.0 ** rng.uniform(2.0, 2.95)
        away = rng.uniform(0.25, 1.2) if far else rng.uniform(0.6, 4.0)
        away = max(away, clear_deg)
        place = offset_position(ra, dec, rng.uniform(0.0, 360.0), away)
        source = Source(
            name=name,
            ra=float(place[0]),
            dec=float(place[1]),
            distance_pc=float(distance),
            distance_err_pc=float(distance * rng.uniform(0.03, 0.1)),
            age_yr=float(age),
            age_err_yr=0.0,
            age_at_mjd=mjd,
        )
        if SPEEDS[0] * 1.1 < flat_speed(source, ra, dec, mjd) < SPEEDS[1] / 1.3:
            break
    light_curve = LightCurve(
        shape=LIGHT_CURVES[int(rng.integers(len(LIGHT_CURVES)))],
        duration_d=float(20.0 * 10.0 ** rng.random()),
        rise=float(rng.uniform(0.05, 0.3)),
    )
    return Outburst(source=source, light_curve=light_curve)


def flat_speed(source: Source, ra: float, dec: float, mjd: float) -> float:
    """Return the speed of an echo on a sheet across the line of sight, arcsec/yr."""
    distance, age = float(source.distance_pc or 0.0), age_yr(source, mjd)
    theta = PlateCoordinates(ra, dec).angle_from(
        source.ra, source.dec, np.zeros(2), np.zeros(2)
    )
    h = 1e-4 * theta
    z = depth_pc(theta, age, distance)
    rise = delay_yr(theta + h, z, distance) - delay_yr(theta - h, z, distance)
    return float((7200.0 * h / rise)[0])


def place_echoes(
    rng: np.random.Generator,
    outbursts: tuple[Outburst, ...],
    *,
    plan: EchoPlan,
    exposures: tuple[Exposure, ...],
) -> tuple[Echo, ...]:
    """Draw echoes well inside a frame that do not overlap.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    outbursts : tuple of Outburst
        What lights them: one, or two of which the first lights most; as many as
        echoes when each has its own.
    plan : EchoPlan
        Their number, brightness and length.
    exposures : tuple of Exposure
        The epochs at which they shine, in any order; the brightness asked for is
        that of the first one given.

    Raises
    ------
    ValueError
        If they do not fit into the frame.
    """
    echoes: list[Echo] = []
    boxes: list[_Footprint] = []
    for _ in range(400 * plan.count):
        if len(echoes) == plan.count:
            break
        outburst = _choose(rng, outbursts, None if not plan.one_each else len(echoes))
        drawn = _draw(rng, outburst, plan, exposures)
        if drawn is None or any(drawn.overlaps(box) for box in boxes):
            continue
        echo = _build(rng, outburst, drawn, plan, exposures)
        if echo is not None:
            echoes.append(echo)
            boxes.append(drawn)
    if len(echoes) < plan.count:
        msg = (
            f"count must fit into a frame of {exposures[0].camera.shape} pixels, got "
            f"{plan.count}; ask for fewer echoes or a larger frame"
        )
        raise ValueError(msg)
    return tuple(echoes)


def _choose(
    rng: np.random.Generator, outbursts: tuple[Outburst, ...], turn: int | None
) -> Outburst:
    """Return the outburst whose turn it is, or one of two at random."""
    if turn is not None:
        return outbursts[turn]
    first = len(outbursts) == 1 or rng.random() < 0.65
    return outbursts[0] if first else outbursts[1]


def _middle_and_years(exposures: tuple[Exposure, ...]) -> tuple[float, float]:
    """Return the middle (MJD) and the length (Julian years) of a span of epochs."""
    mjds = [exposure.mjd for exposure in exposures]
    return 0.5 * (min(mjds) + max(mjds)), (max(mjds) - min(mjds)) / 365.25


@dataclass(frozen=True, slots=True)
class _Footprint:
    """Where one echo will lie: place, motion and the room it takes."""

    x: float
    y: float
    ra: float
    dec: float
    pa: float
    speed: float
    length: float
    reach: float
    scale: float

    def overlaps(self, other: _Footprint) -> bool:
        """Say whether two echoes come within 8 arcsec of each other.

        Two rectangles are apart if they are along a side of one of them.
        """
        # East is left and north up, give or take the frame's rotation.
        offset = np.array([self.x - other.x, other.y - self.y]) * self.scale
        for angle in np.radians([self.pa, self.pa + 90.0, other.pa, other.pa + 90.0]):
            axis = np.array([np.sin(angle), np.cos(angle)])
            room = self._half_extent(axis) + other._half_extent(axis) + 8.0
            if abs(offset @ axis) > room:
                return False
        return True

    def _half_extent(self, axis: FloatArray) -> float:
        normal = np.array([np.sin(np.radians(self.pa)), np.cos(np.radians(self.pa))])
        across = abs(float(normal @ axis))
        along = abs(float(normal[1] * axis[0] - normal[0] * axis[1]))
        return 0.5 * (self.length * along + self.reach * across)


def _draw(
    rng: np.random.Generator,
    outburst: Outburst,
    plan: EchoPlan,
    exposures: tuple[Exposure, ...],
) -> _Footprint | None:
    """Draw place and motion; None when the shift would be out of range."""
    ny, nx = exposures[0].camera.shape
    margin = min(130.0, 0.2 * min(ny, nx))
    x, y = rng.uniform(margin, nx - margin), rng.uniform(margin, ny - margin)
    ra, dec = (float(v) for v in exposures[0].wcs.all_pix2world(x, y, 0))
    source = outburst.source
    middle, years = _middle_and_years(exposures)
    speed = flat_speed(source, ra, dec, middle) * 10.0 ** rng.uniform(-0.2, 0.2)
    turn = rng.normal(0.0, plan.turn_deg)
    length = rng.uniform(*plan.lengths)
    shift = speed * years
    inside = SPEEDS[0] < speed < SPEEDS[1]
    if not inside or not plan.shifts[0] < shift < plan.shifts[1]:
        return None
    # Away from the source at the echo: the way to it, turned round.
    away = float(position_angle(ra, dec, source.ra, source.dec)) + 180.0
    width = speed * outburst.light_curve.duration_d / 365.25
    return _Footprint(
        x=x,
        y=y,
        ra=ra,
        dec=dec,
        pa=(away + turn) % 360.0,
        speed=speed,
        length=length,
        reach=shift + 2.0 * width + 6.0,
        scale=exposures[0].camera.scale_arcsec,
    )


def _build(
    rng: np.random.Generator,
    outburst: Outburst,
    place: _Footprint,
    plan: EchoPlan,
    exposures: tuple[Exposure, ...],
) -> Echo | None:
    """Make the dust for one echo; None when it will not do."""
    source = outburst.source
    distance = float(source.distance_pc or 0.0)
    age = age_yr(source, _middle_and_years(exposures)[0])
    theta = PlateCoordinates(place.ra, place.dec).angle_from(
        source.ra, source.dec, np.zeros(1), np.zeros(1)
    )
    depth = float(depth_pc(theta, age, distance)[0])
    slopes = sheet_slopes(
        source,
        ra=place.ra,
        dec=place.dec,
        depth_pc=depth,
        speed=place.speed,
        pa=place.pa,
    )
    if np.hypot(*slopes) > STEEPEST_SLOPE:
        return None
    # A thickness that would blur a lasting flash to 0.3-2.5 arcsec, FWHM.
    blur = 0.3 * 10.0 ** rng.uniform(0.0, 0.92) / 2.355
    step = 1e-4 * distance
    delays = delay_yr(theta, np.array([depth - step, depth + step]), distance)
    pc_per_arcsec = 2.0 * step / abs(float(delays[1] - delays[0])) / place.speed
    sheet = DustSheet(
        ra=place.ra,
        dec=place.dec,
        depth_pc=depth,
        slope_east=slopes[0],
        slope_north=slopes[1],
        thickness_pc=blur * pc_per_arcsec,
        texture=filamentary_texture(
            rng,
            along_arcsec=place.length,
            across_arcsec=place.reach * float(rng.uniform(*plan.depth)),
            along_pa=place.pa + 90.0 + float(rng.normal(0.0, 8.0)),
        ),
        # Hills that push the front to and fro by 0.35 arcsec, 1 sigma.
        relief=random_relief(rng, height_pc=0.35 * pc_per_arcsec),
    )
    echo = Echo(source, outburst.light_curve, sheet, amplitude=1.0)
    return _brighten(echo, float(rng.uniform(*plan.brightness)), exposures)


def _brighten(
    echo: Echo, brightness: float, exposures: tuple[Exposure, ...]
) -> Echo | None:
    """Set the dust column so that the ridge peaks as asked at the first exposure.

    None when the ridge is too short or too long there, or when the patchy cloud
    makes it much fainter or brighter at another epoch.
    """
    first = exposures[0]
    view = Viewpoint.of(echo, first)
    now, length = ridge_size(echo, view)
    if not LENGTHS_ARCSEC[0] < length < LENGTHS_ARCSEC[1]:
        return None
    for other in exposures[1:]:
        then, _ = ridge_size(echo, replace(view, mjd=other.mjd))
        if not LEAST_LOBE_RATIO < then / now < 1.0 / LEAST_LOBE_RATIO:
            return None
    scale = pixel_scale_arcsec(first.wcs, view.psf_x, view.psf_y)
    wanted = 10.0 ** (0.4 * (first.zero_point - brightness)) * scale**2
    return replace(echo, amplitude=wanted / now)
