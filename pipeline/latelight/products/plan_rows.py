"""The rows of the tables of a plan, as frozen records.

As in :mod:`latelight.products.rows`: a value that is not known is None here and
masked in the table, never NaN; text is never missing.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["PlanCellRow", "PlanRingRow", "PlanRow"]


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanRow:
    """What one field would show of one source.

    Attributes
    ----------
    source, field : str
        Names.
    mjd : float
        Date of the plan, MJD (UTC).
    separation : float
        From the source to the field's centre, degrees.
    away_pa : float or None
        Position angle away from the source there, degrees.
    age, age_err : float or None
        Of the outburst at the date, Julian years, and 1 sigma.
    dust_depth, dust_depth_err : float or None
        At the centre, pc from the source, positive towards the observer.
    dust_depth_min, dust_depth_max : float or None
        Least and greatest in the field, pc.
    dust_distance, dust_distance_err : float or None
        From dust to source, pc.
    observer_distance, observer_distance_err : float or None
        From dust to observer, pc.
    scattering_angle, scattering_angle_err : float or None
        Degrees, 0 is forward.
    flat_speed, flat_speed_err : float or None
        Of a sheet across the line to the source, arcsec/yr.
    speed_slow, speed_fast : float or None
        16 % of tilted sheets move slower, 16 % faster, arcsec/yr.
    width, width_err : float or None
        FWHM of the profile along the motion, seeing included, arcsec.
    baseline, baseline_err : float or None
        Time in which it moves two of its widths, days.
    surface_brightness, surface_brightness_err : float or None
        Expected peak, mag/arcsec^2.
    remark : str
        Why something is missing, in words.
    """

    source: str
    field: str
    mjd: float
    separation: float
    away_pa: float | None
    age: float | None
    age_err: float | None
    dust_depth: float | None
    dust_depth_err: float | None
    dust_depth_min: float | None
    dust_depth_max: float | None
    dust_distance: float | None
    dust_distance_err: float | None
    observer_distance: float | None
    observer_distance_err: float | None
    scattering_angle: float | None
    scattering_angle_err: float | None
    flat_speed: float | None
    flat_speed_err: float | None
    speed_slow: float | None
    speed_fast: float | None
    width: float | None
    width_err: float | None
    baseline: float | None
    baseline_err: float | None
    surface_brightness: float | None
    surface_brightness_err: float | None
    remark: str


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanRingRow:
    """Where one layer echoes one source.

    Attributes
    ----------
    source, layer : str
        Names.
    mjd : float
        Date of the plan, MJD (UTC).
    dust_depth : float or None
        Of the layer on the line to the source, pc from the source.
    observer_distance : float or None
        The same from the observer, pc.
    thickness : float
        FWHM along the line of sight, pc.
    slope, slope_pa : float
        Tangent of its tilt, and position angle towards which it comes nearer, degrees.
    ra, dec : float or None
        Centre of the circle, degrees, ICRS.
    shift : float or None
        From the source to the centre, degrees.
    radius, radius_err : float or None
        Of the circle, and 1 sigma from age and distance, degrees.
    radius_inner, radius_outer : float or None
        Of the layer's far and near face, degrees.
    cells : int or None
        Cells of the layer that hold the share of the probability asked for.
    area : float or None
        Of those cells, square degrees.
    remark : str
        Why there is no circle, in words.
    """

    source: str
    layer: str
    mjd: float
    dust_depth: float | None
    observer_distance: float | None
    thickness: float
    slope: float
    slope_pa: float
    ra: float | None
    dec: float | None
    shift: float | None
    radius: float | None
    radius_err: float | None
    radius_inner: float | None
    radius_outer: float | None
    cells: int | None
    area: float | None
    remark: str


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanCellRow:
    """One cell of the sky in which a source's echo may show.

    Attributes
    ----------
    source : str
        Name.
    order, cell : int
        HEALPix order and nested number, ICRS.
    ra, dec : float
        Its middle, degrees.
    probability : float
        Share of the probability of all layers of the source.
    """

    source: str
    order: int
    cell: int
    ra: float
    dec: float
    probability: float
