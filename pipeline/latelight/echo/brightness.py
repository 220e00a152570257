"""Surface brightness of dust sheets, and the dust column from brightness.

Optically thin, single scattering.  Dust that scatters a part ``tau`` of the light on
the way to the observer shows, wherever it lies, the intensity::

    I = F (D / r)**2 tau Phi(angle)        flux per steradian

with ``F`` the outburst's flux as the observer saw it, ``r`` the distance from dust to
source and ``Phi`` the phase function per steradian.  At any one time the outburst
lights a depth ``c w r / (r + l - D cos(theta))`` of a sight line, ``w`` its duration.
A sheet thinner than that shows its whole depth at the peak flux; of a thicker sheet
just that depth is lit.  In between, the peak is diluted from the width that the
outburst alone would give to the width of the whole profile, which is Sugerman 2003,
AJ 126, 1939, equation 7 (form confirmed by two quotations; original from memory)::

    I = (fluence) n_H sigma_sca Phi D**2 c dz / (r rho drho)

Magnitudes are of one band; the peak is the direct light's, dimmed by whatever dims
the echo as well.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_finite,
    checked_positive,
    require,
)
from latelight.echo.constants import (
    ARCSEC_PER_RADIAN,
    LIGHT_PC_PER_YEAR,
    METRES_PER_PARSEC,
)
from latelight.echo.dust import DustOptics, milky_way_dust, phase_function
from latelight.echo.ellipsoid import Ellipsoid
from latelight.echo.geometry import delay_gradient, scattering_angle_deg
from latelight.echo.profile_width import profile_width
from latelight.records import FloatArray

__all__ = [
    "DustColumn",
    "dust_column",
    "illuminated_depth_pc",
    "scattering_depth",
    "scattering_depth_from_brightness",
    "sheet_brightness_mag",
    "thick_sheet_brightness_mag",
    "thin_sheet_brightness_mag",
]

CM_PER_PARSEC = 100.0 * METRES_PER_PARSEC
MAG_PER_OPTICAL_DEPTH = 2.5 / np.log(10.0)
VISUAL_UM = 0.55


@dataclass(frozen=True, slots=True)
class DustColumn:
    """The dust along one sight line.

    Parameters
    ----------
    scattering_depth : float64
        Part of the light it scatters, the optical depth for scattering.
    hydrogen_cm2 : float64
        Hydrogen nuclei per cm2 that go with it.
    visual_extinction_mag : float64
        Its extinction at 0.55 micron.
    """

    scattering_depth: FloatArray
    hydrogen_cm2: FloatArray
    visual_extinction_mag: FloatArray


def scattering_depth(
    density_cm3: ArrayLike, length_pc: ArrayLike, dust: DustOptics
) -> FloatArray:
    """Return the optical depth for scattering of a length of dusty gas.

    Parameters
    ----------
    density_cm3 : array_like of float
        Hydrogen nuclei per cm3, positive.
    length_pc : array_like of float
        Length along the line of sight, pc, positive.
    dust : DustOptics
        Dust at the wavelength of the band.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    density = checked_positive(density_cm3, "density_cm3")
    length = checked_positive(length_pc, "length_pc")
    return density * length * CM_PER_PARSEC * dust.scattering_cm2


def illuminated_depth_pc(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    duration_yr: ArrayLike,
) -> FloatArray:
    """Return the length of a sight line that the outburst lights at once, pc.

    ``duration_yr`` is the outburst's fluence over its peak flux, Julian years,
    positive; other arguments and errors as for
    :func:`latelight.echo.geometry.depth_pc`.  For a distant source it is
    ``tau r / t``.
    """
    duration = checked_positive(duration_yr, "duration_yr")
    _, per_depth = delay_gradient(theta_deg, age_yr, distance_pc)
    return duration * LIGHT_PC_PER_YEAR / per_depth


def thin_sheet_brightness_mag(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    peak_mag: ArrayLike,
    scattering_depth: ArrayLike,
    asymmetry: ArrayLike,
) -> FloatArray:
    """Return the surface brightness of a sheet thinner than the lit depth.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc : array_like of float
        As for :func:`latelight.echo.geometry.depth_pc`.
    peak_mag : array_like of float
        Apparent magnitude of the outburst at its peak.
    scattering_depth : array_like of float
        Optical depth for scattering along the line of sight, positive.
    asymmetry : array_like of float
        ``g`` of :func:`latelight.echo.dust.phase_function`.

    Returns
    -------
    float64
        ``peak_mag - 2.5 log10(tau Phi (D / r)**2 / 206264.8**2)``, mag/arcsec2.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    depth = checked_positive(scattering_depth, "scattering_depth")
    per_depth = _mag_at_unit_depth(
        theta_deg, age_yr, distance_pc, peak_mag=peak_mag, asymmetry=asymmetry
    )
    return per_depth - 2.5 * np.log10(depth)


def thick_sheet_brightness_mag(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    peak_mag: ArrayLike,
    duration_yr: ArrayLike,
    density_cm3: ArrayLike,
    dust: DustOptics,
) -> FloatArray:
    """Return the surface brightness of a sheet thicker than the lit depth.

    Only the lit depth shines: ``(fluence) n sigma_sca (D / r)**2 (r / t) Phi`` for a
    distant source.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc, peak_mag : array_like of float
        As for :func:`thin_sheet_brightness_mag`.
    duration_yr : array_like of float
        The outburst's fluence over its peak flux, Julian years, positive.
    density_cm3 : array_like of float
        Hydrogen nuclei per cm3, positive.
    dust : DustOptics
        Dust at the wavelength of the band.

    Returns
    -------
    float64
        mag/arcsec2.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    lit = illuminated_depth_pc(theta_deg, age_yr, distance_pc, duration_yr=duration_yr)
    return thin_sheet_brightness_mag(
        theta_deg,
        age_yr,
        distance_pc,
        peak_mag=peak_mag,
        scattering_depth=scattering_depth(density_cm3, lit, dust),
        asymmetry=dust.asymmetry,
    )


