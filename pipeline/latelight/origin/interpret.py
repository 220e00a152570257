"""What one arc means if one source lit it: the numbers an observer would derive.

Place, age and distance give where the dust lies, how it turned the light and from
which side it saw the outburst; speed and direction give the tilt of its sheet.  The
physics is that of :mod:`latelight.echo`, exact; errors are to first order, those of
age, distance, speed and direction taken through one Jacobian.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from latelight.echo.geometry import (
    depth_pc,
    light_speed_arcsec_yr,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.inversion import (
    age_and_depth,
    age_and_depth_covariance,
    sheet_slope,
)
from latelight.echo.propagation import independent, propagate
from latelight.echo.viewing import viewing_direction
from latelight.origin.sources import age_yr
from latelight.records import FloatArray, Interpretation, Source
from latelight.sky import position_angle, separation_deg, wrap_180

__all__ = ["interpret"]

# An arc nearer than this lies on the source: no direction leads away from it.
_ON_SOURCE_ARCSEC = 0.01


@dataclass(frozen=True, slots=True)
class _Seen:
    """What is known of an arc and its source; None where it is not.

    Degrees, Julian years, pc and arcsec/yr.
    """

    theta: float
    viewing_pa: float
    turn: float | None
    turn_err: float | None
    speed: float | None
    speed_err: float | None
    age: float | None
    age_err: float
    distance: float | None
    distance_err: float


def interpret(
    source: Source,
    *,
    ra: float,
    dec: float,
    normal_pa: float | None,
    normal_pa_err: float | None,
    speed_arcsec_yr: float | None,
    speed_err_arcsec_yr: float | None,
    mjd: float,
) -> Interpretation:
    """Return what an arc means if a source lit it.

    Parameters
    ----------
    source : Source
        The outburst; errors it does not give are taken as zero.
    ra, dec : float
        The arc, degrees, ICRS.
    normal_pa, normal_pa_err : float or None
        Position angle of its motion, along its normal, and 1 sigma, degrees; None
        or NaN when unknown.
    speed_arcsec_yr, speed_err_arcsec_yr : float or None
        Speed along it and 1 sigma, arcsec per Julian year; None or NaN when unknown.
    mjd : float
        Epoch of the arc's place, MJD.

    Returns
    -------
    Interpretation
        With None, and the reason in its remark, for all that cannot be told: the
        speed is not measured, distance or age is not given, the arc lies on the
        source or 90 degrees and more from it, the outburst is not seen yet, or no
        sheet across the view moves so.

    Raises
    ------
    ValueError
        If ra, dec or mjd is not finite.
    """
    for name, value in (("ra", ra), ("dec", dec), ("mjd", mjd)):
        if not math.isfinite(value):
            msg = f"{name} must be finite, got {value!r}; leave out arcs without it"
            raise ValueError(msg)
    theta = float(separation_deg(source.ra, source.dec, ra, dec))
    if theta * 3600.0 < _ON_SOURCE_ARCSEC:
        remark = "the arc lies on the source: no direction leads away from it"
        return Interpretation(source=source.name, separation=theta, remark=remark)
    pa = _known(normal_pa)
    away_pa = float(position_angle(ra, dec, source.ra, source.dec)) + 180.0
    seen = _Seen(
        theta=theta,
        viewing_pa=float(position_angle(source.ra, source.dec, ra, dec)),
        turn=None if pa is None else float(wrap_180(pa - away_pa)),
        turn_err=_known(normal_pa_err),
        speed=_known(speed_arcsec_yr),
        speed_err=_known(speed_err_arcsec_yr),
        age=age_yr(source, mjd),
        age_err=source.age_err_yr or 0.0,
        distance=source.distance_pc,
        distance_err=source.distance_err_pc or 0.0,
    )
    fields, remarks = _read_off(seen)
    remarks += _taken_as_exact(source) if fields else []
    return Interpretation(
        source=source.name,
        separation=theta,
        away_angle=seen.turn,
        remark="; ".join(remarks),
        **fields,
    )


def _read_off(seen: _Seen) -> tuple[dict[str, float | None], list[str]]:
    """Return the fields that can be told, and why others cannot."""
    if seen.theta >= 90.0:
        far = f"the source is {seen.theta:.1f} deg away: at 90 and more the dust would"
        return {}, [f"{far} lie behind the observer"]
    remarks = []
    if seen.turn is None:
        remarks.append("direction of motion not measured")
    if seen.speed is None or seen.speed <= 0.0:
        remarks.append("speed not measured")
    if seen.distance is None:
        return {}, ["distance of the source not given", *remarks]
    if seen.age is None:
        fields, more = _implied_ages(seen, seen.distance)
        return fields, ["age of the source not given", *remarks, *more]
    if seen.age <= 0.0:
        early = f"{-seen.age:.3g} yr before the outburst's light arrived"
        return {}, [f"the arc was seen {early}"]
    fields, more = _dust(seen, seen.age, seen.distance)
    if not remarks:
        of_sheet, why = _sheet(seen, seen.age, seen.distance)
        fields |= of_sheet
        more += why
    return fields, remarks + more


def _dust(
    seen: _Seen, age: float, distance: float
) -> tuple[dict[str, float | None], list[str]]:
    """Return where the dust lies, how it saw the outburst, and a flat sheet's speed."""

    def of(values: FloatArray) -> tuple[FloatArray, ...]:
        t, d = values
        view = viewing_direction(seen.theta, seen.viewing_pa, t, d)
        return (
            depth_pc(seen.theta, t, d),
            source_distance_pc(seen.theta, t, d),
            scattering_angle_deg(seen.theta, t, d),
            view.inclination_deg,
            speed_arcsec_yr(seen.theta, t, d),
        )

    names = (
        "dust_depth",
        "dust_distance",
        "scattering_angle",
        "viewing_inclination",
        "flat_speed",
    )
    fields, remarks = _with_errors(
        names, of, (age, distance), (seen.age_err, seen.distance_err)
    )
    return fields | {"viewing_pa": seen.viewing_pa}, remarks


