"""How wide an echo looks: outburst duration, dust thickness and seeing.

All three matter, and ignoring one fakes differences between echoes (Rest et al. 2011,
ApJ 732, 3).  The front sweeps the sheet at the echo's speed, so a longer outburst
and thicker dust are widened alike: fast echoes are wide echoes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import checked_error
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import delay_gradient, speed_arcsec_yr
from latelight.records import FloatArray

__all__ = ["ProfileWidth", "profile_width"]


@dataclass(frozen=True, slots=True)
class ProfileWidth:
    """Widths along the direction away from the source, FWHM, arcsec.

    Parameters
    ----------
    burst : float64
        From the duration of the outburst.
    dust : float64
        From the thickness of the dust.
    psf : float64
        From the seeing.
    total : float64
        All three; exact for Gaussians.
    """

    burst: FloatArray
    dust: FloatArray
    psf: FloatArray
    total: FloatArray


def profile_width(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    duration_yr: ArrayLike,
    thickness_pc: ArrayLike = 0.0,
    psf_fwhm_arcsec: ArrayLike = 0.0,
    slope: ArrayLike = 0.0,
) -> ProfileWidth:
    """Return the width of an echo's profile along the direction from the source.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc, slope : array_like of float
        As for :func:`latelight.echo.geometry.speed_arcsec_yr`.
    duration_yr : array_like of float
        Width of the outburst's light curve, Julian years (FWHM, or the fluence over
        the peak flux), zero or positive.
    thickness_pc : array_like of float
        Thickness of the dust along the line of sight, pc (FWHM), zero or positive.
    psf_fwhm_arcsec : array_like of float
        Seeing, arcsec (FWHM), zero or positive.

    Returns
    -------
    ProfileWidth
        Infinite where the sheet is tangent to the ellipsoid and its echo moves
        infinitely fast.

    Raises
    ------
    ValueError
        If an argument is out of its range.

    Notes
    -----
    ``burst = |mu| tau``.  Dust nearer by ``dl`` along the line of sight echoes
    earlier by ``(r + l - D cos(theta)) / r * dl / c``: thickness acts like that much
    duration.  For a distant source the widths are ``c tau r / (rho - s c t)`` and
    ``dz c t / (rho - s c t)``; Sugerman 2003, AJ 126, 1939 has the forms for
    ``s = 0`` (from memory).
    """
    durations, thicknesses, seeing = (
        checked_error(value, name)
        for value, name in (
            (duration_yr, "duration_yr"),
            (thickness_pc, "thickness_pc"),
            (psf_fwhm_arcsec, "psf_fwhm_arcsec"),
        )
    )
    speed = np.abs(speed_arcsec_yr(theta_deg, age_yr, distance_pc, slope))
    _, per_depth = delay_gradient(theta_deg, age_yr, distance_pc)
    spread = per_depth * thicknesses / LIGHT_PC_PER_YEAR
    # Nothing stays nothing on a sheet whose echo is infinitely fast.
    with np.errstate(invalid="ignore"):
        burst = np.where(durations > 0.0, speed * durations, 0.0)
        dust = np.where(spread > 0.0, speed * spread, 0.0)
    burst, dust, psf = np.broadcast_arrays(burst, dust, seeing)
    return ProfileWidth(
        burst=burst, dust=dust, psf=psf, total=np.sqrt(burst**2 + dust**2 + psf**2)
    )
