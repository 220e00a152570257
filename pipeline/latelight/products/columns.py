"""What each column of a table means: one registry for files and papers.

The name, unit, description and UCD1+ word of a column are written here (and in
:mod:`~latelight.products.candidate_columns`,
:mod:`~latelight.products.track_columns` and
:mod:`~latelight.products.meaning_columns`) and nowhere else; the table writers
and the documentation read them.  UCD words are those of the IVOA list 1.5
(2022-07-15); units are in a spelling that FITS and VOUnits share.
"""

from __future__ import annotations

from latelight.products.candidate_columns import CANDIDATE_COLUMNS
from latelight.products.column import DEC, EPOCHS, PAIR, RA, X, Y, integer, real, text

__all__ = ["ARC_COLUMNS", "CANDIDATE_COLUMNS", "PAIR_COLUMNS", "RESIDUAL_COLUMNS"]

ARC_COLUMNS = (
    PAIR,
    text(
        "verdict",
        "meta.code.class",
        "'arc' when kept, else the reason why the ridge was set aside.",
    ),
    text("candidate", "meta.id.assoc", "Id of the candidate it became, or empty."),
    integer(
        "sign",
        "meta.code",
        "+1 brighter in the science frame, -1 brighter in the template.",
    ),
    real(
        "snr",
        ".2f",
        "",
        "stat.snr",
        "Significance of the fitted profile, both lobes together, calibrated.",
    ),
    real(
        "x",
        ".3f",
        "pix",
        "pos.cartesian.x;instr.pixel",
        f"{X}, of the middle of the ridge.",
    ),
    real(
        "y",
        ".3f",
        "pix",
        "pos.cartesian.y;instr.pixel",
        f"{Y}, of the middle of the ridge.",
    ),
    real("ra", ".7f", "deg", "pos.eq.ra;meta.main", f"{RA}, of the same."),
    real("dec", ".7f", "deg", "pos.eq.dec;meta.main", f"{DEC}, of the same."),
    real("length", ".2f", "arcsec", "phys.angSize", "Length along the ridge."),
    real(
        "width",
        ".3f",
        "arcsec",
        "phys.angSize;stat.fwhm",
        "FWHM across the ridge with the PSF taken out; 0 when no wider than the PSF.",
    ),
    real(
        "normal_pa",
        ".2f",
        "deg",
        "pos.posAng",
        "Position angle, east of north, of the normal; its sense is not known here, "
        "0-180.",
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
        "normal_angle",
        ".2f",
        "deg",
        "pos.posAng;instr.pixel",
        "Direction of the normal on the science frame, from +x towards +y, 0-180.",
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
        "Rough displacement from the negative to the positive lobe along the normal; "
        "none when only one lobe shows.",
    ),
    real(
        "surface_brightness",
        ".3f",
        "mag/arcsec2",
        "phot.mag.sb;em.opt",
        "Mean height of the ridge; none without a zero point.",
    ),
    real(
        "surface_brightness_counts",
        ".6g",
        "ct/pix",
        "phot.count;instr.pixel",
        "Mean height of the ridge, without sign, in counts of the science frame.",
    ),
    real(
        "curvature_radius",
        ".4g",
        "arcsec",
        "phys.angSize;stat.fit.param",
        "Radius of the circle through the ridge; none for a straight one.",
    ),
)

