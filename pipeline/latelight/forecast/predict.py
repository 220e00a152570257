"""Where a moving arc will be at a date, with its errors.

The arc moves along its normal; with t in Julian years since its own epoch::

    offset = speed * t + change * t**2 / 2

Three things make the place uncertain: the errors of the fit with their covariance,
the error of the direction, and dust that rolls.  The last needs a word.  An echo
moves along the gradient of the light's delay over the sky, at a speed that is one
over its length; a sheet whose slope varies changes both.  To first order a change
of the gradient by a fraction d changes the speed by d where it is parallel and turns
the motion by d radians where it is at right angles, and dust has no reason to vary
along the motion otherwise than along the arc.  Arcs that can be found are nearly
straight: their normal turns by some five degrees, 0.1 rad, from end to end.  So the
speed is taken to vary by the fraction :data:`ROUGHNESS` (1 sigma) for every arc
length that is moved: a prior of zero mean and ``ROUGHNESS * speed**2 / length`` for
the change of speed (derived here).  A change that was fitted carries the dust in its
own covariance already: the fit allows for hills of the sheet.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.echo.constants import DAYS_PER_YEAR
from latelight.records import FloatArray
from latelight.sky import offset_position, position_angle

__all__ = ["ROUGHNESS", "Forecast", "MovingArc", "date_moved", "predict"]

ROUGHNESS = 0.1
"""Relative change of speed, and turn in radians, for one arc length moved; 1 sigma."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MovingArc:
    """Place and motion of an arc at one epoch.

    Attributes
    ----------
    ra, dec : float
        Middle of the ridge at ``mjd``, degrees, ICRS.
    mjd : float
        Epoch at which place and speed hold, MJD.
    pa, pa_err : float
        Position angle in which it moves, and 1 sigma, degrees.
    speed : float
        At ``mjd``, arcsec per Julian year, > 0.
    change : float or None
        Of the speed, arcsec per Julian year squared; None where it is not fitted.  Its
        variance must allow for rolling dust.
    covariance : float64 array, shape (3, 3)
        Of (place along the motion, speed, change), in arcsec and Julian years; the
        last row and column are not used where the change is not fitted.
    length : float
        Along the ridge, arcsec, > 0.
    epochs : tuple of float
        The epochs that were fitted, MJD.
    """

    ra: float
    dec: float
    mjd: float
    pa: float
    pa_err: float
    speed: float
    change: float | None
    covariance: FloatArray
    length: float
    epochs: tuple[float, ...]

    def __post_init__(self) -> None:
        for name in ("speed", "length"):
            value = getattr(self, name)
            if not (value > 0.0 and np.isfinite(value)):
                msg = f"{name} must be positive and finite, got {value!r}"
                raise ValueError(msg)
        if np.shape(self.covariance) != (3, 3):
            shape = np.shape(self.covariance)
            msg = f"covariance must have the shape (3, 3), got {shape}"
            raise ValueError(msg)


@dataclass(frozen=True, slots=True, kw_only=True)
class Forecast:
    """An arc at a date.

    Attributes
    ----------
    mjd : float
        The date.
    ra, dec : float
        Middle of the ridge, degrees, ICRS.
    pa, pa_err : float
        Position angle in which it moves there, 0-360, and 1 sigma, degrees; the arc
        lies at right angles to it.
    offset, offset_err : float
        Moved along the motion since the arc's own epoch, and 1 sigma, arcsec;
        negative for an earlier date.
    across_err : float
        1 sigma of the place along the arc, from the error of the direction, arcsec.
    speed, speed_err : float
        At the date, arcsec per Julian year, and 1 sigma.
    """

    mjd: float
    ra: float
    dec: float
    pa: float
    pa_err: float
    offset: float
    offset_err: float
    across_err: float
    speed: float
    speed_err: float


