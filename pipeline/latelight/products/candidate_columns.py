"""The columns of the candidate table."""

from __future__ import annotations

from latelight.products.column import DEC, EPOCHS, PAIR, RA, X, Y, integer, real, text
from latelight.products.meaning_columns import MEANING_COLUMNS

__all__ = ["CANDIDATE_COLUMNS"]

CANDIDATE_COLUMNS = (
    text(
        "id",
        "meta.id;meta.main",
        "Designation from the position, J2000, truncated and not rounded.",
    ),
    *EPOCHS,
    real(
        "ra",
        ".7f",
        "deg",
        "pos.eq.ra;meta.main",
        f"{RA}, of the bright ridge at the science epoch.",
    ),
    real(
        "dec",
        ".7f",
        "deg",
        "pos.eq.dec;meta.main",
        f"{DEC}, of the bright ridge at the science epoch.",
    ),
    real(
        "snr",
        ".2f",
        "",
        "stat.snr",
        "Significance of the fitted profile, both lobes together, calibrated.",
    ),
    real("length", ".2f", "arcsec", "phys.angSize", "Length along the arc."),
    real(
        "width",
        ".3f",
        "arcsec",
        "phys.angSize;stat.fwhm",
        "FWHM across the arc with the PSF taken out; 0 when no wider than the PSF.",
    ),
    real(
        "surface_brightness",
        ".3f",
        "mag/arcsec2",
        "phot.mag.sb;em.opt",
        "Peak surface brightness of the echo at the science epoch, or at the "
        "template epoch when it shows only there; none without a zero point.",
    ),
    real(
        "normal_pa",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle, east of north, in which the arc moves from the earlier to "
        "the later epoch; along the normal of the arc.",
    ),
    real(
        "normal_pa_err", ".2f", "deg", "stat.error;pos.posAng", "1 sigma of normal_pa."
    ),
    real(
        "speed",
        ".4f",
        "arcsec/yr",
        "phys.veloc.ang",
        "Apparent speed along normal_pa per Julian year: only the component along "
        "the normal can be observed; none when only one lobe shows.",
    ),
    real(
        "speed_err",
        ".4f",
        "arcsec/yr",
        "stat.error;phys.veloc.ang",
        "1 sigma of speed.",
    ),
    text(
        "source",
        "meta.id.assoc",
        "Listed outburst that explains the motion best; empty when none does.",
    ),
    real(
        "away_angle",
        ".2f",
        "deg",
        "pos.posAng;arith.diff",
        "normal_pa minus the direction away from the source, -180 to 180.",
    ),
    real(
        "score",
        ".3f",
        "",
        "stat.likelihood;arith.ratio",
        "log10 of the likelihood of the direction for this source over that for "
        "random directions.",
    ),
    real(
        "dust_depth",
        ".3f",
        "pc",
        "pos.cartesian.z;meta.modelled",
        "Depth of the dust along the line of sight, measured from the source, "
        "positive towards the observer, if the light comes from this source.",
    ),
    real(
        "dust_depth_err",
        ".3f",
        "pc",
        "stat.error;pos.cartesian.z",
        "1 sigma of dust_depth.",
    ),
    text("verdict", "meta.code.class", "What the ridge is taken for."),
    PAIR,
    real(
        "x",
        ".3f",
        "pix",
        "pos.cartesian.x;instr.pixel",
        f"{X}, of the bright ridge at the science epoch.",
    ),
    real(
        "y",
        ".3f",
        "pix",
        "pos.cartesian.y;instr.pixel",
        f"{Y}, of the bright ridge at the science epoch.",
    ),
    real(
        "normal_angle",
        ".2f",
        "deg",
        "pos.posAng;instr.pixel",
        "Direction of the motion on the science frame, from +x towards +y, 0-360.",
    ),
    real(
        "normal_angle_err",
        ".2f",
        "deg",
        "stat.error;pos.posAng;instr.pixel",
        "1 sigma of normal_angle.",
    ),
    real(
        "shift_px",
        ".3f",
        "pix",
        "pos.angDistance;instr.pixel",
        "Distance moved along the normal between the epochs, positive.",
    ),
    real(
        "shift_err_px",
        ".3f",
        "pix",
        "stat.error;pos.angDistance;instr.pixel",
        "1 sigma of shift_px.",
    ),
    real(
        "length_px", ".2f", "pix", "phys.angSize;instr.pixel", "Length along the arc."
    ),
    real(
        "width_px",
        ".3f",
        "pix",
        "phys.angSize;stat.fwhm;instr.pixel",
        "FWHM across the arc with the PSF taken out.",
    ),
    real(
        "width_err",
        ".3f",
        "arcsec",
        "stat.error;phys.angSize;stat.fwhm",
        "1 sigma of width.",
    ),
    real(
        "width_err_px",
        ".3f",
        "pix",
        "stat.error;phys.angSize;stat.fwhm;instr.pixel",
        "1 sigma of width_px.",
    ),
    real(
        "surface_brightness_err",
        ".3f",
        "mag/arcsec2",
        "stat.error;phot.mag.sb;em.opt",
        "1 sigma of surface_brightness, zero point taken as exact.",
    ),
    real(
        "surface_brightness_counts",
        ".6g",
        "ct/pix",
        "phot.count;instr.pixel",
        "surface_brightness in counts of the science frame.",
    ),
    real(
        "surface_brightness_err_counts",
        ".6g",
        "ct/pix",
        "stat.error;phot.count;instr.pixel",
        "1 sigma of surface_brightness_counts.",
    ),
    real(
        "sense_odds",
        ".2f",
        "",
        "stat.probability;arith.ratio",
        "log10 of the odds that the sense of motion is right.",
    ),
    integer(
        "lobes",
        "meta.number",
        "Lobes seen in the difference: 2 where the echo is and where it was, or 1.",
    ),
    real(
        "profile_chi2",
        ".3f",
        "",
        "stat.fit.chi2",
        "Reduced chi-square of the profile fitted along the normal.",
    ),
    real(
        "curvature_radius",
        ".4g",
        "arcsec",
        "phys.angSize;stat.fit.param",
        "Radius of the circle through the arc; none for a straight one.",
    ),
    real(
        "source_separation",
        ".5f",
        "deg",
        "pos.angDistance",
        "Angle on the sky between the arc and its source.",
    ),
    *MEANING_COLUMNS,
    text("track", "meta.id.assoc", "Id of the track on which it lies, or empty."),
)
