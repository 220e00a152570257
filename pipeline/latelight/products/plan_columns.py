"""The columns of the tables of a plan."""

from __future__ import annotations

from latelight.products.column import DEC, RA, Column, integer, real, text

__all__ = ["PLAN_CELL_COLUMNS", "PLAN_COLUMNS", "PLAN_RING_COLUMNS"]


def _pair(
    name: str, fmt: str, unit: str, ucd: str, description: str
) -> tuple[Column, Column]:
    """Return the column of a quantity and that of its error."""
    return (
        real(name, fmt, unit, ucd, description),
        real(
            f"{name}_err",
            fmt,
            unit,
            f"stat.error;{ucd.removesuffix(';meta.modelled')}",
            f"1 sigma of {name}, from the errors of age and distance.",
        ),
    )


_SOURCE = text("source", "meta.id.assoc", "Name of the listed outburst.")
_DATE = real("mjd", ".3f", "d", "time.epoch", "Date of the plan, MJD (UTC).")
_POSITIVE = "pc from the source along the line of sight, positive towards the observer"

PLAN_COLUMNS = (
    _SOURCE,
    text("field", "meta.id;meta.main", "Name of the field."),
    _DATE,
    real(
        "separation",
        ".5f",
        "deg",
        "pos.angDistance",
        "Angle between the source and the field's centre.",
    ),
    real(
        "away_pa",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle, east of north, away from the source at the field's centre: "
        "the way the echo of an untilted sheet moves.",
    ),
    real(
        "age",
        ".2f",
        "yr",
        "time.age",
        "Julian years since the outburst's light arrived, at the date of the plan.",
    ),
    real("age_err", ".2f", "yr", "stat.error;time.age", "1 sigma of age."),
    *_pair(
        "dust_depth",
        ".3f",
        "pc",
        "pos.cartesian.z;meta.modelled",
        f"Depth of the dust that echoes at the field's centre, {_POSITIVE}.",
    ),
    real(
        "dust_depth_min",
        ".3f",
        "pc",
        "pos.cartesian.z;stat.min",
        "Least dust_depth in the field.",
    ),
    real(
        "dust_depth_max",
        ".3f",
        "pc",
        "pos.cartesian.z;stat.max",
        "Greatest dust_depth in the field.",
    ),
    *_pair(
        "dust_distance",
        ".3f",
        "pc",
        "pos.distance;meta.modelled",
        "Distance from the dust to the source.",
    ),
    *_pair(
        "observer_distance",
        ".2f",
        "pc",
        "pos.distance;meta.modelled",
        "Distance from the dust to the observer.",
    ),
    *_pair(
        "scattering_angle",
        ".2f",
        "deg",
        "pos.posAng;meta.modelled",
        "Angle by which the dust turns the light; 0 is forward.",
    ),
    *_pair(
        "flat_speed",
        ".4f",
        "arcsec/yr",
        "phys.veloc.ang;meta.modelled",
        "Apparent speed, per Julian year, of the echo of a sheet across the line to "
        "the source.",
    ),
    real(
        "speed_slow",
        ".4f",
        "arcsec/yr",
        "phys.veloc.ang;stat.min",
        "Speed below which 16 % of tilted sheets move, for the typical slope of "
        "origin.tilt_scale.",
    ),
    real(
        "speed_fast",
        ".4f",
        "arcsec/yr",
        "phys.veloc.ang;stat.max",
        "Speed above which 16 % of tilted sheets move.",
    ),
    *_pair(
        "width",
        ".3f",
        "arcsec",
        "phys.angSize;stat.fwhm;meta.modelled",
        "FWHM of the echo's profile along its motion: outburst, dust and seeing.",
    ),
    *_pair(
        "baseline",
        ".2f",
        "d",
        "time.interval;meta.modelled",
        "Time in which the echo moves two of its widths, so that its lobes in a "
        "difference are apart.",
    ),
    *_pair(
        "surface_brightness",
        ".3f",
        "mag/arcsec2",
        "phot.mag.sb;em.opt;meta.modelled",
        "Expected peak for the dust column of plan.dust_av; none without a peak "
        "magnitude of the outburst.",
    ),
    text("remark", "meta.note", "Why something is missing."),
)

PLAN_RING_COLUMNS = (
    _SOURCE,
    text("layer", "meta.id;meta.main", "Name of the layer of dust."),
    _DATE,
    real(
        "dust_depth",
        ".3f",
        "pc",
        "pos.cartesian.z",
        f"Depth of the layer on the line to the source, {_POSITIVE}.",
    ),
    real(
        "observer_distance",
        ".3f",
        "pc",
        "pos.distance",
        "Distance of the same place from the observer.",
    ),
    real(
        "thickness",
        ".4f",
        "pc",
        "phys.size;stat.fwhm",
        "FWHM of the layer along the line of sight.",
    ),
    real(
        "slope",
        ".4f",
        "",
        "arith.grad;phys.dust",
        "Tangent of the layer's tilt against the plane across the line to the source.",
    ),
    real(
        "slope_pa",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle towards which the layer comes nearer to the observer.",
    ),
    real("ra", ".6f", "deg", "pos.eq.ra;meta.main", f"{RA}, of the circle's centre."),
    real(
        "dec", ".6f", "deg", "pos.eq.dec;meta.main", f"{DEC}, of the circle's centre."
    ),
    real(
        "shift",
        ".6f",
        "deg",
        "pos.angDistance",
        "Angle between the source and the circle's centre, towards slope_pa.",
    ),
    *_pair(
        "radius",
        ".6f",
        "deg",
        "phys.angSize;meta.modelled",
        "Radius of the circle on the sky on which the layer echoes the source.",
    ),
    real(
        "radius_inner",
        ".6f",
        "deg",
        "phys.angSize;stat.min",
        "Radius for the layer's far face; 0 when its light is still on its way.",
    ),
    real(
        "radius_outer",
        ".6f",
        "deg",
        "phys.angSize;stat.max",
        "Radius for the layer's near face.",
    ),
    integer(
        "cells",
        "meta.number",
        "HEALPix cells that hold the share plan.moc_probability of the probability.",
    ),
    real("area", ".4f", "deg2", "phys.angArea", "Area of those cells."),
    text("remark", "meta.note", "Why there is no circle."),
)

PLAN_CELL_COLUMNS = (
    _SOURCE,
    integer("order", "meta.number;pos.healpix", "HEALPix order of the cell."),
    integer("cell", "pos.healpix", "Nested number of the cell, ICRS."),
    real("ra", ".6f", "deg", "pos.eq.ra;meta.main", f"{RA}, of the cell's middle."),
    real("dec", ".6f", "deg", "pos.eq.dec;meta.main", f"{DEC}, of the cell's middle."),
    real(
        "probability",
        ".6g",
        "",
        "stat.probability",
        "Share of the probability that the echo shows in this cell, all layers of the "
        "source together worth 1.",
    ),
)