def predict(arc: MovingArc, mjd: float, *, roughness: float = ROUGHNESS) -> Forecast:
    """Return where an arc will be.

    Parameters
    ----------
    arc : MovingArc
        Its place and motion.
    mjd : float
        The date, MJD; before the arc's own epoch too.
    roughness : float
        Relative change of the speed for one arc length moved, 1 sigma, >= 0; 0 for
        dust without hills.  For the direction, and for the speed where its change was
        not fitted.

    Returns
    -------
    Forecast
        The place, with its errors along the motion and along the arc.

    Raises
    ------
    ValueError
        If the date is not finite or the roughness negative.

    Notes
    -----
    A change that was fitted is taken as it is.  Where none was, a true change c also
    bent the data: the straight fit took up what it could, and at the date it is wrong
    by c times what is left of t**2 / 2 when a line is fitted to it at the epochs.  For
    two epochs that is t * (t - t1) / 2 exactly.
    """
    if not np.isfinite(mjd):
        msg = f"mjd must be finite, got {mjd!r}"
        raise ValueError(msg)
    if not roughness >= 0.0:
        msg = f"roughness must not be negative, got {roughness!r}"
        raise ValueError(msg)
    motion = _Motion(arc, roughness)
    t = (mjd - arc.mjd) / DAYS_PER_YEAR
    offset, offset_err = motion.place(t)
    speed, speed_err = motion.speed(t)
    ra, dec, pa = _moved(arc, offset)
    distance = abs(offset)
    turn = roughness * distance / arc.length
    steady = np.radians(arc.pa_err)
    return Forecast(
        mjd=mjd,
        ra=ra,
        dec=dec,
        pa=pa,
        pa_err=float(np.degrees(np.hypot(steady, turn))),
        offset=offset,
        offset_err=offset_err,
        # A turn that grows with the distance is half as large on the average.
        across_err=float(distance * np.hypot(steady, 0.5 * turn)),
        speed=speed,
        speed_err=speed_err,
    )


def date_moved(
    arc: MovingArc,
    distance: float,
    *,
    since_mjd: float,
    roughness: float = ROUGHNESS,
) -> float | None:
    """Return the date by which an arc will have moved a distance.

    Parameters
    ----------
    arc : MovingArc
        Its place and motion.
    distance : float
        Arcsec, positive.
    since_mjd : float
        Date from which the distance counts, MJD.
    roughness : float
        As for :func:`predict`.

    Returns
    -------
    float or None
        MJD; None for an arc that comes to a stop before.
    """
    motion = _Motion(arc, roughness)
    start = (since_mjd - arc.mjd) / DAYS_PER_YEAR
    speed, _ = motion.speed(start)
    discriminant = speed**2 + 2.0 * motion.change * distance
    if discriminant < 0.0 or speed <= 0.0:
        return None
    # The smaller root, in the form that also holds without a change of speed.
    years = 2.0 * distance / (speed + np.sqrt(discriminant))
    return float(since_mjd + years * DAYS_PER_YEAR)


class _Motion:
    """Place, speed and change of an arc once rolling dust is allowed for."""

    def __init__(self, arc: MovingArc, roughness: float) -> None:
        self._covariance = np.array(arc.covariance, dtype=float)
        if arc.change is None:
            self._covariance[2], self._covariance[:, 2] = 0.0, 0.0
            self._state = np.array([0.0, arc.speed, 0.0])
            self._unseen = (roughness * arc.speed**2 / arc.length) ** 2
            self._line = _line_through_half_square(arc)
            return
        self._state = np.array([0.0, arc.speed, arc.change])
        self._unseen, self._line = 0.0, (0.0, 0.0)

    @property
    def change(self) -> float:
        """Change of speed, arcsec per Julian year squared."""
        return float(self._state[2])

    def place(self, t: float) -> tuple[float, float]:
        """Return the offset after t years and 1 sigma, arcsec."""
        constant, slope = self._line
        left = 0.5 * t**2 - constant - slope * t
        return self._of(np.array([1.0, t, 0.5 * t**2]), left)

    def speed(self, t: float) -> tuple[float, float]:
        """Return the speed after t years and 1 sigma, arcsec per year."""
        return self._of(np.array([0.0, 1.0, t]), t - self._line[1])

    def _of(self, weights: FloatArray, left: float) -> tuple[float, float]:
        variance = weights @ self._covariance @ weights + self._unseen * left**2
        return float(weights @ self._state), float(np.sqrt(max(variance, 0.0)))


def _line_through_half_square(arc: MovingArc) -> tuple[float, float]:
    """Return constant and slope of the line fitted to t**2 / 2 at the epochs."""
    t = (np.asarray(arc.epochs, dtype=float) - arc.mjd) / DAYS_PER_YEAR
    if np.unique(t).size < 2:
        return 0.0, 0.0
    slope, constant = np.polyfit(t, 0.5 * t**2, 1)
    return float(constant), float(slope)


def _moved(arc: MovingArc, offset: float) -> tuple[float, float, float]:
    """Return the place at an offset, and the position angle of the motion there."""
    if offset == 0.0:
        return arc.ra % 360.0, arc.dec, arc.pa % 360.0
    degrees = offset / 3600.0
    ra, dec = (float(v) for v in offset_position(arc.ra, arc.dec, arc.pa, degrees))
    # Further along the same great circle, far enough for the digits of an angle.
    ahead = offset_position(arc.ra, arc.dec, arc.pa, degrees + 1.0 / 60.0)
    return ra, dec, float(position_angle(ra, dec, *ahead))
