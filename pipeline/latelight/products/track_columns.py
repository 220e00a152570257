"""The columns of the tables of tracks, of their points and of interpretations."""

from __future__ import annotations

from latelight.products.column import DEC, RA, Column, integer, real, text
from latelight.products.meaning_columns import (
    AGE_COLUMNS,
    DEPTH_COLUMNS,
    FLAT_COLUMNS,
    LIGHT_COLUMNS,
    MEANING_COLUMNS,
    SLOPE_COLUMNS,
    error_column,
)

__all__ = ["INTERPRETATION_COLUMNS", "TRACK_COLUMNS", "TRACK_POINT_COLUMNS"]

_SPEED = "arcsec/yr"
_CHANGE = "arcsec/yr2"
_CHANGE_UCD = "arith.rate;phys.veloc.ang"
_BRIGHTNESS = real(
    "surface_brightness",
    ".3f",
    "mag/arcsec2",
    "phot.mag.sb;em.opt",
    "Peak surface brightness along the normal; none without a zero point.",
)
_BRIGHTNESS_ERR = real(
    "surface_brightness_err",
    ".3f",
    "mag/arcsec2",
    "stat.error;phot.mag.sb;em.opt",
    "1 sigma of surface_brightness, zero point taken as exact.",
)
_AWAY = real(
    "away_angle",
    ".2f",
    "deg",
    "pos.posAng;arith.diff",
    "normal_pa minus the direction away from the source, -180 to 180.",
)
_SCORE = real(
    "score",
    ".3f",
    "",
    "stat.likelihood;arith.ratio",
    "log10 of the likelihood of the motion for this source over that for random "
    "motion.",
)


def _covariance(name: str, unit: str, of: str) -> Column:
    ucd = "stat.covariance;pos.angDistance"
    if not name.startswith("place"):
        ucd = "stat.covariance;phys.veloc.ang"
    return real(name, ".6g", unit, ucd, f"Covariance of the fitted {of}.")


_FRAMES = (
    text("field", "meta.id;obs.field", "Field word of the frames."),
    text("filter", "meta.id;instr.filter", "Filter word of the frames."),
    text("grid", "meta.id;obs.image", "Name of the frame whose pixels x and y count."),
    real(
        "mjd",
        ".6f",
        "d",
        "time.epoch",
        "Epoch at which place and speed hold, MJD (UTC).",
    ),
    real(
        "mjd_first",
        ".6f",
        "d",
        "time.start;obs",
        "First epoch of the series, MJD (UTC).",
    ),
    real(
        "mjd_last", ".6f", "d", "time.end;obs", "Last epoch of the series, MJD (UTC)."
    ),
    integer("n_epochs", "meta.number;obs.image", "Epochs that could be used."),
)

_SHAPE = (
    real(
        "ra",
        ".7f",
        "deg",
        "pos.eq.ra;meta.main",
        f"{RA}, of the middle of the ridge at mjd.",
    ),
    real(
        "dec",
        ".7f",
        "deg",
        "pos.eq.dec;meta.main",
        f"{DEC}, of the middle of the ridge at mjd.",
    ),
    real(
        "place_err",
        ".4f",
        "arcsec",
        "stat.error;pos.angDistance",
        "1 sigma of the place along the motion at mjd.",
    ),
    real(
        "snr",
        ".2f",
        "",
        "stat.snr",
        "Significance of the whole track, all epochs together, calibrated.",
    ),
    real("length", ".2f", "arcsec", "phys.angSize", "Length along the ridge."),
    real(
        "width",
        ".3f",
        "arcsec",
        "phys.angSize;stat.fwhm",
        "FWHM across the ridge with the PSF taken out; 0 when no wider than the PSF.",
    ),
    real(
        "width_err",
        ".3f",
        "arcsec",
        "stat.error;phys.angSize;stat.fwhm",
        "1 sigma of width.",
    ),
    real(
        "surface_brightness",
        ".3f",
        "mag/arcsec2",
        "phot.mag.sb;em.opt",
        "Peak surface brightness at the last epoch that shows the arc; none without "
        "a zero point.",
    ),
    _BRIGHTNESS_ERR,
)

_MOTION = (
    real(
        "normal_pa",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle, east of north, in which the arc moves; along its normal.",
    ),
    real(
        "normal_pa_err", ".2f", "deg", "stat.error;pos.posAng", "1 sigma of normal_pa."
    ),
    real(
        "speed",
        ".4f",
        _SPEED,
        "phys.veloc.ang",
        "Apparent speed along normal_pa at mjd per Julian year: only the component "
        "along the normal can be observed.",
    ),
    real("speed_err", ".4f", _SPEED, "stat.error;phys.veloc.ang", "1 sigma of speed."),
    real(
        "speed_change",
        ".5f",
        _CHANGE,
        _CHANGE_UCD,
        "Change of the speed per Julian year; none when it is not fitted.",
    ),
    real(
        "speed_change_err",
        ".5f",
        _CHANGE,
        "stat.error;phys.veloc.ang",
        "1 sigma of speed_change.",
    ),
    _covariance("place_speed_cov", "arcsec2/yr", "place and speed"),
    _covariance("place_change_cov", "arcsec2/yr2", "place and change of speed"),
    _covariance("speed_change_cov", "arcsec2/yr3", "speed and change of speed"),
)

_ORIGIN = (
    text(
        "source",
        "meta.id.assoc",
        "Listed outburst that explains the motion best; empty when none does.",
    ),
    _AWAY,
    _SCORE,
    *DEPTH_COLUMNS,
)

