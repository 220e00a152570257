"""The columns that say what an arc means if one source lit it.

Candidates and tracks carry :data:`MEANING_COLUMNS` for their best source;
the table of interpretations has a few more for every source.
"""

from __future__ import annotations

from latelight.products.column import Column, real

__all__ = [
    "AGE_COLUMNS",
    "DEPTH_COLUMNS",
    "FLAT_COLUMNS",
    "LIGHT_COLUMNS",
    "MEANING_CARDS",
    "MEANING_COLUMNS",
    "SLOPE_COLUMNS",
    "error_column",
]


def error_column(of: Column, ucd: str) -> Column:
    """Return the column of the 1-sigma error of another."""
    return Column(
        f"{of.name}_err",
        "real",
        of.unit,
        f"stat.error;{ucd}",
        f"1 sigma of {of.name}, all errors and their covariance included.",
        of.format,
    )


_DEPTH = real(
    "dust_depth",
    ".3f",
    "pc",
    "pos.cartesian.z;meta.modelled",
    "Depth of the dust along the line of sight, measured from the source, positive "
    "towards the observer, if the light comes from this source.",
)
_DISTANCE = real(
    "dust_distance",
    ".3f",
    "pc",
    "pos.distance;phys.dust",
    "Distance from dust to source.",
)
_SCATTERING = real(
    "scattering_angle",
    ".3f",
    "deg",
    "pos.phaseAng;phys.dust",
    "Angle by which the dust turns the light: 0 is forward, 180 straight back.",
)
_VIEWING_PA = real(
    "viewing_pa",
    ".2f",
    "deg",
    "pos.posAng;phys.dust",
    "Side from which the dust saw the outburst: position angle, east of north, on "
    "the sky at the source, of the direction from source to dust.",
)
_VIEWING_INCLINATION = real(
    "viewing_inclination",
    ".3f",
    "deg",
    "pos.spherical.colat;phys.dust",
    "Angle between the direction from source to dust and that from source to "
    "observer: 0 is the side that faces us, 180 the far side.",
)
_FLAT_SPEED = real(
    "flat_speed",
    ".4f",
    "arcsec/yr",
    "phys.veloc.ang;meta.modelled",
    "Apparent speed of a dust sheet across the line of sight at this place and age.",
)
_SLOPE = real(
    "sheet_slope",
    ".4f",
    "",
    "arith.grad;phys.dust",
    "Slope dz/drho of the dust sheet that gives the measured speed and direction; "
    "positive when it comes nearer to the observer away from the source.",
)
_AGE = real(
    "implied_age",
    ".3f",
    "yr",
    "time.age;meta.modelled",
    "Age of an outburst of unknown age if the sheet lies across the line of sight "
    "and in front of the source.",
)

DEPTH_COLUMNS = (_DEPTH, error_column(_DEPTH, "pos.cartesian.z"))
LIGHT_COLUMNS = (
    _DISTANCE,
    error_column(_DISTANCE, "pos.distance;phys.dust"),
    _SCATTERING,
    error_column(_SCATTERING, "pos.phaseAng;phys.dust"),
    _VIEWING_PA,
    _VIEWING_INCLINATION,
    error_column(_VIEWING_INCLINATION, "pos.spherical.colat;phys.dust"),
)
FLAT_COLUMNS = (_FLAT_SPEED, error_column(_FLAT_SPEED, "phys.veloc.ang"))
SLOPE_COLUMNS = (_SLOPE, error_column(_SLOPE, "phys.dust"))
AGE_COLUMNS = (_AGE, error_column(_AGE, "time.age"))
MEANING_COLUMNS = (*LIGHT_COLUMNS, *FLAT_COLUMNS, *SLOPE_COLUMNS, *AGE_COLUMNS)

# Header keyword and comment of each in the cutouts.
MEANING_CARDS = {
    "dust_distance": ("DUSTDIST", "dust to source"),
    "dust_distance_err": ("DUSTDERR", "1 sigma"),
    "scattering_angle": ("SCATANG", "0 is forward"),
    "scattering_angle_err": ("SCATAERR", "1 sigma"),
    "viewing_pa": ("VIEWPA", "source to dust, on the sky"),
    "viewing_inclination": ("VIEWINC", "source to dust, from line to us"),
    "viewing_inclination_err": ("VIEWIERR", "1 sigma"),
    "flat_speed": ("FLATSPD", "of a sheet across the view"),
    "flat_speed_err": ("FLATSERR", "1 sigma"),
    "sheet_slope": ("SLOPE", "of the sheet, dz/drho"),
    "sheet_slope_err": ("SLOPEERR", "1 sigma"),
    "implied_age": ("IMPAGE", "for a sheet across the view"),
    "implied_age_err": ("IMPAGERR", "1 sigma"),
}
