"""Past outbursts, and how well they explain an arc."""

from __future__ import annotations

from dataclasses import dataclass, field

__all__ = ["OriginScore", "Source"]


@dataclass(frozen=True, slots=True)
class Source:
    """A past outburst that may have lit an echo.

    Attributes
    ----------
    name : str
        Its name.
    ra, dec : float
        Degrees, ICRS.
    distance_pc, distance_err_pc : float or None
        Distance from the observer, pc; None when unknown.
    age_yr, age_err_yr : float or None
        Julian years since its light arrived, at ``age_at_mjd``.
    age_at_mjd : float or None
        MJD at which the age holds.
    peak_mag : float or None
        Apparent magnitude of the outburst at its peak.
    duration_days : float or None
        Width of its light curve: its fluence over its peak flux, days.
    """

    name: str
    ra: float
    dec: float
    distance_pc: float | None = None
    distance_err_pc: float | None = None
    age_yr: float | None = None
    age_err_yr: float | None = None
    age_at_mjd: float | None = None
    peak_mag: float | None = None
    duration_days: float | None = None


@dataclass(frozen=True, slots=True)
class OriginScore:
    """How well one source explains one moving arc.

    Attributes
    ----------
    source : str
        Name of the source.
    score : float
        log10 likelihood ratio against random directions.
    away_angle : float
        Motion minus the direction away from the source, degrees, +-180.
    separation_deg : float
        Angle between arc and source on the sky.
    dust_depth_pc, dust_depth_err_pc : float
        Depth of the dust for this source, pc, positive towards the observer;
        NaN when distance or age is unknown.
    """

    source: str
    score: float
    away_angle: float
    separation_deg: float
    dust_depth_pc: float = field(default=float("nan"))
    dust_depth_err_pc: float = field(default=float("nan"))