_PIXELS = (
    text(
        "found_in",
        "meta.code",
        "Where it was found: 'pairs', 'stack' (only in the sum of the epochs) or "
        "'both'.",
    ),
    text(
        "candidates",
        "meta.id.assoc",
        "Ids of the candidates that lie on it, separated by blanks; may be empty.",
    ),
    text(
        "verdict",
        "meta.code.class",
        "'track' when worth a look, else the reason why it was set aside.",
    ),
    real(
        "x",
        ".3f",
        "pix",
        "pos.cartesian.x;instr.pixel",
        "Column of the middle of the ridge at mjd, first pixel 0.",
    ),
    real(
        "y",
        ".3f",
        "pix",
        "pos.cartesian.y;instr.pixel",
        "Row of the middle of the ridge at mjd, first pixel 0.",
    ),
    real(
        "normal_angle",
        ".2f",
        "deg",
        "pos.posAng;instr.pixel",
        "Direction of the motion on the frame, from +x towards +y, 0-360.",
    ),
    real(
        "normal_angle_err",
        ".2f",
        "deg",
        "stat.error;pos.posAng;instr.pixel",
        "1 sigma of normal_angle.",
    ),
    real(
        "length_px", ".2f", "pix", "phys.angSize;instr.pixel", "Length along the ridge."
    ),
    real(
        "width_px",
        ".3f",
        "pix",
        "phys.angSize;stat.fwhm;instr.pixel",
        "FWHM across the ridge with the PSF taken out.",
    ),
    real(
        "sense_odds",
        ".2f",
        "",
        "stat.probability;arith.ratio",
        "log10 of the odds that the sense of motion is right.",
    ),
    real("chi2", ".3f", "", "stat.fit.chi2", "Reduced chi-square of the joint fit."),
    real("seeing", ".3f", "arcsec", "instr.obsty.seeing", "Median FWHM of the epochs."),
    real(
        "speed_px",
        ".4f",
        "pix/yr",
        "phys.veloc.ang;instr.pixel",
        "Apparent speed along normal_angle at mjd per Julian year.",
    ),
    real(
        "speed_err_px",
        ".4f",
        "pix/yr",
        "stat.error;phys.veloc.ang;instr.pixel",
        "1 sigma of speed_px.",
    ),
    real(
        "source_separation",
        ".5f",
        "deg",
        "pos.angDistance",
        "Angle on the sky between the track and its source.",
    ),
)

TRACK_COLUMNS = (
    text(
        "id",
        "meta.id;meta.main",
        "Designation from the position, J2000, truncated and not rounded.",
    ),
    *_FRAMES,
    *_SHAPE,
    *_MOTION,
    *_ORIGIN,
    *_PIXELS,
    *MEANING_COLUMNS,
)

TRACK_POINT_COLUMNS = (
    text("track", "meta.id.parent", "Id of the track."),
    text("frame", "meta.id;obs.image", "Name of the frame."),
    real("mjd", ".6f", "d", "time.epoch;obs.image", "Middle of the exposure, MJD."),
    real(
        "offset",
        ".4f",
        "arcsec",
        "pos.angDistance",
        "Moved along the motion since the track's mjd, by this epoch alone; none "
        "where the arc is too faint.",
    ),
    real(
        "offset_err",
        ".4f",
        "arcsec",
        "stat.error;pos.angDistance",
        "1 sigma of offset.",
    ),
    _BRIGHTNESS,
    _BRIGHTNESS_ERR,
    real(
        "height_counts",
        ".6g",
        "ct/pix",
        "phot.count;instr.pixel",
        "Peak along the normal, mean along the arc, in counts of the grid's frame.",
    ),
    real(
        "height_err_counts",
        ".6g",
        "ct/pix",
        "stat.error;phot.count;instr.pixel",
        "1 sigma of height_counts.",
    ),
)

_RATIO = real(
    "speed_ratio",
    ".4f",
    "",
    "phys.veloc.ang;arith.ratio",
    "Measured speed over flat_speed.",
)
_SIDEWAYS = real(
    "sheet_slope_sideways",
    ".4f",
    "",
    "arith.grad;phys.dust",
    "Slope of the sheet across sheet_slope's direction, from the turn of the motion; "
    "positive when it comes nearer to the observer towards larger position angles.",
)
_BEHIND = real(
    "implied_age_behind",
    ".3f",
    "yr",
    "time.age;meta.modelled",
    "As implied_age, for dust behind the source.",
)

INTERPRETATION_COLUMNS = (
    text("id", "meta.id", "Id of the candidate or track."),
    text("kind", "meta.code.class", "'candidate' or 'track'."),
    text("source", "meta.id.assoc", "Name of the listed outburst."),
    _SCORE,
    real(
        "separation",
        ".5f",
        "deg",
        "pos.angDistance",
        "Angle on the sky between the arc and the source.",
    ),
    _AWAY,
    *DEPTH_COLUMNS,
    *LIGHT_COLUMNS,
    *FLAT_COLUMNS,
    _RATIO,
    error_column(_RATIO, "phys.veloc.ang;arith.ratio"),
    *SLOPE_COLUMNS,
    _SIDEWAYS,
    error_column(_SIDEWAYS, "phys.dust"),
    *AGE_COLUMNS,
    _BEHIND,
    error_column(_BEHIND, "time.age"),
    text("remark", "meta.note", "Why something is missing, in words."),
)
