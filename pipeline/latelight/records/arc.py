"""Arcs, and how they move."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from latelight.records.arrays import FloatArray

__all__ = ["Arc", "ArcTrace", "Motion"]


@dataclass(frozen=True, slots=True)
class ArcTrace:
    """The centre line of a ridge and its local normal.

    Attributes
    ----------
    x, y : float64 array, shape (n,)
        Points along the ridge, about one pixel apart, pixels.
    normal_angle : float64 array, shape (n,)
        Pixel angle of the normal at each point, degrees; continuous along the
        ridge, its sense is arbitrary.
    """

    x: FloatArray
    y: FloatArray
    normal_angle: FloatArray


@dataclass(frozen=True, slots=True)
class Arc:
    """One ridge found in a difference.

    Attributes
    ----------
    trace : ArcTrace
        Centre line of the brighter lobe of the two, or of the only one.
    sign : int
        +1 when the traced ridge is brighter in the science frame, -1 otherwise.
    snr : float
        Significance of the fitted profile (both lobes together), calibrated.
    x, y : float
        Middle of the trace, pixels.
    normal_angle, normal_angle_err : float
        Pixel angle of the normal at the middle, 0-180 degrees, and 1 sigma.
    curvature : float
        1 / radius, 1/pixel; positive when the centre of the circle lies on the
        side the trace's normals point to.
    length_px : float
        Along the ridge, pixels.
    width_px : float
        Full width at half maximum across, PSF taken out, pixels; 0 when the
        ridge is no wider than the PSF.
    surface_brightness_counts : float
        Mean height of the ridge, counts per pixel, without sign.
    shift_px : float
        Rough displacement between the lobes, pixels along the normal from the
        negative to the positive lobe; NaN when one lobe only.
    verdict : str
        ``"arc"`` when worth a look, else the reason it was set aside.
    """

    trace: ArcTrace
    sign: Literal[-1, 1]
    snr: float
    x: float
    y: float
    normal_angle: float
    normal_angle_err: float
    curvature: float
    length_px: float
    width_px: float
    surface_brightness_counts: float
    shift_px: float
    verdict: str


@dataclass(frozen=True, slots=True)
class Motion:
    """How an arc moved from the earlier to the later epoch.

    Attributes
    ----------
    direction_angle, direction_angle_err : float
        Pixel angle of the motion, degrees 0-360, and 1 sigma; along the normal.
    shift_px, shift_err_px : float
        Distance moved along the normal, positive; NaN when only one lobe shows.
    x, y : float
        Bright ridge at the science epoch, pixels.
    width_px, width_err_px : float
        Full width at half maximum across, PSF taken out, pixels.
    surface_brightness_counts, surface_brightness_err_counts : float
        Peak surface brightness of the echo at the science epoch (at the template
        epoch when it shows only there), counts per pixel.
    sense_odds : float
        log10 of the odds that the sense of motion is right.
    chi2 : float
        Reduced chi-square of the profile fit.
    lobes : int
        1 or 2.
    """

    direction_angle: float
    direction_angle_err: float
    shift_px: float
    shift_err_px: float
    x: float
    y: float
    width_px: float
    width_err_px: float
    surface_brightness_counts: float
    surface_brightness_err_counts: float
    sense_odds: float
    chi2: float
    lobes: Literal[1, 2]
