"""Where a simulated echo truly is, and whether something found lies on it.

Headers of simulated frames state slightly wrong coordinates, as in life.  What is
found on a frame is therefore taken to the sky through its true ones, pixel by pixel.
"""

import numpy as np

from latelight.simulation.astrometry import PlateCoordinates

# What is found may lie beside the ridge by so much, arcsec ...
LEAST_REACH = 2.0
# ... and its middle beyond half of the longer one's length by so much.
BEYOND = 4.0
# The least stretch of a ridge that is taken as a smooth curve, arcsec.
LEAST_STRETCH = 12.0


class Course:
    """The ridge of one echo at all times, across and along its common normal.

    Parameters
    ----------
    truth : FieldTruth
        The field.
    echo : TrackTruth
        One of its echoes.
    """

    def __init__(self, truth, echo):
        self.echo, self._mjds = echo, np.array(truth.mjds)
        self._plate = PlateCoordinates(echo.ra, echo.dec)
        angle = np.radians(echo.normal_pa)
        self._axes = np.array(
            [[np.sin(angle), np.cos(angle)], [np.cos(angle), -np.sin(angle)]]
        )
        self._lines = np.array([self.place(*ridge) for ridge in echo.ridges])

    def place(self, ra, dec):
        """Return places as arcsec (across, along) from the echo's middle."""
        return self._axes @ np.array(self._plate.from_sky(ra, dec))

    def line(self, mjd):
        """Return the ridge at a time, shape (2, m), straight between epochs."""
        last = len(self._mjds) - 2
        k = int(np.clip(np.searchsorted(self._mjds, mjd) - 1, 0, last))
        part = (mjd - self._mjds[k]) / (self._mjds[k + 1] - self._mjds[k])
        return (1.0 - part) * self._lines[k] + part * self._lines[k + 1]

    def ahead(self, ra, dec, mjd, *, length):
        """Return how far a place lies ahead of the ridge at a time, arcsec.

        The ridge rolls with the dust; a smooth curve through as much of it as what
        was found covers is what a fit to all of that measures.
        """
        across, along = self.place(ra, dec)
        ridge = self.line(mjd)
        along = np.clip(along, ridge[1].min(), ridge[1].max())
        stretch = max(0.5 * length, LEAST_STRETCH)
        near = np.abs(ridge[1] - along) <= stretch
        curve = np.polyfit(
            ridge[1][near], ridge[0][near], 2, w=np.sqrt(self.echo.weights[near])
        )
        return float(across - np.polyval(curve, along))

    def holds(self, ra, dec, *, length, mjds):
        """Tell whether a ridge found lies on the echo at one of two times."""
        _, along = self.place(ra, dec)
        gaps = [self.ahead(ra, dec, mjd, length=length) for mjd in mjds]
        ends = self.line(mjds[0])[1]
        aside = abs(along - 0.5 * (ends.min() + ends.max()))
        shift = abs(gaps[-1] - gaps[0])
        reach = max(LEAST_REACH, self.echo.width_arcsec, 0.3 * shift)
        beside = min(abs(gap) for gap in gaps) <= reach
        between = min(gaps) < 0.0 < max(gaps)
        long = max(length, self.echo.length_arcsec)
        return (beside or between) and aside <= BEYOND + 0.5 * long


def true_sky(frame, x, y):
    """Return the true place of pixels of a frame, degrees."""
    ra, dec = frame.wcs.all_pix2world(x, y, 0)
    return float(ra), float(dec)


def stated_to_true(frame, stated, ra, dec):
    """Return the true place of one given in the coordinates that a header states."""
    return true_sky(frame, *stated.all_world2pix(ra, dec, 0))
