"""How dust scatters: phase function, albedo and cross-section."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import as_floats, require
from latelight.records import FloatArray

__all__ = ["DustOptics", "milky_way_dust", "phase_function"]

# Milky Way, R_V = 3.1: wavelength (micron), albedo, mean cosine of the scattering
# angle, extinction per hydrogen nucleus (1e-22 cm2).  After Weingartner & Draine 2001,
# ApJ 548, 296, and Draine 2003, ApJ 598, 1017; FROM MEMORY and rounded: good to about
# 5 % from 0.35 to 1 micron and 15 % beyond.
_MILKY_WAY = np.array(
    [
        (0.22, 0.44, 0.62, 15.5),  # the 2175 A bump: much extinction, little albedo
        (0.25, 0.54, 0.62, 11.6),
        (0.30, 0.58, 0.60, 9.0),
        (0.365, 0.61, 0.58, 7.6),
        (0.44, 0.65, 0.56, 6.4),
        (0.55, 0.67, 0.54, 4.9),
        (0.66, 0.67, 0.49, 3.8),
        (0.80, 0.65, 0.43, 2.8),
        (1.00, 0.60, 0.34, 1.95),
        (1.25, 0.53, 0.25, 1.35),
        (1.65, 0.43, 0.14, 0.84),
        (2.20, 0.31, 0.07, 0.54),
    ]
)


@dataclass(frozen=True, slots=True)
class DustOptics:
    """Optical properties of dust at a wavelength.

    Parameters
    ----------
    albedo : float64
        Scattered part of the extinction, 0-1.
    asymmetry : float64
        Mean cosine of the scattering angle, the ``g`` of :func:`phase_function`.
    extinction_cm2 : float64
        Extinction cross-section per hydrogen nucleus, cm2.
    """

    albedo: FloatArray
    asymmetry: FloatArray
    extinction_cm2: FloatArray

    @property
    def scattering_cm2(self) -> FloatArray:
        """Scattering cross-section per hydrogen nucleus, cm2."""
        return self.albedo * self.extinction_cm2


def milky_way_dust(wavelength_um: ArrayLike) -> DustOptics:
    """Return the properties of Milky-Way dust with R_V = 3.1.

    Interpolated over the logarithm of the wavelength in a table of Weingartner &
    Draine 2001, ApJ 548, 296, and Draine 2003, ApJ 598, 1017, that was written down
    from memory and rounded: good to about 5 % from 0.35 to 1 micron and 15 % beyond.

    Parameters
    ----------
    wavelength_um : array_like of float
        Wavelength, micron, 0.22 to 2.2.

    Returns
    -------
    DustOptics
        The asymmetry makes the phase function of :func:`phase_function`, which is
        good from about 0.4 to 1 micron only (Draine 2003, abstract).

    Raises
    ------
    ValueError
        If a wavelength is outside of the table.
    """
    wavelength = as_floats(wavelength_um)
    known, albedo, asymmetry, extinction = _MILKY_WAY.T
    require(
        (wavelength >= known[0]) & (wavelength <= known[-1]),
        "wavelength_um",
        f"in the table, {known[0]:g} to {known[-1]:g}",
        wavelength,
        cure="give the wavelength in micron, or DustOptics of your own",
    )
    place, nodes = np.log(wavelength), np.log(known)
    return DustOptics(
        albedo=np.interp(place, nodes, albedo),
        asymmetry=np.interp(place, nodes, asymmetry),
        extinction_cm2=1e-22 * np.exp(np.interp(place, nodes, np.log(extinction))),
    )


def phase_function(scattering_deg: ArrayLike, asymmetry: ArrayLike) -> FloatArray:
    """Return the part of the scattered light that goes a given way, per steradian.

    Henyey & Greenstein 1941, ApJ 93, 70 (from memory)::

        Phi = (1 - g**2) / (4 pi (1 + g**2 - 2 g cos(angle))**1.5)

    Its integral over all directions is 1 and its mean cosine ``g``.

    Parameters
    ----------
    scattering_deg : array_like of float
        Angle by which the light turns, degrees: 0 forward, 180 straight back.
    asymmetry : array_like of float
        ``g``: 0 for all directions alike, positive for forward, -1 < g < 1.

    Returns
    -------
    float64
        Per steradian.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    angle, g = as_floats(scattering_deg), as_floats(asymmetry)
    require((angle >= 0.0) & (angle <= 180.0), "scattering_deg", "in [0, 180]", angle)
    require(np.abs(g) < 1.0, "asymmetry", "between -1 and 1", g)
    # 1 + g**2 - 2 g mu, without the cancellation of a sharp forward peak.
    turn = (1.0 - g) ** 2 + 4.0 * g * np.sin(np.radians(angle) / 2.0) ** 2
    return (1.0 - g**2) / (4.0 * np.pi * turn**1.5)