def sheet_brightness_mag(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    peak_mag: ArrayLike,
    duration_yr: ArrayLike,
    thickness_pc: ArrayLike,
    density_cm3: ArrayLike,
    dust: DustOptics,
    psf_fwhm_arcsec: ArrayLike = 0.0,
    slope: ArrayLike = 0.0,
) -> FloatArray:
    """Return the surface brightness of a sheet of any thickness and slope.

    Equation 7 of Sugerman 2003 with the profile's width from
    :func:`latelight.echo.profile_width.profile_width`; it tends to the thin and the
    thick sheet, and with seeing it is the peak of the blurred profile.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc, peak_mag, duration_yr, density_cm3, dust
        As for :func:`thick_sheet_brightness_mag`.
    thickness_pc : array_like of float
        Thickness of the sheet along the line of sight, pc, positive.
    psf_fwhm_arcsec : array_like of float
        Seeing, arcsec (FWHM), zero or positive.
    slope : array_like of float
        As for :func:`latelight.echo.geometry.speed_arcsec_yr`.

    Returns
    -------
    float64
        mag/arcsec2.

    Raises
    ------
    ValueError
        If an argument is out of its range, or the sheet is tangent to the ellipsoid
        and its echo infinitely wide.
    """
    thickness = checked_positive(thickness_pc, "thickness_pc")
    width = profile_width(
        theta_deg,
        age_yr,
        distance_pc,
        duration_yr=checked_positive(duration_yr, "duration_yr"),
        thickness_pc=thickness,
        psf_fwhm_arcsec=psf_fwhm_arcsec,
        slope=slope,
    )
    require(
        np.isfinite(width.total),
        "slope",
        "other than that of the ellipsoid",
        as_floats(slope),
        cure="a tangent sheet lights up everywhere at once",
    )
    whole = thin_sheet_brightness_mag(
        theta_deg,
        age_yr,
        distance_pc,
        peak_mag=peak_mag,
        scattering_depth=scattering_depth(density_cm3, thickness, dust),
        asymmetry=dust.asymmetry,
    )
    return whole + 2.5 * np.log10(width.total / width.burst)


def scattering_depth_from_brightness(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    brightness_mag: ArrayLike,
    peak_mag: ArrayLike,
    asymmetry: ArrayLike,
) -> FloatArray:
    """Return the scattering depth that makes an echo as bright as seen.

    The inverse of :func:`thin_sheet_brightness_mag`.  For a thick sheet it is the
    depth of the lit part alone (:func:`illuminated_depth_pc`).  Results near 1 and
    more are beyond the optically thin form, and are lower limits.

    Parameters
    ----------
    theta_deg, age_yr, distance_pc, peak_mag, asymmetry : array_like of float
        As for :func:`thin_sheet_brightness_mag`.
    brightness_mag : array_like of float
        Surface brightness, mag/arcsec2.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    seen = checked_finite(brightness_mag, "brightness_mag")
    whole = _mag_at_unit_depth(
        theta_deg, age_yr, distance_pc, peak_mag=peak_mag, asymmetry=asymmetry
    )
    return 10.0 ** (0.4 * (whole - seen))


def dust_column(depth: ArrayLike, dust: DustOptics) -> DustColumn:
    """Return the column of dust and gas that goes with a scattering depth.

    Parameters
    ----------
    depth : array_like of float
        Optical depth for scattering at the wavelength of ``dust``, positive.
    dust : DustOptics
        Dust at the wavelength of the band.

    Returns
    -------
    DustColumn
        Its visual extinction is that of :func:`latelight.echo.dust.milky_way_dust`
        at 0.55 micron.

    Raises
    ------
    ValueError
        If the depth is not positive and finite.
    """
    scattered = checked_positive(depth, "depth")
    hydrogen = scattered / dust.scattering_cm2
    visual = milky_way_dust(VISUAL_UM).extinction_cm2
    return DustColumn(
        scattering_depth=scattered,
        hydrogen_cm2=hydrogen,
        visual_extinction_mag=MAG_PER_OPTICAL_DEPTH * hydrogen * visual,
    )


def _mag_at_unit_depth(
    theta_deg: ArrayLike,
    age_yr: ArrayLike,
    distance_pc: ArrayLike,
    *,
    peak_mag: ArrayLike,
    asymmetry: ArrayLike,
) -> FloatArray:
    """Return the surface brightness of a sheet of scattering depth 1."""
    peak = checked_finite(peak_mag, "peak_mag")
    e = Ellipsoid(theta_deg, age_yr, distance_pc)
    turned = scattering_angle_deg(theta_deg, age_yr, distance_pc)
    per_sr = phase_function(turned, asymmetry) * (e.distance / e.to_source) ** 2
    return peak - 2.5 * np.log10(per_sr / ARCSEC_PER_RADIAN**2)
