"""The differences of one field, gathered on its template's grid.

Every pair leaves its difference behind in a scratch file, already on the pixels
and the flux scale of the grid that all epochs of the field share; when the pairs
are done they are put together to a series.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from latelight.masks import MaskBit
from latelight.night.calibration import Calibration
from latelight.records import (
    Arc,
    ArcTrace,
    Difference,
    EpochSeries,
    FloatArray,
    MaskArray,
    Motion,
    PixelArray,
    PixelMap,
    Plane,
    TrackSeed,
)
from latelight.registration.pixel_map import evaluate, invert
from latelight.registration.resampling import resample
from latelight.registration.settings import RegistrationSettings
from latelight.sky import wrap_180
from latelight.statistics import robust_sigma

__all__ = [
    "DAYS_PER_YEAR",
    "Epoch",
    "Grid",
    "SeriesPart",
    "build_series",
    "group_parts",
    "seed_on_grid",
    "to_grid",
    "write_part",
]

DAYS_PER_YEAR = 365.25
# One pixel in so many, each way, tells how noisy an epoch is.
_NOISE_STRIDE = 5


@dataclass(frozen=True, slots=True)
class Grid:
    """The pixels that all epochs of a field share: those of one frame.

    Attributes
    ----------
    name, field, filter, chip : str
        Of the frame.
    mjd : float
        Its epoch, MJD.
    fwhm_px : float
        Its PSF width, pixels.
    variance : float
        Typical variance of one of its pixels, counts squared.
    shape : (int, int)
        Rows and columns.
    calibration : Calibration
        Its scales.
    """

    name: str
    field: str
    filter: str
    chip: str
    mjd: float
    fwhm_px: float
    variance: float
    shape: tuple[int, int]
    calibration: Calibration


@dataclass(frozen=True, slots=True)
class Epoch:
    """One epoch's difference on the grid, as a worker leaves it behind.

    Attributes
    ----------
    pixels, variance : float32 array, shape (ny, nx)
        Epoch minus static sky, counts of the grid's frame; variance of the epoch
        alone.
    mask : uint16 array, shape (ny, nx)
        Non-zero: do not use.
    template_variance : float
        Typical variance of the template in one pixel, when the template is an
        epoch of its own; 0 when it is made of the other epochs.
    """

    pixels: PixelArray
    variance: PixelArray
    mask: MaskArray
    template_variance: float


@dataclass(frozen=True, slots=True)
class SeriesPart:
    """What is known of one epoch of a series, its pixels being in a file.

    Attributes
    ----------
    file : Path
        Scratch file of the epoch.
    grid : Grid
        Where it lies.
    pair, name : str
        Of the pair, and of the science frame.
    mjd : float
        Its epoch, MJD.
    fwhm_px : float
        PSF width of the difference, pixels of the grid.
    template_variance : float
        Of :class:`Epoch`.
    seeds : tuple of TrackSeed
        Arcs of the pair that are worth a look, on the grid.
    noise_ratio : float or None
        Measured over predicted noise, where the pixels cannot tell: an epoch that has
        a part in its own template is quieter than its variance.
    """

    file: Path
    grid: Grid
    pair: str
    name: str
    mjd: float
    fwhm_px: float
    template_variance: float
    seeds: tuple[TrackSeed, ...]
    noise_ratio: float | None = None


def to_grid(
    difference: Difference,
    pixel_map: PixelMap,
    *,
    scale: float,
    template_share: float,
    shape: tuple[int, int],
    settings: RegistrationSettings,
) -> Epoch:
    """Bring a pair's difference onto its template's pixels and flux scale.

    Parameters
    ----------
    difference : Difference
        On the science frame's grid and scale.
    pixel_map : PixelMap
        Science pixels to template pixels.
    scale : float
        Science counts per template count.
    template_share : float
        Part of the variance that is the template's, 0 to 1.
    shape : (int, int)
        Shape of the template frame.
    settings : RegistrationSettings
        How to interpolate.
    """
    back = invert(pixel_map, shape=shape)
    plane = Plane(difference.pixels, difference.variance, difference.mask)
    moved = resample(plane, back, shape=shape, settings=settings)
    # A difference's noise is smooth already: interpolating hardly lowers it.  The
    # variance of ones says by how much white noise would be, pixel by pixel.
    ones = replace(plane, variance=np.ones_like(difference.variance))
    lowered = resample(ones, back, shape=shape, settings=settings).variance
    variance = moved.variance / (lowered * np.float32(scale**2))
    good = moved.mask == 0
    typical = float(np.median(variance[good])) if good.any() else 0.0
    return Epoch(
        pixels=np.where(good, moved.pixels / np.float32(scale), 0.0).astype(np.float32),
        variance=(variance * np.float32(1.0 - template_share)).astype(np.float32),
        mask=moved.mask,
        template_variance=template_share * typical,
    )


def write_part(file: Path, epoch: Epoch) -> None:
    """Write an epoch's arrays to a scratch file."""
    with file.open("wb") as stream:
        for array in (epoch.pixels, epoch.variance, epoch.mask):
            np.save(stream, array)


def _read_part(
    file: Path, pixels: PixelArray, variance: PixelArray, mask: MaskArray
) -> None:
    with file.open("rb") as stream:
        for array in (pixels, variance, mask):
            array[...] = np.load(stream)


