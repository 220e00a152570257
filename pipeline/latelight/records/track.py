"""Arcs followed over many epochs."""

from __future__ import annotations

from dataclasses import dataclass

from latelight.records.arc import ArcTrace
from latelight.records.arrays import FloatArray

__all__ = ["Track", "TrackPoint", "TrackSeed"]


@dataclass(frozen=True, slots=True)
class TrackSeed:
    """A moving ridge to be followed: a first guess.

    Attributes
    ----------
    trace : ArcTrace
        Centre line of the ridge at ``mjd``, pixels of the series' grid.
    direction_angle : float
        Pixel angle of the motion, degrees 0-360.
    speed_px_yr : float
        Speed along it, pixels per Julian year, >= 0; NaN when unknown.
    mjd : float
        Epoch at which the ridge lies on the trace.
    width_px : float
        Full width at half maximum across, PSF included, pixels.
    snr : float
        Significance with which it was found.
    origin : str
        ``"stack"`` from the search along trial velocities, else the name of the
        pair in which the arc was found.
    arc : int
        Index of that arc in the pair's findings; -1 for ``"stack"``.
    """

    trace: ArcTrace
    direction_angle: float
    speed_px_yr: float
    mjd: float
    width_px: float
    snr: float
    origin: str
    arc: int = -1


@dataclass(frozen=True, slots=True)
class TrackPoint:
    """A track at one epoch.

    Attributes
    ----------
    epoch : int
        Index in the series.
    mjd : float
        Middle of the exposure, MJD.
    offset_px, offset_err_px : float
        Distance moved along the motion since the track's ``mjd``, fitted to this
        epoch alone, pixels, and 1 sigma; NaN when the arc is too faint there.
    height_counts, height_err_counts : float
        Peak surface brightness along the normal at the fitted motion, counts per
        pixel, mean along the arc, and 1 sigma; NaN when masked.
    """

    epoch: int
    mjd: float
    offset_px: float
    offset_err_px: float
    height_counts: float
    height_err_counts: float


@dataclass(frozen=True, slots=True)
class Track:
    """One arc followed over the epochs of a field.

    Motion: ``place = speed * t + change * t**2 / 2`` along the direction, with t in
    Julian years since ``mjd``.

    Attributes
    ----------
    trace : ArcTrace
        Centre line of the ridge at ``mjd``.
    x, y : float
        Middle of the ridge at ``mjd``, pixels of the series' grid.
    mjd : float
        Reference epoch, MJD: where the place is best known.
    direction_angle, direction_angle_err : float
        Pixel angle of the motion, 0-360, and 1 sigma, degrees.
    speed_px_yr, speed_err_px_yr : float
        Speed at ``mjd``, pixels per Julian year, > 0, and 1 sigma.
    change_px_yr2, change_err_px_yr2 : float
        Change of the speed, and 1 sigma; NaN with fewer than four epochs.
    place_err_px : float
        1 sigma of the place along the motion at ``mjd``, pixels.
    covariance : float64 array, shape (3, 3)
        Of (place, speed, change) along the motion, in pixels and Julian years;
        rows and columns of a change that is not fitted are zero.
    snr : float
        Significance of the whole track, calibrated like that of an arc.
    length_px : float
        Along the ridge, pixels.
    width_px, width_err_px : float
        Full width at half maximum across, PSF taken out, pixels, and 1 sigma.
    sense_odds : float
        log10 of the odds that the sense of the motion is right, >= 0.
    chi2 : float
        Reduced chi-square of the joint fit.
    points : tuple of TrackPoint
        One an epoch, in order of time.
    profile_offsets : float64 array, shape (m,)
        Distance along the motion from the ridge at ``mjd``, pixels.
    profiles : float64 array, shape (n, m)
        Brightness along the normal at each epoch, mean along the arc, counts per
        pixel, static sky taken out: the position-time picture.  NaN where there
        are no data.
    seeds : tuple of TrackSeed
        What it was found from: arcs of pairs, the stack, or both.
    verdict : str
        ``"track"`` when worth a look, else the reason it was set aside.
    """

    trace: ArcTrace
    x: float
    y: float
    mjd: float
    direction_angle: float
    direction_angle_err: float
    speed_px_yr: float
    speed_err_px_yr: float
    change_px_yr2: float
    change_err_px_yr2: float
    place_err_px: float
    covariance: FloatArray
    snr: float
    length_px: float
    width_px: float
    width_err_px: float
    sense_odds: float
    chi2: float
    points: tuple[TrackPoint, ...]
    profile_offsets: FloatArray
    profiles: FloatArray
    seeds: tuple[TrackSeed, ...]
    verdict: str