def _sheet(
    seen: _Seen, age: float, distance: float
) -> tuple[dict[str, float | None], list[str]]:
    """Return the tilt of the sheet that gives the measured motion."""

    def of(values: FloatArray) -> tuple[FloatArray, ...]:
        t, d, speed, turn = values
        slopes = sheet_slope(seen.theta, t, d, speed_arcsec_yr=speed, turn_deg=turn)
        return speed / speed_arcsec_yr(seen.theta, t, d), *slopes

    names = ("speed_ratio", "sheet_slope", "sheet_slope_sideways")
    # A missing error is put in as zero and its results' errors taken away again.
    fields, remarks = _with_errors(
        names,
        of,
        (age, distance, seen.speed or 0.0, seen.turn or 0.0),
        (
            seen.age_err,
            seen.distance_err,
            seen.speed_err or 0.0,
            seen.turn_err or 0.0,
        ),
    )
    if seen.speed_err is None:
        remarks.append("error of the speed not known")
        fields |= dict.fromkeys((f"{name}_err" for name in names), None)
    if seen.turn_err is None:
        remarks.append("error of the direction not known")
        fields |= {"sheet_slope_err": None, "sheet_slope_sideways_err": None}
    return fields, remarks


def _implied_ages(
    seen: _Seen, distance: float
) -> tuple[dict[str, float | None], list[str]]:
    """Return the two ages at which a sheet across the line of sight moves so."""
    if seen.speed is None or seen.speed <= 0.0:
        return {}, []
    if seen.turn is not None and abs(seen.turn) > 90.0:
        inward = "the arc moves towards the source, a sheet across the view never does"
        return {}, [f"{inward}: no implied age"]
    try:
        ages = age_and_depth(seen.theta, seen.speed, distance)
    except ValueError:
        share = seen.speed / float(light_speed_arcsec_yr(distance))
        slow = f"the arc moves at {share:.3g} of the speed of light"
        return {}, [f"{slow}, a sheet across the view never so slowly: no implied age"]
    covariance = age_and_depth_covariance(
        seen.theta,
        seen.speed,
        distance,
        independent(0.0, seen.speed_err or 0.0, seen.distance_err, 0.0),
    )
    fields: dict[str, float | None] = {}
    remarks = []
    for name, age, cov in zip(
        ("implied_age", "implied_age_behind"), ages, covariance, strict=True
    ):
        if not age.possible:
            remarks.append("no dust behind the source moves so")
            continue
        err = None if seen.speed_err is None else _known(math.sqrt(cov[0, 0]))
        fields |= {name: float(age.age_yr), f"{name}_err": err}
    if seen.speed_err is None:
        remarks.append("error of the speed not known")
    elif fields["implied_age_err"] is None:
        remarks.append("both implied ages meet: their errors have no bound")
    return fields, remarks


def _with_errors(
    names: tuple[str, ...],
    function: Callable[[FloatArray], Any],
    values: tuple[float, ...],
    errors: tuple[float, ...],
) -> tuple[dict[str, float | None], list[str]]:
    """Return results under their names, with their errors where these can be told."""
    try:
        found, covariance = propagate(function, values, independent(*errors))
    except ValueError:
        # A hundredth of an error bar leads to a negative age or distance.
        found = np.array(function(np.array(values)), dtype=float)
        fields = dict(zip(names, map(_known, found), strict=True))
        return fields, ["errors of age and distance too large to take through"]
    fields = dict(zip(names, map(_known, found), strict=True))
    for name, variance in zip(names, np.diag(covariance), strict=True):
        fields[f"{name}_err"] = _known(math.sqrt(max(variance, 0.0)))
    return fields, []


def _taken_as_exact(source: Source) -> list[str]:
    """Return what the source gives without an error."""
    exact = []
    if source.distance_pc is not None and source.distance_err_pc is None:
        exact.append("distance")
    if source.age_yr is not None and source.age_err_yr is None:
        exact.append("age")
    if not exact:
        return []
    return [f"{' and '.join(exact)} of the source taken as exact: no error given"]


def _known(value: float | None) -> float | None:
    """Return a number; None for one that is missing or not finite."""
    return None if value is None or not math.isfinite(value) else float(value)
