"""The row of the table of forecasts, as a frozen record.

As in :mod:`latelight.products.rows`: a value that is not known is None here and
masked in the table, never NaN; text is never missing.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["ForecastRow"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ForecastRow:
    """One arc at a date.

    Attributes
    ----------
    id, kind : str
        Designation, and ``"track"`` or ``"candidate"``.
    field, filter : str
        Words of the frames.
    mjd : float
        The date, MJD (UTC).
    mjd_last : float
        Last epoch at which the arc was measured, MJD (UTC).
    ra, dec : float
        Predicted middle of the ridge, which is the centre of both slits, degrees.
    offset, offset_err : float
        Moved along the motion since the last epoch, and 1 sigma of the predicted
        place in that direction, arcsec.
    across_err : float
        1 sigma of the place along the arc, arcsec.
    motion_pa, motion_pa_err : float
        Position angle in which it moves there, 0-360, and 1 sigma, degrees.
    slit_pa_along : float
        Position angle of a slit along the arc, 0-180, degrees.
    slit_pa_motion : float
        Position angle of a slit along the motion, 0-180, degrees.
    slit_width, slit_length : float
        Arcsec.
    slit_chance : float
        Probability that the ridge's middle falls inside the slit along the arc.
    speed, speed_err : float
        At the date, arcsec per Julian year, and 1 sigma.
    length, width : float or None
        Along the ridge and across (FWHM, PSF taken out), as measured, arcsec.
    surface_brightness, surface_brightness_err : float or None
        Expected peak, mag/arcsec^2, and 1 sigma.
    seeing : float or None
        Of the epochs, arcsec.
    mjd_moved_1, mjd_moved_3 : float or None
        When it will have moved 1 and 3 seeing widths since the last epoch, MJD.
    in_field : str
        ``"yes"``, ``"no"`` or ``"unknown"``: whether the predicted place lies on the
        frames it was found in.
    source : str
        Best listed origin, or empty.
    remark : str
        What to mind, in words; empty when nothing.
    """

    id: str
    kind: str
    field: str
    filter: str
    mjd: float
    mjd_last: float
    ra: float
    dec: float
    offset: float
    offset_err: float
    across_err: float
    motion_pa: float
    motion_pa_err: float
    slit_pa_along: float
    slit_pa_motion: float
    slit_width: float
    slit_length: float
    slit_chance: float
    speed: float
    speed_err: float
    length: float | None
    width: float | None
    surface_brightness: float | None
    surface_brightness_err: float | None
    seeing: float | None
    mjd_moved_1: float | None
    mjd_moved_3: float | None
    in_field: str
    source: str
    remark: str
