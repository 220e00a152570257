"""The rows of the tables of tracks and of interpretations, as frozen records.

As in :mod:`latelight.products.rows`: a value that is not known is None here and
masked in the table, never NaN; text is never missing.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["InterpretationRow", "TrackPointRow", "TrackRow"]


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackRow:
    """One arc followed over the epochs of a field.

    Attributes
    ----------
    id : str
        Designation.
    field, filter : str
        Words of the frames.
    grid : str
        Name of the frame whose pixels ``x`` and ``y`` count.
    mjd : float
        Epoch at which place and speed hold, MJD (UTC).
    mjd_first, mjd_last : float
        First and last epoch of the series.
    n_epochs : int
        Epochs that could be used.
    ra, dec : float or None
        Middle of the ridge at ``mjd``, degrees, ICRS.
    place_err : float or None
        1 sigma of the place along the motion, arcsec.
    snr : float
        Significance of the whole track.
    length, width, width_err : float or None
        Along the ridge, across (FWHM, PSF taken out), and 1 sigma, arcsec.
    surface_brightness, surface_brightness_err : float or None
        Peak along the normal at the last epoch that shows it, mag/arcsec^2.
    normal_pa, normal_pa_err : float or None
        Position angle in which the arc moves, 0-360, and 1 sigma, degrees.
    speed, speed_err : float or None
        At ``mjd``, arcsec per Julian year.
    speed_change, speed_change_err : float or None
        arcsec per Julian year squared; None where it is not fitted.
    place_speed_cov, place_change_cov, speed_change_cov : float or None
        Covariances of place, speed and change, in arcsec and years.
    source : str
        Best listed origin, or empty.
    away_angle : float or None
        Motion minus the direction away from the source, +-180 degrees.
    score : float or None
        log10 likelihood ratio against random motion.
    dust_depth, dust_depth_err : float or None
        pc from the source, positive towards the observer.
    found_in : str
        ``"pairs"``, ``"stack"`` or ``"both"``.
    candidates : str
        Ids of the candidates on it, separated by blanks; may be empty.
    verdict : str
        ``"track"``, or the reason it was set aside.
    x, y : float
        Pixel of the place on the grid, first pixel 0.
    normal_angle, normal_angle_err : float
        Pixel angle of the motion, and 1 sigma, degrees.
    length_px, width_px : float
        As ``length`` and ``width``, pixels.
    sense_odds : float
        log10 of the odds that the sense of motion is right.
    chi2 : float or None
        Reduced chi-square of the joint fit.
    seeing : float or None
        Median FWHM of the epochs, arcsec.
    speed_px, speed_err_px : float or None
        As ``speed``, pixels per Julian year.
    source_separation : float or None
        Angle between track and source, degrees.
    dust_distance, dust_distance_err : float or None
        What the track means if it is lit by ``source``: this and the fields below
        are those of :class:`InterpretationRow`.
    scattering_angle, scattering_angle_err : float or None
    viewing_pa : float or None
    viewing_inclination, viewing_inclination_err : float or None
    flat_speed, flat_speed_err : float or None
    sheet_slope, sheet_slope_err : float or None
    implied_age, implied_age_err : float or None
    """

    id: str
    field: str
    filter: str
    grid: str
    mjd: float
    mjd_first: float
    mjd_last: float
    n_epochs: int
    ra: float | None
    dec: float | None
    place_err: float | None
    snr: float
    length: float | None
    width: float | None
    width_err: float | None
    surface_brightness: float | None
    surface_brightness_err: float | None
    normal_pa: float | None
    normal_pa_err: float | None
    speed: float | None
    speed_err: float | None
    speed_change: float | None
    speed_change_err: float | None
    place_speed_cov: float | None
    place_change_cov: float | None
    speed_change_cov: float | None
    source: str
    away_angle: float | None
    score: float | None
    dust_depth: float | None
    dust_depth_err: float | None
    found_in: str
    candidates: str
    verdict: str
    x: float
    y: float
    normal_angle: float
    normal_angle_err: float
    length_px: float
    width_px: float
    sense_odds: float | None
    chi2: float | None
    seeing: float | None
    speed_px: float | None = None
    speed_err_px: float | None = None
    source_separation: float | None = None
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


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackPointRow:
    """A track at one epoch.

    Attributes
    ----------
    track : str
        Id of the track.
    frame : str
        Name of the frame.
    mjd : float
        Middle of the exposure, MJD (UTC).
    offset, offset_err : float or None
        Moved along the motion since the track's ``mjd``, by this epoch alone,
        arcsec, and 1 sigma.
    surface_brightness, surface_brightness_err : float or None
        Peak along the normal, mag/arcsec^2, and 1 sigma.
    height_counts, height_err_counts : float or None
        The same, counts per pixel.
    """

    track: str
    frame: str
    mjd: float
    offset: float | None
    offset_err: float | None
    surface_brightness: float | None
    surface_brightness_err: float | None
    height_counts: float | None
    height_err_counts: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class InterpretationRow:
    """What one arc means if it is lit by one listed source.

    Attributes
    ----------
    id : str
        Candidate or track.
    kind : str
        ``"candidate"`` or ``"track"``.
    source : str
        Name of the source.
    score : float or None
        log10 likelihood ratio against random motion.
    separation : float or None
        Angle between arc and source, degrees.
    away_angle : float or None
        Motion minus the direction away from the source, degrees.
    dust_depth, dust_depth_err : float or None
        pc from the source, positive towards the observer.
    dust_distance, dust_distance_err : float or None
        From dust to source, pc.
    scattering_angle, scattering_angle_err : float or None
        Degrees; 0 is forward.
    viewing_pa : float or None
        Position angle, on the sky at the source, of the direction from the source
        to the dust, degrees.
    viewing_inclination, viewing_inclination_err : float or None
        Angle of that direction from the line towards the observer, degrees.
    flat_speed, flat_speed_err : float or None
        Speed of a sheet across the line of sight, arcsec/yr.
    speed_ratio, speed_ratio_err : float or None
        Measured speed over that one.
    sheet_slope, sheet_slope_err : float or None
        Slope dz/drho of the sheet that gives the measured motion.
    sheet_slope_sideways, sheet_slope_sideways_err : float or None
        Slope across that direction, from the turn of the motion.
    implied_age, implied_age_err : float or None
        Age for a sheet across the view, dust in front, where the source's age is
        not known, Julian years.
    implied_age_behind, implied_age_behind_err : float or None
        The other root: dust behind the source.
    remark : str
        Why something is missing, in words.
    """

    id: str
    kind: str
    source: str
    score: float | None
    separation: float | None
    away_angle: float | None
    dust_depth: float | None
    dust_depth_err: float | None
    dust_distance: float | None
    dust_distance_err: float | None
    scattering_angle: float | None
    scattering_angle_err: float | None
    viewing_pa: float | None
    viewing_inclination: float | None
    viewing_inclination_err: float | None
    flat_speed: float | None
    flat_speed_err: float | None
    speed_ratio: float | None
    speed_ratio_err: float | None
    sheet_slope: float | None
    sheet_slope_err: float | None
    sheet_slope_sideways: float | None
    sheet_slope_sideways_err: float | None
    implied_age: float | None
    implied_age_err: float | None
    implied_age_behind: float | None
    implied_age_behind_err: float | None
    remark: str
