"""What an arc means if one source lit it."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["Interpretation"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Interpretation:
    """What one moving arc means if one source lit it.

    Errors are 1 sigma and to first order, those of the source's age and distance
    and of the measured speed and direction taken through together.  What cannot be
    told is None, and ``remark`` says why.

    Attributes
    ----------
    source : str
        Name of the source.
    separation : float
        Angle between arc and source, degrees.
    away_angle : float or None
        Motion minus the direction away from the source, degrees, +-180.
    dust_depth, dust_depth_err : float or None
        From the source, pc, positive towards the observer.
    dust_distance, dust_distance_err : float or None
        From dust to source, pc.
    scattering_angle, scattering_angle_err : float or None
        By which the dust turns the light, degrees; 0 is forward.
    viewing_pa : float or None
        Position angle, on the sky at the source, of the direction from the source
        to the dust, degrees 0-360: the side from which the dust saw the outburst.
    viewing_inclination, viewing_inclination_err : float or None
        Angle between that direction and the line to the observer, degrees.
    flat_speed, flat_speed_err : float or None
        Speed of a sheet across the line of sight there, arcsec/yr.
    speed_ratio, speed_ratio_err : float or None
        Measured speed over ``flat_speed``.
    sheet_slope, sheet_slope_err : float or None
        Slope dz/drho of the sheet that gives the measured motion.
    sheet_slope_sideways, sheet_slope_sideways_err : float or None
        Its slope towards larger position angles.
    implied_age, implied_age_err : float or None
        Where the source's age is not known: age for a sheet across the line of
        sight, dust in front, Julian years.
    implied_age_behind, implied_age_behind_err : float or None
        The other root: dust behind the source.
    remark : str
        Why something is missing; empty when nothing is.
    """

    source: str
    separation: float
    away_angle: float | None = None
    dust_depth: float | None = None
    dust_depth_err: float | None = None
    dust_distance: float | None = None
    dust_distance_err: float | None = None
    scattering_angle: float | None = None
    scattering_angle_err: float | None = None
    viewing_pa: float | None = None
    viewing_inclination: float | None = None
    viewing_inclination_err: float | None = None
    flat_speed: float | None = None
    flat_speed_err: float | None = None
    speed_ratio: float | None = None
    speed_ratio_err: float | None = None
    sheet_slope: float | None = None
    sheet_slope_err: float | None = None
    sheet_slope_sideways: float | None = None
    sheet_slope_sideways_err: float | None = None
    implied_age: float | None = None
    implied_age_err: float | None = None
    implied_age_behind: float | None = None
    implied_age_behind_err: float | None = None
    remark: str = ""