PAIR_COLUMNS = (
    text("pair", "meta.id;meta.main", "Name of the pair of frames."),
    *EPOCHS,
    text("status", "meta.code.status", "'done' or 'failed'."),
    text("reason", "meta.note", "Why the pair failed, and the cure."),
    integer("n_stars_template", "meta.number", "Stars found on the template frame."),
    integer("n_stars_science", "meta.number", "Stars found on the science frame."),
    integer("n_matched", "meta.number", "Stars that carry the alignment."),
    real(
        "registration_rms",
        ".5f",
        "pix",
        "stat.fit.residual;instr.pixel",
        "Residual of one star after the alignment, per coordinate.",
    ),
    real(
        "registration_error",
        ".5f",
        "pix",
        "stat.error;pos.angDistance;instr.pixel",
        "Estimated 1-sigma error of the alignment, per coordinate.",
    ),
    text(
        "registration_method",
        "meta.code",
        "'wcs' when the headers led the match, 'asterisms' when the stars did.",
    ),
    real(
        "scale",
        ".6g",
        "",
        "arith.factor;phot.flux",
        "Counts of the science frame per count of the template.",
    ),
    real("scale_err", ".3g", "", "stat.error;phot.flux", "1 sigma of scale."),
    text("convolved", "meta.code", "Frame convolved with the fitted kernel."),
    real(
        "seeing_template",
        ".3f",
        "arcsec",
        "instr.obsty.seeing",
        "FWHM of stars on the template frame.",
    ),
    real(
        "seeing_science",
        ".3f",
        "arcsec",
        "instr.obsty.seeing",
        "FWHM of stars on the science frame.",
    ),
    real(
        "fwhm_template_px",
        ".3f",
        "pix",
        "instr.det.psf;stat.fwhm",
        "FWHM of stars on the template frame.",
    ),
    real(
        "fwhm_science_px",
        ".3f",
        "pix",
        "instr.det.psf;stat.fwhm",
        "FWHM of stars on the science frame.",
    ),
    real(
        "fwhm_difference_px",
        ".3f",
        "pix",
        "instr.det.psf;stat.fwhm",
        "FWHM of the PSF of the difference.",
    ),
    real(
        "held_out_chi2",
        ".3f",
        "",
        "stat.fit.chi2",
        "Median reduced chi-square of stars kept out of the kernel fit, against "
        "photon and read noise alone.",
    ),
    real(
        "noise_ratio",
        ".4f",
        "",
        "instr.det.noise;arith.ratio",
        "Measured over predicted noise, 1 sigma, in blank sky of the difference.",
    ),
    real(
        "depth",
        ".3f",
        "mag/arcsec2",
        "instr.sensitivity;phot.mag.sb",
        "Surface brightness of a patch of 10 arcsec2 at 5 sigma of the predicted "
        "noise of the difference; none without a zero point.",
    ),
    integer("n_residuals", "meta.number", "Compact residuals of the difference."),
    integer("n_arcs", "meta.number", "Ridges found, kept or set aside."),
    integer("n_candidates", "meta.number", "Candidates of the pair."),
    real(
        "seconds", ".2f", "s", "time.duration;meta.software", "Wall-clock time taken."
    ),
    real(
        "peak_memory",
        ".1f",
        "Mbyte",
        "phys.size;meta.software",
        "Peak resident memory of the process so far.",
    ),
    text("notes", "meta.note", "What was estimated, assumed or left out."),
)

RESIDUAL_COLUMNS = (
    PAIR,
    text(
        "kind",
        "src.class",
        "'variable' on a star of either frame, 'new' where there is none.",
    ),
    real("ra", ".7f", "deg", "pos.eq.ra;meta.main", f"{RA}."),
    real("dec", ".7f", "deg", "pos.eq.dec;meta.main", f"{DEC}."),
    real("x", ".3f", "pix", "pos.cartesian.x;instr.pixel", f"{X}."),
    real("y", ".3f", "pix", "pos.cartesian.y;instr.pixel", f"{Y}."),
    real(
        "flux",
        ".6g",
        "ct",
        "phot.count;arith.diff",
        "Science minus template in counts of the science frame.",
    ),
    real(
        "flux_err",
        ".4g",
        "ct",
        "stat.error;phot.count;arith.diff",
        "1 sigma of flux.",
    ),
    real(
        "magnitude",
        ".3f",
        "mag",
        "phot.mag;em.opt;arith.diff",
        "Magnitude of the absolute value of flux; none without a zero point.",
    ),
    real("snr", ".2f", "", "stat.snr", "Significance, with the sign of flux."),
    real(
        "fwhm_px",
        ".2f",
        "pix",
        "phys.angSize;stat.fwhm;instr.pixel",
        "Width of the residual.",
    ),
)
