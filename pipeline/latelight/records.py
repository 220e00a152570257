"""What travels between the stages: frozen records of arrays and numbers.

Conventions, everywhere in the package:

- arrays are ``[row, col]`` = ``[y, x]``; pixel centres are integers, the first is 0;
- pixels and variances are float32 in native byte order and C order, masks uint16
  bits of :class:`latelight.masks.MaskBit`, non-zero = do not use;
- bad pixels hold finite filler values: always read them together with the mask;
- pixel angles are degrees counter-clockwise from +x towards +y;
- position angles are degrees east of north on the sky, 0-360;
- depth is in pc along the line of sight from the source, positive towards the
  observer; time in Julian years since the outburst's light reached the observer.

No stage imports another; they share these records only.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "Alignment",
    "Arc",
    "ArcTrace",
    "CompactResidual",
    "Difference",
    "FloatArray",
    "Frame",
    "MaskArray",
    "MatchedPair",
    "Motion",
    "OriginScore",
    "PixelArray",
    "PixelMap",
    "Plane",
    "Source",
    "SpatialKernel",
    "SpatialPsf",
    "StarList",
]

FloatArray = NDArray[np.float64]
PixelArray = NDArray[np.float32]
MaskArray = NDArray[np.uint16]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Plane:
    """Pixels with their variance and mask, all of one shape.

    Attributes
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts, sky included.
    variance : float32 array, shape (ny, nx)
        Variance of one pixel, counts squared; finite and positive everywhere.
    mask : uint16 array, shape (ny, nx)
        Bits of :class:`latelight.masks.MaskBit`.
    noise_power : float64 array, shape (64, 64), or None
        Power spectrum of the noise on the FFT's frequency grid, mean 1, where
        resampling has correlated it; None for white noise.
    """

    pixels: PixelArray
    variance: PixelArray
    mask: MaskArray
    noise_power: FloatArray | None = None


@dataclass(frozen=True, slots=True)
class Frame:
    """One image of one exposure, with what its header says.

    Attributes
    ----------
    name : str
        Unique in a night: the file's stem, with the chip when there are several.
    path : Path
        The file it came from.
    chip : str
        Extension name or number; empty for a file with one image.
    plane : Plane
        Pixels, variance and mask.
    wcs : astropy.wcs.WCS or None
        Checked celestial WCS; None when the frame has none.
    mjd : float
        Middle of the exposure, MJD (UTC).
    exposure_s : float
        Exposure time, seconds.
    filter : str
        Filter word.
    field : str
        Field word; empty when the header has none.
    gain : float
        Electrons per count.
    read_noise : float
        Electrons, 1 sigma.
    saturation : float
        Counts at which the detector saturates; ``inf`` when unknown.
    zero_point : float or None
        Magnitude of one count per exposure; None when unknown.
    notes : tuple of str
        What was estimated, assumed or left out, in words for the log.
    """

    name: str
    path: Path
    chip: str
    plane: Plane
    wcs: Any
    mjd: float
    exposure_s: float
    filter: str
    field: str
    gain: float
    read_noise: float
    saturation: float
    zero_point: float | None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class StarList:
    """Stars of one frame, brightest first, with the frame's sky.

    Attributes
    ----------
    x, y : float64 array, shape (n,)
        Windowed centroids, pixels.
    position_err : float64 array, shape (n,)
        1-sigma error of each coordinate, pixels.
    flux, flux_err : float64 array, shape (n,)
        Counts above the sky in an aperture, and 1 sigma.
    peak : float64 array, shape (n,)
        Highest pixel above the sky, counts.
    fwhm : float64 array, shape (n,)
        Full width at half maximum, pixels.
    elongation : float64 array, shape (n,)
        Long over short axis, >= 1.
    saturated : bool array, shape (n,)
        A saturated or bled pixel lies in the star.
    clean : bool array, shape (n,)
        Point-like, unsaturated, unmasked and not blended: fit for alignment,
        PSF and kernel.
    sky : float32 array, shape (ny, nx)
        Smooth sky level, counts.
    fwhm_px : float
        Median width of the clean stars, pixels.
    """

    x: FloatArray
    y: FloatArray
    position_err: FloatArray
    flux: FloatArray
    flux_err: FloatArray
    peak: FloatArray
    fwhm: FloatArray
    elongation: FloatArray
    saturated: BoolArray
    clean: BoolArray
    sky: PixelArray
    fwhm_px: float

    def __len__(self) -> int:
        return int(self.x.size)


@dataclass(frozen=True, slots=True)
class PixelMap:
    """A smooth map from science pixels to template pixels.

    Attributes
    ----------
    node_y, node_x : float64 array, shape (my,), (mx,)
        Science pixel coordinates of the nodes; they cover the whole frame.
    map_y, map_x : float64 array, shape (my, mx)
        Template coordinates at the nodes; cubic splines join them.
    error_px : float
        Estimated 1-sigma error of the map in each coordinate, pixels.
    """

    node_y: FloatArray
    node_x: FloatArray
    map_y: FloatArray
    map_x: FloatArray
    error_px: float


@dataclass(frozen=True, slots=True)
class Alignment:
    """The map between two frames and the stars that carry it.

    Attributes
    ----------
    pixel_map : PixelMap
        Science pixels to template pixels.
    science_index, template_index : int64 array, shape (n_matched,)
        Rows of the two star lists that are one star.
    rms_px : float
        Residual of the kept stars after the fit, per coordinate, pixels.
    method : str
        ``"wcs"`` when the headers' WCS led, ``"asterisms"`` otherwise.
    """

    pixel_map: PixelMap
    science_index: IntArray
    template_index: IntArray
    rms_px: float
    method: Literal["wcs", "asterisms"]


@dataclass(frozen=True, slots=True)
class SpatialKernel:
    """A convolution kernel that varies over the frame as a polynomial.

    ``K(x, y) = sum_t planes[t] * u**i_t * v**j_t`` with ``(i_t, j_t) =
    exponents[t]``, ``u = 2 x / (nx - 1) - 1`` and ``v = 2 y / (ny - 1) - 1``.

    Attributes
    ----------
    planes : float64 array, shape (n_terms, k, k)
        Kernel image of each term, k odd, centre at ``k // 2``.
    exponents : tuple of (int, int)
        Powers of u and v of each term.
    shape : (int, int)
        Shape (ny, nx) of the frame it belongs to.
    """

    planes: FloatArray
    exponents: tuple[tuple[int, int], ...]
    shape: tuple[int, int]

    def at(self, x: float, y: float) -> FloatArray:
        """Return the kernel at one place, shape (k, k)."""
        ny, nx = self.shape
        u = 2.0 * x / max(nx - 1, 1) - 1.0
        v = 2.0 * y / max(ny - 1, 1) - 1.0
        weights = np.array([u**i * v**j for i, j in self.exponents])
        return np.tensordot(weights, self.planes, axes=1)


@dataclass(frozen=True, slots=True)
class SpatialPsf:
    """The unit-sum PSF of one frame, varying over it as a polynomial.

    Attributes
    ----------
    kernel : SpatialKernel
        The PSF image at any place.
    fwhm_px : float
        Full width at half maximum at the centre of the frame, pixels.
    n_stars : int
        Stars it was made from.
    """

    kernel: SpatialKernel
    fwhm_px: float
    n_stars: int


@dataclass(frozen=True, slots=True)
class MatchedPair:
    """Two frames on one pixel grid, one PSF and one flux scale (the science's).

    Attributes
    ----------
    science, template : Plane
        ``science.pixels - template.pixels`` is the difference, up to a smooth
        background.  Variances are of one pixel, correlation allowed for.
    model : float32 array, shape (ny, nx)
        The matched template above its sky: what stars look like, counts.
    convolved : str
        Which frame was convolved with the fitted kernel.
    kernel : SpatialKernel
        The fitted kernel; its sum is the photometric scale or its inverse.
    smoothing_px : float
        Sigma of the Gaussian given to the other frame first so that the kernel
        need not sharpen; 0 when none was needed.
    scale, scale_err : float
        Science counts per template count, and 1 sigma.
    fwhm_px : float
        PSF width of the matched frames, pixels.
    n_fit, n_held_out : int
        Stars in the fit, and kept out to judge it.
    held_out_chi2 : float
        Median reduced chi-square of the held-out stars against photon and read
        noise alone; NaN when none could be spared.
    """

    science: Plane
    template: Plane
    model: PixelArray
    convolved: Literal["template", "science"]
    kernel: SpatialKernel
    smoothing_px: float
    scale: float
    scale_err: float
    fwhm_px: float
    n_fit: int
    n_held_out: int
    held_out_chi2: float


@dataclass(frozen=True, slots=True)
class CompactResidual:
    """A compact source in a difference: a variable star or a moving body.

    Attributes
    ----------
    x, y : float
        Science pixel coordinates.
    flux, flux_err : float
        Counts, signed: positive is brighter in the science frame.
    snr : float
        Signed significance.
    fwhm_px : float
        Width, pixels.
    kind : str
        ``"variable"`` on a star of either frame, ``"new"`` where there is none.
    """

    x: float
    y: float
    flux: float
    flux_err: float
    snr: float
    fwhm_px: float
    kind: Literal["variable", "new"]


@dataclass(frozen=True, slots=True)
class Difference:
    """Science minus template, on the science frame's grid and flux scale.

    Attributes
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts; zero where masked.
    variance : float32 array, shape (ny, nx)
        Variance of one pixel, counts squared, with the star-residual term.
    mask : uint16 array, shape (ny, nx)
        Bits of both frames, compact residuals included.
    fwhm_px : float
        PSF width of the difference, pixels.
    noise_ratio : float
        Measured over predicted noise (1 sigma) in blank sky.
    method : str
        ``"kernel"`` or ``"proper"``.
    compact : tuple of CompactResidual
        Compact residuals, most significant first.
    star_scatter, star_shift_px : float
        The two coefficients of the star-residual noise: fraction of the model,
        and pixels of its gradient.
    """

    pixels: PixelArray
    variance: PixelArray
    mask: MaskArray
    fwhm_px: float
    noise_ratio: float
    method: Literal["kernel", "proper"]
    compact: tuple[CompactResidual, ...]
    star_scatter: float
    star_shift_px: float


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


@dataclass(frozen=True, slots=True)
class Source:
    """A past outburst that may have lit an echo.

    Attributes
    ----------
    name : str
        Its name.
    ra, dec : float
        Degrees, ICRS.
    distance_pc, distance_err_pc : float or None
        Distance from the observer, pc; None when unknown.
    age_yr, age_err_yr : float or None
        Julian years since its light arrived, at ``age_at_mjd``.
    age_at_mjd : float or None
        MJD at which the age holds.
    """

    name: str
    ra: float
    dec: float
    distance_pc: float | None = None
    distance_err_pc: float | None = None
    age_yr: float | None = None
    age_err_yr: float | None = None
    age_at_mjd: float | None = None


@dataclass(frozen=True, slots=True)
class OriginScore:
    """How well one source explains one moving arc.

    Attributes
    ----------
    source : str
        Name of the source.
    score : float
        log10 likelihood ratio against random directions.
    away_angle : float
        Motion minus the direction away from the source, degrees, +-180.
    separation_deg : float
        Angle between arc and source on the sky.
    dust_depth_pc, dust_depth_err_pc : float
        Depth of the dust for this source, pc, positive towards the observer;
        NaN when distance or age is unknown.
    """

    source: str
    score: float
    away_angle: float
    separation_deg: float
    dust_depth_pc: float = field(default=float("nan"))
    dust_depth_err_pc: float = field(default=float("nan"))
