"""What one field would show of one source, as a row."""

from __future__ import annotations

from latelight.config import NightConfig
from latelight.echo.geometry import depth_pc
from latelight.origin.sources import age_yr
from latelight.planning.extent import PlannedField, angles_from
from latelight.planning.outlook import Dust, Outlook, outlook
from latelight.products.plan_rows import PlanRow
from latelight.records import Source
from latelight.sky import position_angle, separation_deg

__all__ = ["field_row"]

# Closer than this a field's centre is the source itself, degrees; and the greatest
# angle at which dust can still be in front of the observer.
_ON_SOURCE, _QUARTER = 1e-9, 90.0


def field_row(
    source: Source, field: PlannedField, *, mjd: float, config: NightConfig
) -> PlanRow:
    """Return what a field would show of a source's echo.

    Parameters
    ----------
    source : Source
        The outburst; where its distance or age is unknown the row has the angles
        alone, and says why.
    field : PlannedField
        The field.
    mjd : float
        Date of the plan, MJD.
    config : NightConfig
        Tables ``[plan]`` and ``[origin]`` (for the typical tilt).
    """
    angle = float(separation_deg(source.ra, source.dec, field.ra, field.dec))
    age = age_yr(source, mjd)
    remark = _obstacle(source, angle, age)
    there: Outlook | None = None
    nearest, farthest = None, None
    if not remark and source.distance_pc is not None and age is not None:
        there = _outlook(source, angle, age, config)
        least, most = angles_from(field, source.ra, source.dec)
        nearest = float(depth_pc(least, age, source.distance_pc))
        if most < _QUARTER:
            farthest = float(depth_pc(most, age, source.distance_pc))
        if there.brightness is None:
            remark = "no peak magnitude: give the source's peak_mag or plan.peak_mag"
    return PlanRow(
        source=source.name,
        field=field.name,
        mjd=mjd,
        separation=angle,
        away_pa=None if angle < _ON_SOURCE else _away(source, field),
        age=age,
        age_err=None if age is None else source.age_err_yr,
        dust_depth_min=nearest,
        dust_depth_max=farthest,
        **_columns(there),
        remark=remark,
    )


def _obstacle(source: Source, angle: float, age: float | None) -> str:
    """Return why nothing can be said, or nothing."""
    if source.distance_pc is None or age is None:
        missing = [
            word
            for word, value in (("distance", source.distance_pc), ("age", age))
            if value is None
        ]
        return f"{' and '.join(missing)} of the source unknown"
    if age <= 0.0:
        return f"the outburst's light arrives {-age:.4g} years after the date"
    if angle >= _QUARTER:
        return "more than a quarter circle from the source"
    if angle < _ON_SOURCE:
        return "the field's centre is the source: no echo moves there"
    return ""


def _outlook(source: Source, angle: float, age: float, config: NightConfig) -> Outlook:
    plan = config.plan
    assert source.distance_pc is not None  # looked at by the caller
    return outlook(
        angle,
        age,
        source.distance_pc,
        dust=Dust(
            visual_extinction=plan.dust_av,
            thickness_pc=plan.thickness_pc,
            wavelength_um=plan.wavelength_um,
            seeing_arcsec=plan.seeing_arcsec,
            tilt_scale=config.origin.tilt_scale,
        ),
        duration_days=source.duration_days or plan.duration_days,
        age_err_yr=source.age_err_yr or 0.0,
        distance_err_pc=source.distance_err_pc or 0.0,
        peak_mag=plan.peak_mag if source.peak_mag is None else source.peak_mag,
    )


def _away(source: Source, field: PlannedField) -> float:
    """Return the position angle away from the source at the field."""
    back = position_angle(field.ra, field.dec, source.ra, source.dec)
    return float((back + 180.0) % 360.0)


def _columns(there: Outlook | None) -> dict[str, float | None]:
    """Return the columns of an outlook, with None where there is none."""
    names = {
        "dust_depth": "depth",
        "dust_distance": "source_distance",
        "observer_distance": "observer_distance",
        "scattering_angle": "scattering_angle",
        "flat_speed": "speed",
        "width": "width",
        "baseline": "baseline",
        "surface_brightness": "brightness",
    }
    found: dict[str, float | None] = {}
    for column, attribute in names.items():
        valued = None if there is None else getattr(there, attribute)
        found[column] = None if valued is None else valued.value
        found[f"{column}_err"] = None if valued is None else valued.err
    found["speed_slow"] = None if there is None else there.slow
    found["speed_fast"] = None if there is None else there.fast
    return found
