"""What a field would show of a source's echo: depth, motion, width, brightness."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import rice

from latelight.echo.brightness import (
    CM_PER_PARSEC,
    MAG_PER_OPTICAL_DEPTH,
    VISUAL_UM,
    sheet_brightness_mag,
)
from latelight.echo.constants import ARCSEC_PER_RADIAN, DAYS_PER_YEAR, LIGHT_PC_PER_YEAR
from latelight.echo.dust import milky_way_dust
from latelight.echo.geometry import (
    delay_gradient,
    depth_pc,
    observer_distance_pc,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.profile_width import profile_width
from latelight.echo.propagation import independent, propagate
from latelight.records import FloatArray

__all__ = ["Dust", "Outlook", "Valued", "outlook"]

# Lobes are apart when the echo has moved by this many of its widths.
_WIDTHS_APART = 2.0
# Shares of the sheets that are slower, and faster, than the range given.
_LOW, _HIGH = 0.16, 0.84


@dataclass(frozen=True, slots=True, kw_only=True)
class Dust:
    """The dust that is looked for, and how.

    Attributes
    ----------
    visual_extinction : float
        Of its column, mag.
    thickness_pc : float
        Along the line of sight, FWHM, pc.
    wavelength_um : float
        Of the band, micron.
    seeing_arcsec : float
        FWHM.
    tilt_scale : float
        1 sigma of either slope of a sheet.
    """

    visual_extinction: float
    thickness_pc: float
    wavelength_um: float
    seeing_arcsec: float
    tilt_scale: float


@dataclass(frozen=True, slots=True)
class Valued:
    """A number and its 1-sigma error."""

    value: float
    err: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Outlook:
    """What is to be expected in one direction.

    Attributes
    ----------
    depth : Valued
        Of the dust, pc from the source, positive towards the observer.
    source_distance, observer_distance : Valued
        From dust to source and to observer, pc.
    scattering_angle : Valued
        Degrees, 0 is forward.
    speed : Valued
        Of a sheet across the line to the source, arcsec per Julian year.
    slow, fast : float
        Speeds below and above which 16 % of tilted sheets move, arcsec per year.
    width : Valued
        Of the profile along the motion, FWHM, arcsec.
    baseline : Valued
        Days in which it moves two of its widths, so that its lobes are apart.
    brightness : Valued or None
        Peak surface brightness, mag/arcsec^2; None without a peak magnitude.
    """

    depth: Valued
    source_distance: Valued
    observer_distance: Valued
    scattering_angle: Valued
    speed: Valued
    slow: float
    fast: float
    width: Valued
    baseline: Valued
    brightness: Valued | None


def outlook(
    theta_deg: float,
    age_yr: float,
    distance_pc: float,
    *,
    dust: Dust,
    duration_days: float,
    age_err_yr: float = 0.0,
    distance_err_pc: float = 0.0,
    peak_mag: float | None = None,
) -> Outlook:
    """Return what is to be expected at an angle from a source.

    Parameters
    ----------
    theta_deg : float
        Angle from the source, degrees, above 0 and less than 90.
    age_yr, age_err_yr : float
        Julian years since the outburst's light arrived, positive, and 1 sigma.
    distance_pc, distance_err_pc : float
        Distance of the source, positive, and 1 sigma, pc.
    dust : Dust
        The dust that is looked for.
    duration_days : float
        Width of the outburst's light curve, days, positive.
    peak_mag : float or None
        Apparent magnitude at its peak; the brightness is unknown without.

    Returns
    -------
    Outlook
        Errors are those of age and distance, to first order.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """

    def numbers(values: FloatArray) -> tuple[FloatArray, ...]:
        here = (theta_deg, values[0], values[1])
        speed = speed_arcsec_yr(*here)
        width = profile_width(
            *here,
            duration_yr=duration_days / DAYS_PER_YEAR,
            thickness_pc=dust.thickness_pc,
            psf_fwhm_arcsec=dust.seeing_arcsec,
        ).total
        found = [
            depth_pc(*here),
            source_distance_pc(*here),
            observer_distance_pc(*here),
            scattering_angle_deg(*here),
            speed,
            width,
            _WIDTHS_APART * width / speed * DAYS_PER_YEAR,
        ]
        if peak_mag is not None:
            found.append(_brightness(here, dust, duration_days, peak_mag))
        return tuple(found)

    if not theta_deg > 0.0:
        msg = f"theta_deg must be above 0, got {theta_deg:g}: no motion straight ahead"
        raise ValueError(msg)
    values, covariance = propagate(
        numbers,
        np.array([age_yr, distance_pc]),
        independent(age_err_yr, distance_err_pc),
    )
    found = [
        Valued(float(v), float(np.sqrt(max(e, 0.0))))
        for v, e in zip(values, np.diag(covariance), strict=True)
    ]
    slow, fast = _speeds(theta_deg, age_yr, distance_pc, dust.tilt_scale)
    return Outlook(
        depth=found[0],
        source_distance=found[1],
        observer_distance=found[2],
        scattering_angle=found[3],
        speed=found[4],
        slow=slow,
        fast=fast,
        width=found[5],
        baseline=found[6],
        brightness=found[7] if peak_mag is not None else None,
    )


def _speeds(
    theta_deg: float, age_yr: float, distance_pc: float, tilt_scale: float
) -> tuple[float, float]:
    """Return the speeds that all but 16 % of tilted sheets exceed, and stay below.

    The delay's gradient is that of a flat sheet plus two independent Gaussians, so its
    length has the distribution of Rice (1945, Bell Syst. Tech. J. 24, 46; from memory),
    and the echo's speed is that of light over it.
    """
    across, per_tilt = delay_gradient(theta_deg, age_yr, distance_pc)
    to_observer = observer_distance_pc(theta_deg, age_yr, distance_pc)
    scatter = float(per_tilt) * tilt_scale
    steep, gentle = rice.ppf([_HIGH, _LOW], float(across) / scatter, scale=scatter)
    light = ARCSEC_PER_RADIAN * LIGHT_PC_PER_YEAR / float(to_observer)
    return float(light / steep), float(light / gentle)


def _brightness(
    here: tuple[float, float, float], dust: Dust, duration_days: float, peak_mag: float
) -> FloatArray:
    """Return the surface brightness of a sheet of the dust column, mag/arcsec^2."""
    per_hydrogen = MAG_PER_OPTICAL_DEPTH * milky_way_dust(VISUAL_UM).extinction_cm2
    column = dust.visual_extinction / float(per_hydrogen)
    return sheet_brightness_mag(
        *here,
        peak_mag=peak_mag,
        duration_yr=duration_days / DAYS_PER_YEAR,
        thickness_pc=dust.thickness_pc,
        density_cm3=column / (dust.thickness_pc * CM_PER_PARSEC),
        dust=milky_way_dust(dust.wavelength_um),
        psf_fwhm_arcsec=dust.seeing_arcsec,
    )
