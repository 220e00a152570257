"""The rows of the four tables, as frozen records.

Field by field they are the columns of :mod:`latelight.products.columns`, which
gives each its unit, description and UCD; a test holds the two together.  A
value that is not known is None here and masked in the table, never NaN.  Text
is never missing: an empty string says that there is none.

Lengths are arcsec and angles degrees on the sky; where a frame has no celestial
WCS those are None, and the pixel columns (ending in ``_px``, and ``x``, ``y``,
``normal_angle``) still hold.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["ArcRow", "CandidateRow", "PairRow", "ResidualRow"]


@dataclass(frozen=True, slots=True, kw_only=True)
class CandidateRow:
    """One arc that is worth a look, with its motion and its best origin.

    Attributes
    ----------
    id : str
        Designation, from :func:`latelight.products.designation.unique_ids`.
    field, filter, template, science : str
        Field and filter words, and the names of the two frames.
    mjd_template, mjd_science : float
        Middles of the exposures, MJD (UTC).
    ra, dec : float or None
        Bright ridge at the science epoch, degrees, ICRS.
    snr : float
        Significance of the fitted profile.
    length, width : float or None
        Along and across (FWHM, PSF taken out), arcsec.
    surface_brightness : float or None
        mag/arcsec^2; None without a zero point or a WCS.
    normal_pa, normal_pa_err : float or None
        Position angle in which the arc moves, 0-360, and 1 sigma, degrees.
    speed, speed_err : float or None
        Along that normal, arcsec per Julian year; None with one lobe.
    source : str
        Best origin, or empty.
    away_angle : float or None
        Motion minus the direction away from the source, +-180 degrees.
    score : float or None
        log10 likelihood ratio against random directions.
    dust_depth, dust_depth_err : float or None
        Depth of the dust, pc, positive towards the observer.
    verdict : str
        ``"arc"``.
    pair : str
        Name of the pair.
    x, y : float
        Science pixel of the position, first pixel 0.
    normal_angle, normal_angle_err : float
        Pixel angle of the motion, 0-360, and 1 sigma, degrees.
    shift_px, shift_err_px : float or None
        Displacement between the epochs along the normal, pixels.
    length_px, width_px : float
        As ``length`` and ``width``, pixels.
    width_err : float or None
        1 sigma of ``width``, arcsec.
    width_err_px : float or None
        1 sigma of ``width_px``, pixels.
    surface_brightness_err : float or None
        1 sigma of ``surface_brightness``, mag/arcsec^2.
    surface_brightness_counts, surface_brightness_err_counts : float
        Science counts per pixel, and 1 sigma.
    sense_odds : float
        log10 of the odds that the sense of motion is right.
    lobes : int
        1 or 2.
    profile_chi2 : float or None
        Reduced chi-square of the profile fit.
    curvature_radius : float or None
        Radius of the circle through the arc, arcsec; None for a straight one.
    source_separation : float or None
        Angle between arc and source, degrees.
    dust_distance, dust_distance_err : float or None
        What the arc means if it is lit by ``source``: this and the fields down to
        ``implied_age_err`` are those of
        :class:`latelight.products.track_rows.InterpretationRow`.
    scattering_angle, scattering_angle_err : float or None
    viewing_pa : float or None
    viewing_inclination, viewing_inclination_err : float or None
    flat_speed, flat_speed_err : float or None
    sheet_slope, sheet_slope_err : float or None
    implied_age, implied_age_err : float or None
    track : str
        Id of the track on which it lies, or empty.
    """

    id: str
    field: str
    filter: str
    template: str
    science: str
    mjd_template: float
    mjd_science: float
    ra: float | None
    dec: float | None
    snr: float
    length: float | None
    width: float | None
    surface_brightness: float | None
    normal_pa: float | None
    normal_pa_err: float | None
    speed: float | None
    speed_err: float | None
    source: str
    away_angle: float | None
    score: float | None
    dust_depth: float | None
    dust_depth_err: float | None
    verdict: str
    pair: str
    x: float
    y: float
    normal_angle: float
    normal_angle_err: float
    shift_px: float | None
    shift_err_px: float | None
    length_px: float
    width_px: float
    width_err: float | None
    width_err_px: float | None
    surface_brightness_err: float | None
    surface_brightness_counts: float
    surface_brightness_err_counts: float | None
    sense_odds: float | None
    lobes: int
    profile_chi2: float | None
    curvature_radius: float | None
    source_separation: float | None
    dust_distance: float | None = None
    dust_distance_err: float | None = None
    scattering_angle: float | None = None
    scattering_angle_err: float | None = None
    viewing_pa: float | None = None
    viewing_inclination: float | None = None
    viewing_inclination_err: float | None = None
    flat_speed: float | None = None
    flat_speed_err: float | None = None
    sheet_slope: float | None = None
    sheet_slope_err: float | None = None
    implied_age: float | None = None
    implied_age_err: float | None = None
    track: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class ArcRow:
    """One ridge of a difference, kept or set aside.

    Attributes
    ----------
    pair : str
        Name of the pair.
    verdict : str
        ``"arc"`` when kept, else the reason it was set aside.
    candidate : str
        Id of the candidate it became, or empty.
    sign : int
        +1 brighter in the science frame, -1 in the template.
    snr : float
        Significance of the fitted profile.
    x, y : float
        Middle of the ridge, science pixels, first pixel 0.
    ra, dec : float or None
        The same, degrees, ICRS.
    length, width : float or None
        Along and across, arcsec.
    normal_pa : float or None
        Position angle of the normal, sense unknown, 0-180 degrees.
    length_px, width_px : float
        Along and across, pixels.
    normal_angle, normal_angle_err : float
        Pixel angle of the normal, 0-180, and 1 sigma, degrees.
    shift_px : float or None
        Rough displacement between the lobes, pixels; None with one lobe.
    surface_brightness : float or None
        Mean height of the ridge, mag/arcsec^2.
    surface_brightness_counts : float
        The same, science counts per pixel.
    curvature_radius : float or None
        Radius of the circle through the ridge, arcsec; None for a straight one.
    """

    pair: str
    verdict: str
    candidate: str
    sign: int
    snr: float
    x: float
    y: float
    ra: float | None
    dec: float | None
    length: float | None
    width: float | None
    normal_pa: float | None
    length_px: float
    width_px: float
    normal_angle: float
    normal_angle_err: float
    shift_px: float | None
    surface_brightness: float | None
    surface_brightness_counts: float
    curvature_radius: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class PairRow:
    """One pair of frames: what was done, how well, and how deep.

    All but the first nine may be unknown when the pair failed.

    Attributes
    ----------
    pair, field, filter, template, science : str
        Names.
    mjd_template, mjd_science : float or None
        Middles of the exposures, MJD (UTC).
    status : str
        ``"done"`` or ``"failed"``.
    reason : str
        Why it failed, or empty.
    n_stars_template, n_stars_science, n_matched : int or None
        Stars on each frame, and in the alignment.
    registration_rms, registration_error : float or None
        Residual of one star, and estimated error of the map, pixels.
    registration_method : str
        ``"wcs"`` or ``"asterisms"``, or empty.
    scale, scale_err : float or None
        Science counts per template count, and 1 sigma.
    convolved : str
        Which frame was convolved with the fitted kernel, or empty.
    seeing_template, seeing_science : float or None
        FWHM, arcsec.
    fwhm_template_px, fwhm_science_px, fwhm_difference_px : float or None
        FWHM, pixels.
    held_out_chi2 : float or None
        Median reduced chi-square of the stars kept out of the kernel fit.
    noise_ratio : float or None
        Measured over predicted noise in blank sky.
    depth : float or None
        Faintest patch of 10 arcsec^2 seen at 5 sigma, mag/arcsec^2.
    n_residuals, n_arcs, n_candidates : int or None
        Compact residuals, ridges kept or not, candidates.
    seconds : float or None
        Wall-clock time of the pair.
    peak_memory : float or None
        Peak resident memory of the process, MB (1e6 bytes).
    notes : str
        What was estimated or assumed.
    """

    pair: str
    field: str
    filter: str
    template: str
    science: str
    mjd_template: float | None
    mjd_science: float | None
    status: str
    reason: str
    n_stars_template: int | None = None
    n_stars_science: int | None = None
    n_matched: int | None = None
    registration_rms: float | None = None
    registration_error: float | None = None
    registration_method: str = ""
    scale: float | None = None
    scale_err: float | None = None
    convolved: str = ""
    seeing_template: float | None = None
    seeing_science: float | None = None
    fwhm_template_px: float | None = None
    fwhm_science_px: float | None = None
    fwhm_difference_px: float | None = None
    held_out_chi2: float | None = None
    noise_ratio: float | None = None
    depth: float | None = None
    n_residuals: int | None = None
    n_arcs: int | None = None
    n_candidates: int | None = None
    seconds: float | None = None
    peak_memory: float | None = None
    notes: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class ResidualRow:
    """One compact residual of a difference: a variable star or a moving body.

    Attributes
    ----------
    pair : str
        Name of the pair.
    kind : str
        ``"variable"`` on a star of either frame, ``"new"`` where there is none.
    ra, dec : float or None
        Degrees, ICRS.
    x, y : float
        Science pixel, first pixel 0.
    flux, flux_err : float
        Science counts, positive when brighter in the science frame, and 1 sigma.
    magnitude : float or None
        Magnitude of the absolute flux of the difference; None without zero point.
    snr : float
        Signed significance.
    fwhm_px : float
        Width, pixels.
    """

    pair: str
    kind: str
    ra: float | None
    dec: float | None
    x: float
    y: float
    flux: float
    flux_err: float
    magnitude: float | None
    snr: float
    fwhm_px: float
