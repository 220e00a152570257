"""What is exactly known about a simulated frame and a simulated pair."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from latelight.records import BoolArray, FloatArray, PixelArray, Source
from latelight.simulation.astrometry import pixel_to_pixel
from latelight.sky import offset_position, position_angle, wrap_180

__all__ = [
    "EchoTruth",
    "FieldTruth",
    "FrameTruth",
    "PairTruth",
    "StarTruth",
    "TrackTruth",
    "TrailTruth",
    "decoys",
]


@dataclass(frozen=True, slots=True)
class EchoTruth:
    """One echo as a pair of epochs shows it, noise-free.

    Attributes
    ----------
    source : str
        Name of the outburst that lights it.
    ra, dec, x, y : float
        Middle of the bright ridge at the science epoch, degrees and science pixels.
    normal_pa : float
        Position angle of the motion from the earlier to the later epoch, degrees.
    speed_arcsec_yr : float
        Speed along it: 1 / |gradient of the delay|, half-way between the epochs.
    shift_arcsec, shift_px : float
        How far the ridge moved between the epochs.
    surface_brightness : float
        Peak of the ridge at the science epoch, mag/arcsec^2 above the atmosphere,
        after blurring by the PSF, smoothed over 5 arcsec along the ridge.
    length_arcsec : float
        Extent along the ridge above half of its peak.
    width_arcsec : float
        Full width at half maximum across the ridge, PSF included.
    depth_pc : float
        Depth of the dust at the ridge, pc from the source towards the observer.
    bound : float
        S/N of a perfect matched filter on the pair.
    bound_positive, bound_negative : float
        The same for each lobe of the difference alone.
    """

    source: str
    ra: float
    dec: float
    x: float
    y: float
    normal_pa: float
    speed_arcsec_yr: float
    shift_arcsec: float
    shift_px: float
    surface_brightness: float
    length_arcsec: float
    width_arcsec: float
    depth_pc: float
    bound: float
    bound_positive: float
    bound_negative: float


@dataclass(frozen=True, slots=True)
class TrackTruth:
    """One echo as all epochs of a field show it, noise-free.

    The front is followed from half-way between the first and the last epoch: the
    points of its bright ridge there each move along their own normal to where the
    delay has grown or shrunk by the time to an epoch.  Means over points are
    weighted with the ridge's brightness half-way.

    Attributes
    ----------
    source : str
        Name of the outburst that lights it.
    mjd : float
        Half-way between the first and the last epoch.
    ra, dec, x, y : float
        Middle of the bright ridge at ``mjd``, degrees, and pixels of the grid frame.
    normal_pa : float
        Position angle of the motion: mean gradient of the delay at ``mjd``, degrees.
    speed_arcsec_yr : float
        Mean way of the points from the first to the last epoch over the time
        between: what a straight line through the places measures.
    change_arcsec_yr2 : float
        Change of the speed: 4 (a + b) / T^2 with the mean ways a and b from ``mjd``
        to the first (negative) and the last epoch, T apart.
    offsets_arcsec : tuple of float
        Mean way from ``mjd`` to each epoch, negative before it.
    ras, decs : tuple of float
        The middle of the ridge moved by these along ``normal_pa``, degrees.
    surface_brightness : tuple of float
        Peak of the ridge at each epoch, mag/arcsec^2 above the atmosphere, blurred
        by that epoch's PSF, smoothed over 5 arcsec along the ridge.
    length_arcsec : float
        Extent along the ridge above half of its peak, on the grid frame.
    width_arcsec : float
        Full width at half maximum across the ridge, PSF included, there.
    depth_pc : float
        Depth of the dust at the middle, pc from the source towards the observer.
    bound_pairs : tuple of tuple of float, n x n
        S/N of a perfect matched filter on the difference of epochs i and j,
        ``sqrt(sum((f_i - f_j)^2 / (v_i + v_j)))`` over the pixels, f the echo and v
        the variance of one pixel on the grid frame's pixels and flux scale.
    bound_all : float
        S/N of the perfect filter on all epochs when the static sky is free in every
        pixel: ``sqrt(sum(sum_i w_i f_i^2 - (sum_i w_i f_i)^2 / sum_i w_i))`` with
        w = 1 / v.
    ridges : float64 array, shape (n, 2, m)
        RA and Dec of the points of the ridge at each epoch, degrees.
    weights : float64 array, shape (m,)
        Their brightness half-way, sum 1.
    """

    source: str
    mjd: float
    ra: float
    dec: float
    x: float
    y: float
    normal_pa: float
    speed_arcsec_yr: float
    change_arcsec_yr2: float
    offsets_arcsec: tuple[float, ...]
    ras: tuple[float, ...]
    decs: tuple[float, ...]
    surface_brightness: tuple[float, ...]
    length_arcsec: float
    width_arcsec: float
    depth_pc: float
    bound_pairs: tuple[tuple[float, ...], ...]
    bound_all: float
    ridges: FloatArray = field(compare=False, repr=False)
    weights: FloatArray = field(compare=False, repr=False)

    @property
    def bound_best(self) -> float:
        """Return the S/N of a perfect matched filter on the best pair of epochs."""
        return max(max(row) for row in self.bound_pairs)


@dataclass(frozen=True, slots=True)
class StarTruth:
    """The stars on one frame, in the order of the scene's catalogue.

    Attributes
    ----------
    x, y : float64 array, shape (n,)
        True pixel positions; some fall outside the frame.
    mag : float64 array, shape (n,)
        Magnitudes at this epoch.
    counts : float64 array, shape (n,)
        Total counts.
    variable : bool array, shape (n,)
        The magnitude differs between the epochs.
    """

    x: FloatArray
    y: FloatArray
    mag: FloatArray
    counts: FloatArray
    variable: BoolArray


@dataclass(frozen=True, slots=True)
class TrailTruth:
    """A satellite trail.

    Attributes
    ----------
    x, y : float
        A point on it, pixels.
    angle : float
        Pixel angle, degrees.
    peak_counts : float
        Height along its middle, counts per pixel.
    """

    x: float
    y: float
    angle: float
    peak_counts: float


@dataclass(frozen=True, slots=True)
class FrameTruth:
    """One simulated frame, taken apart.

    Attributes
    ----------
    wcs : astropy.wcs.WCS
        True world coordinates.
    zero_point : float
        True magnitude of one count.
    fwhm_px : float
        PSF width at the centre, pixels.
    stars : StarTruth
        The stars.
    expected : float32 array, shape (ny, nx)
        Noise-free counts before cosmic rays, saturation and bad columns.
    variance : float32 array, shape (ny, nx)
        True variance of one pixel there, counts squared.
    echoes : float32 array, shape (ny, nx)
        The part of ``expected`` that is echo.
    cosmic_rays, saturated, bad_columns : bool array, shape (ny, nx)
        Pixels with more cosmic-ray charge than one sigma of the sky; at or filled
        to the full well; faulty.
    trails : tuple of TrailTruth
        Satellite trails.
    movers : float64 array, shape (n, 3)
        x, y and magnitude of moving bodies.
    ghosts : float64 array, shape (n, 4)
        x, y, radius and height (pixels and counts) of ghosts and haloes.
    """

    wcs: Any
    zero_point: float
    fwhm_px: float
    stars: StarTruth
    expected: PixelArray
    variance: PixelArray
    echoes: PixelArray
    cosmic_rays: BoolArray
    saturated: BoolArray
    bad_columns: BoolArray
    trails: tuple[TrailTruth, ...]
    movers: FloatArray
    ghosts: FloatArray


@dataclass(frozen=True, slots=True)
class PairTruth:
    """Everything that is exactly known about a pair.

    Attributes
    ----------
    science, template : FrameTruth
        The two frames.
    scale : float
        Science counts per template count.
    later : {"science", "template"}
        Which frame was taken later.
    interval_yr : float
        Time between the epochs, Julian years, positive.
    echoes : tuple of EchoTruth
        The echoes, strongest bound first.
    sources : tuple of Source
        The outbursts in the list an astronomer would use.
    """

    science: FrameTruth
    template: FrameTruth
    scale: float
    later: str
    interval_yr: float
    echoes: tuple[EchoTruth, ...]
    sources: tuple[Source, ...]

    def science_to_template(
        self, x: ArrayLike, y: ArrayLike
    ) -> tuple[FloatArray, FloatArray]:
        """Return the exact template pixels of science pixels."""
        return pixel_to_pixel(
            self.science.wcs,
            self.template.wcs,
            np.asarray(x, dtype=float),
            np.asarray(y, dtype=float),
        )


@dataclass(frozen=True, slots=True)
class FieldTruth:
    """Everything that is exactly known about the epochs of a field.

    Attributes
    ----------
    frames : tuple of FrameTruth
        The frames, in order of time.
    mjds : tuple of float
        Middles of the exposures, rising.
    grid : int
        Index of the frame whose pixels and flux scale the echoes' numbers are in.
    sources : tuple of Source
        The outbursts in the list an astronomer would use.
    echoes : tuple of TrackTruth
        The echoes, largest ``bound_all`` first.
    """

    frames: tuple[FrameTruth, ...]
    mjds: tuple[float, ...]
    grid: int
    sources: tuple[Source, ...]
    echoes: tuple[TrackTruth, ...]

    def carry(
        self, start: int, end: int, x: ArrayLike, y: ArrayLike
    ) -> tuple[FloatArray, FloatArray]:
        """Return the exact pixels of frame ``end`` of pixels of frame ``start``."""
        return pixel_to_pixel(
            self.frames[start].wcs,
            self.frames[end].wcs,
            np.asarray(x, dtype=float),
            np.asarray(y, dtype=float),
        )


def decoys(
    rng: np.random.Generator,
    sources: tuple[Source, ...],
    *,
    ra: float,
    dec: float,
    count: int,
    min_apart_deg: float = 30.0,
) -> tuple[Source, ...]:
    """Draw sources that did not light anything, for judging origin scores.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    sources : tuple of Source
        The true ones, at least one; decoys take their distances and ages from them.
    ra, dec : float
        Centre of the field, degrees.
    count : int
        How many; small enough for them to fit around the circle.
    min_apart_deg : float
        Least difference of position angle, seen from the field, between any two.

    Raises
    ------
    ValueError
        If they do not fit.
    """
    taken = [float(position_angle(ra, dec, s.ra, s.dec)) for s in sources]
    made: list[Source] = []
    for _ in range(1000 * count):
        if len(made) == count:
            break
        pa = float(rng.uniform(0.0, 360.0))
        if np.min(np.abs(wrap_180(np.array(taken) - pa))) < min_apart_deg:
            continue
        like = sources[int(rng.integers(len(sources)))]
        away = float(rng.uniform(0.3, 5.0))
        place = offset_position(ra, dec, pa, away)
        made.append(
            Source(
                name=f"decoy {len(made) + 1}",
                ra=float(place[0]),
                dec=float(place[1]),
                distance_pc=(like.distance_pc or 1.0) * float(rng.uniform(0.6, 1.6)),
                distance_err_pc=like.distance_err_pc,
                age_yr=(like.age_yr or 1.0) * float(rng.uniform(0.5, 2.0)),
                age_err_yr=like.age_err_yr,
                age_at_mjd=like.age_at_mjd,
            )
        )
        taken.append(pa)
    if len(made) < count:
        msg = (
            f"count must let the decoys lie {min_apart_deg:g} deg apart, got {count}; "
            "ask for fewer or a smaller min_apart_deg"
        )
        raise ValueError(msg)
    return tuple(made)
