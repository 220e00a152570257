"""The columns of the table of forecasts."""

from __future__ import annotations

from latelight.products.column import DEC, RA, real, text

__all__ = ["FORECAST_COLUMNS"]

FORECAST_COLUMNS = (
    text("id", "meta.id;meta.main", "Designation of the track or candidate."),
    text("kind", "meta.code.class", "'track' or 'candidate'."),
    text("field", "meta.id;obs.field", "Field word of the frames."),
    text("filter", "meta.id;instr.filter", "Filter word of the frames."),
    real("mjd", ".5f", "d", "time.epoch", "Date of the forecast, MJD (UTC)."),
    real(
        "mjd_last",
        ".5f",
        "d",
        "time.epoch;obs.image",
        "Last epoch at which the arc was measured, MJD (UTC).",
    ),
    real(
        "ra",
        ".7f",
        "deg",
        "pos.eq.ra;meta.main;meta.modelled",
        f"{RA}, of the predicted middle of the ridge: the centre of both slits.",
    ),
    real(
        "dec",
        ".7f",
        "deg",
        "pos.eq.dec;meta.main;meta.modelled",
        f"{DEC}, of the predicted middle of the ridge: the centre of both slits.",
    ),
    real(
        "offset",
        ".3f",
        "arcsec",
        "pos.angDistance;meta.modelled",
        "Moved along the motion since the last epoch; negative for an earlier date.",
    ),
    real(
        "offset_err",
        ".3f",
        "arcsec",
        "stat.error;pos.angDistance",
        "1 sigma of the predicted place along the motion: fit, and dust that rolls.",
    ),
    real(
        "across_err",
        ".3f",
        "arcsec",
        "stat.error;pos.angDistance",
        "1 sigma of the predicted place along the arc, from the error of the "
        "direction.",
    ),
    real(
        "motion_pa",
        ".2f",
        "deg",
        "pos.posAng;meta.modelled",
        "Position angle, east of north, in which the arc moves at the date.",
    ),
    real(
        "motion_pa_err", ".2f", "deg", "stat.error;pos.posAng", "1 sigma of motion_pa."
    ),
    real(
        "slit_pa_along",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle of a slit laid along the arc, 0-180.",
    ),
    real(
        "slit_pa_motion",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle of a slit laid along the motion, across the arc, 0-180.",
    ),
    real("slit_width", ".3f", "arcsec", "phys.angSize", "Width of the slit."),
    real("slit_length", ".2f", "arcsec", "phys.angSize", "Length of the slit."),
    real(
        "slit_chance",
        ".3f",
        "",
        "stat.probability",
        "Probability that the middle of the ridge falls inside the slit laid along "
        "the arc, from offset_err.",
    ),
    real(
        "speed",
        ".4f",
        "arcsec/yr",
        "phys.veloc.ang;meta.modelled",
        "Apparent speed at the date, per Julian year, along the arc's normal.",
    ),
    real(
        "speed_err",
        ".4f",
        "arcsec/yr",
        "stat.error;phys.veloc.ang",
        "1 sigma of speed.",
    ),
    real(
        "length", ".2f", "arcsec", "phys.angSize", "Length along the arc, as measured."
    ),
    real(
        "width",
        ".3f",
        "arcsec",
        "phys.angSize;stat.fwhm",
        "FWHM across the arc with the PSF taken out, as measured.",
    ),
    real(
        "surface_brightness",
        ".3f",
        "mag/arcsec2",
        "phot.mag.sb;em.opt;meta.modelled",
        "Expected peak along the normal; none without a zero point.",
    ),
    real(
        "surface_brightness_err",
        ".3f",
        "mag/arcsec2",
        "stat.error;phot.mag.sb;em.opt",
        "1 sigma of surface_brightness; grows as new dust is lit.",
    ),
    real(
        "seeing",
        ".3f",
        "arcsec",
        "instr.obsty.seeing",
        "FWHM of stars at the epochs of the arc.",
    ),
    real(
        "mjd_moved_1",
        ".2f",
        "d",
        "time.epoch;meta.modelled",
        "When the arc will have moved 1 seeing width since its last epoch, MJD (UTC).",
    ),
    real(
        "mjd_moved_3",
        ".2f",
        "d",
        "time.epoch;meta.modelled",
        "When the arc will have moved 3 seeing widths since its last epoch, MJD (UTC).",
    ),
    text(
        "in_field",
        "meta.code",
        "Whether the predicted place lies on the frames the arc was found in: 'yes', "
        "'no', or 'unknown' when they are no longer there to ask.",
    ),
    text(
        "source",
        "meta.id.assoc",
        "Listed outburst that explains the motion best; empty when none does.",
    ),
    text("remark", "meta.note", "What to mind about this forecast."),
)