def group_parts(parts: Iterable[SeriesPart]) -> list[tuple[SeriesPart, ...]]:
    """Return the parts of each series of three epochs or more, in order of time."""
    by_grid: dict[str, list[SeriesPart]] = defaultdict(list)
    for part in parts:
        by_grid[part.grid.name].append(part)
    groups = []
    for name in sorted(by_grid):
        group = sorted(by_grid[name], key=lambda part: (part.mjd, part.name))
        if len(group) + _has_template(group) >= 3:
            groups.append(tuple(group))
    return groups


def _has_template(parts: Sequence[SeriesPart]) -> bool:
    """Whether the template is an epoch of its own."""
    return parts[0].template_variance > 0.0


def build_series(parts: Sequence[SeriesPart]) -> EpochSeries:
    """Put the epochs of a field together, in order of time.

    Parameters
    ----------
    parts : sequence of SeriesPart
        All of one grid.
    """
    grid = parts[0].grid
    own = _has_template(parts)
    size = len(parts) + own
    pixels = np.zeros((size, *grid.shape), np.float32)
    variance = np.ones((size, *grid.shape), np.float32)
    mask = np.zeros((size, *grid.shape), np.uint16)
    for index, part in enumerate(parts):
        _read_part(part.file, pixels[index], variance[index], mask[index])
    names = [part.name for part in parts]
    mjd = [part.mjd for part in parts]
    fwhm = [part.fwhm_px for part in parts]
    if own:
        typical = float(np.mean([part.template_variance for part in parts]))
        # The pattern of the noise over the frame is nearly the same at all epochs.
        pattern = np.mean(variance[:-1], axis=0)
        sky = np.median(pattern[(mask[:-1] == 0).any(axis=0)])
        variance[-1] = pattern * np.float32(typical / sky)
        # Off all other epochs there is nothing to compare the template with.
        mask[-1] = np.where((mask[:-1] == 0).any(axis=0), 0, MaskBit.NO_DATA)
        names.append(grid.name)
        mjd.append(grid.mjd)
        fwhm.append(grid.fwhm_px)
    shared = parts[0].template_variance if own else 0.0
    ratio = [
        _noise_ratio(pixels[i], variance[i] + np.float32(shared), mask[i])
        if part.noise_ratio is None
        else part.noise_ratio
        for i, part in enumerate(parts)
    ]
    if own:
        ratio.append(float(np.median(ratio)))
    order = np.argsort(mjd, kind="stable")
    return EpochSeries(
        pixels=pixels[order],
        variance=variance[order],
        mask=mask[order],
        mjd=np.array(mjd)[order],
        fwhm_px=np.array(fwhm)[order],
        noise_ratio=np.array(ratio)[order],
        names=tuple(names[i] for i in order),
    )


def _noise_ratio(pixels: PixelArray, variance: PixelArray, mask: MaskArray) -> float:
    """Return measured over predicted noise of an epoch's difference."""
    step = np.s_[::_NOISE_STRIDE, ::_NOISE_STRIDE]
    good = mask[step] == 0
    if not good.any():
        return 1.0
    return robust_sigma(pixels[step][good] / np.sqrt(variance[step][good]))


def seed_on_grid(
    arc: Arc,
    motion: Motion,
    *,
    index: int,
    pair: str,
    pixel_map: PixelMap | None,
    epochs: tuple[float, float],
    fwhm_px: float,
) -> TrackSeed:
    """Turn an arc of a pair into the seed of a track.

    Parameters
    ----------
    arc, motion : Arc, Motion
        On the science frame's pixels.
    index : int
        Which arc of the pair it is.
    pair : str
        Name of the pair.
    pixel_map : PixelMap or None
        Science pixels to the grid's; None when they are the same.
    epochs : (float, float)
        MJD of the science and the template frame.
    fwhm_px : float
        PSF width of the difference, pixels.
    """
    science, template = epochs
    trace, angle, stretch = _moved(arc.trace, motion, pixel_map)
    speed = np.nan
    if np.isfinite(motion.shift_px):
        years = abs(science - template) / DAYS_PER_YEAR
        speed = motion.shift_px * stretch / years
    return TrackSeed(
        trace=trace,
        direction_angle=angle,
        speed_px_yr=speed,
        mjd=science if arc.sign > 0 else template,
        width_px=float(np.hypot(motion.width_px, fwhm_px)) * stretch,
        snr=arc.snr,
        origin=pair,
        arc=index,
    )


def _moved(
    trace: ArcTrace, motion: Motion, pixel_map: PixelMap | None
) -> tuple[ArcTrace, float, float]:
    """Return a trace, a direction and the stretch along it on another grid."""
    if pixel_map is None:
        return trace, motion.direction_angle, 1.0
    x, y = evaluate(pixel_map, trace.x, trace.y)
    normals, _ = _turned(pixel_map, trace.x, trace.y, trace.normal_angle)
    # Continuous along the ridge, as it was.
    first = normals[0]
    normals = first + np.cumsum(np.concatenate([[0.0], wrap_180(np.diff(normals))]))
    angle, stretch = _turned(
        pixel_map,
        np.array([motion.x]),
        np.array([motion.y]),
        np.array([motion.direction_angle]),
    )
    return ArcTrace(x, y, normals), float(angle[0]) % 360.0, float(stretch[0])


def _turned(
    pixel_map: PixelMap, x: FloatArray, y: FloatArray, angle: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return pixel angles on the other grid, and the stretch along them."""
    across, up = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    x0, y0 = evaluate(pixel_map, x - 0.5 * across, y - 0.5 * up)
    x1, y1 = evaluate(pixel_map, x + 0.5 * across, y + 0.5 * up)
    return np.degrees(np.arctan2(y1 - y0, x1 - x0)), np.hypot(x1 - x0, y1 - y0)
