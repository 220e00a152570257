"""Random fields of many epochs with exact truth."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from latelight.records import FloatArray, Source
from latelight.simulation.backdrop import (
    Kind,
    SimulatedFrame,
    check_order,
    random_backdrop,
    random_clutter,
    standard_header,
)
from latelight.simulation.conditions import random_camera, random_exposure
from latelight.simulation.exposures import Camera, Exposure
from latelight.simulation.following import measure_track
from latelight.simulation.observing import Scene, observe
from latelight.simulation.outbursts import (
    EchoPlan,
    Outburst,
    flat_speed,
    place_echoes,
)
from latelight.simulation.scenes import random_outbursts
from latelight.simulation.truth import FieldTruth, FrameTruth, decoys
from latelight.simulation.writing import write_image

__all__ = [
    "SimulatedField",
    "light_width",
    "look_at_field",
    "random_cadence",
    "random_exposures",
    "random_field",
    "usual_ways",
    "widest_light",
]

# Way of a usual echo between one epoch and the next, arcsec ...
STEPS_ARCSEC = (1.5, 5.0)
# ... and between the two of a field that has no more.
PAIR_SHIFTS_ARCSEC = (2.2, 13.2)
# The way from the first epoch to the last over the width of the echo.
SEVERAL_WIDTHS = 3.0
SEEING_ARCSEC = 1.3
# Longest and shortest mean time between epochs, Julian years.
INTERVALS_YR = (12.0 / 365.25, 1.5)
# By how much the intervals of a field differ from their mean.
UNEVENNESS = 0.35
# Clouds of fields of many epochs end beyond the whole way of the light.
CLOUD_DEPTHS = (1.2, 1.8)
N_DECOYS = 6
DECOYS_APART_DEG = 25.0


@dataclass(frozen=True, slots=True)
class SimulatedField:
    """Several epochs of one field, and the truth.

    Attributes
    ----------
    name : str
        Field word in the headers.
    frames : tuple of SimulatedFrame
        The frames, in order of time.
    truth : FieldTruth
        What is exactly known about them.
    decoys : tuple of Source
        Outbursts that lit nothing here, to be listed beside the true ones.
    """

    name: str
    frames: tuple[SimulatedFrame, ...]
    truth: FieldTruth
    decoys: tuple[Source, ...] = ()

    def write(self, folder: Path, *, stem: str = "epoch") -> tuple[Path, ...]:
        """Write ``epoch_1.fits`` and so on; return their paths.

        Raises
        ------
        ProductError
            If a file cannot be written.
        """
        return tuple(
            write_image(
                Path(folder) / f"{stem}_{number}.fits", frame.pixels, frame.header
            )
            for number, frame in enumerate(self.frames, start=1)
        )


def random_field(
    seed: int,
    *,
    epochs: int = 5,
    size: int = 1024,
    kind: Kind = "echoes",
    brightness: tuple[float, float] = (21.5, 24.5),
    n_echoes: int | None = None,
    n_stars: int | None = None,
) -> SimulatedField:
    """Make several epochs of a random field.

    Seeing, sky, transparency, pointing and rotation differ from epoch to epoch.  The
    intervals are roughly, not exactly, even, and such that an echo of usual speed
    moves 1.5-5 arcsec from one epoch to the next; clouds reach across the whole way,
    so that every echo shines at every epoch, patchily.

    Parameters
    ----------
    seed : int
        The same seed and arguments give the same field.
    epochs : int
        How many, at least two.
    size : int
        Side of the frames, pixels, at least 256.
    kind : {"echoes", "nuisances"}
        Echoes among ordinary sky and moderate nuisances; or no echo and plenty of
        nuisances.
    brightness : (float, float)
        Range of the echoes' peak surface brightness at the middle epoch,
        mag/arcsec^2.
    n_echoes : int, optional
        How many; by default 6-8, fewer in small frames.
    n_stars : int, optional
        Stars of 13 to 23 mag on a frame; by default 36 per square arcminute.

    Raises
    ------
    ValueError
        If ``kind`` is unknown, ``size`` or ``epochs`` too small, or the echoes do not
        fit into the frame.
    """
    check_order(kind, size)
    if epochs < 2:
        msg = f"epochs must be at least 2, got {epochs}"
        raise ValueError(msg)
    streams = np.random.SeedSequence(seed).spawn(3 + epochs)
    conditions, *rest = (np.random.default_rng(s) for s in streams)
    camera = random_camera(conditions, (size, size), many_columns=kind == "nuisances")
    ra, dec = conditions.uniform(0.0, 360.0), conditions.uniform(-65.0, 65.0)
    mjd = conditions.uniform(60_000.0, 61_500.0)
    outbursts = _brief_outbursts(conditions, camera, ra, dec, mjd, epochs)
    speeds = [flat_speed(o.source, ra, dec, mjd) for o in outbursts]
    widths = [light_width(o, ra, dec, mjd) for o in outbursts]
    days = random_cadence(
        conditions, epochs, speed=float(np.mean(speeds)), width=max(widths)
    )
    exposures = random_exposures(
        conditions, camera, ra=ra, dec=dec, mjds=mjd + days, field=f"SIM-{seed}"
    )
    dust = rest[0]
    room = min(1.0, (size / 1024) ** 2)
    count = max(1, round(int(dust.integers(6, 9)) * room))
    if n_echoes is not None or kind == "nuisances":
        count = 0 if kind == "nuisances" else int(n_echoes or 0)
    plan = EchoPlan(
        count=count,
        brightness=brightness,
        shifts=usual_ways(epochs),
        depth=CLOUD_DEPTHS,
    )
    field = look_at_field(
        outbursts, exposures, plan=plan, kind=kind, n_stars=n_stars, rngs=rest
    )
    unlit = decoys(
        conditions,
        field.truth.sources,
        ra=ra,
        dec=dec,
        count=N_DECOYS,
        min_apart_deg=DECOYS_APART_DEG,
    )
    return replace(field, decoys=unlit)


def random_cadence(
    rng: np.random.Generator, epochs: int, *, speed: float, width: float
) -> FloatArray:
    """Draw epochs between which echoes move as is usual, and several widths in all.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    epochs : int
        How many.
    speed : float
        Of a usual echo, arcsec/yr.
    width : float
        Way of an echo while the light lasts, arcsec.

    Returns
    -------
    float64 array, shape (epochs,)
        Days from the middle of the span, rising.
    """
    low, high = _way_of(epochs)
    if epochs > 2:
        low = min(max(low, SEVERAL_WIDTHS * np.hypot(width, SEEING_ARCSEC)), high)
    way = low * (high / low) ** rng.random()
    shortest, longest = (years * (epochs - 1) for years in INTERVALS_YR)
    span = float(np.clip(way / speed, shortest, longest)) * 365.25
    intervals = 1.0 + UNEVENNESS * rng.uniform(-1.0, 1.0, epochs - 1)
    days = np.append(0.0, np.cumsum(intervals / intervals.sum())) * span
    return days - 0.5 * span


def _way_of(epochs: int) -> tuple[float, float]:
    """Return the range of a usual echo's way from the first epoch to the last."""
    if epochs == 2:
        return PAIR_SHIFTS_ARCSEC
    return STEPS_ARCSEC[0] * (epochs - 1), STEPS_ARCSEC[1] * (epochs - 1)


def usual_ways(epochs: int) -> tuple[float, float]:
    """Return the range of any echo's way: sheets change the speed by 60 %."""
    low, high = _way_of(epochs)
    return 0.6 * low, 1.6 * high


def widest_light(epochs: int) -> float:
    """Return the largest way of an echo while its light lasts, arcsec.

    With more than two epochs the whole way must be several widths.
    """
    return np.inf if epochs == 2 else _way_of(epochs)[1] / SEVERAL_WIDTHS


def random_exposures(
    rng: np.random.Generator,
    camera: Camera,
    *,
    ra: float,
    dec: float,
    mjds: Iterable[float],
    field: str,
) -> tuple[Exposure, ...]:
    """Draw the conditions of all epochs of a field, in nights of unlike seeing.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    camera : Camera
        The camera.
    ra, dec : float
        Where the telescope should point, degrees.
    mjds : iterable of float
        Middles of the exposures, rising.
    field : str
        Word for the headers.
    """
    best = rng.uniform(1.0, 1.4) / camera.scale_arcsec
    return tuple(
        random_exposure(
            rng,
            camera,
            ra=ra,
            dec=dec,
            mjd=float(mjd),
            fwhm_px=best * float(rng.uniform(1.0, 1.4)),
            field=field,
        )
        for mjd in mjds
    )


def look_at_field(
    outbursts: tuple[Outburst, ...],
    exposures: tuple[Exposure, ...],
    *,
    plan: EchoPlan,
    kind: Kind,
    n_stars: int | None,
    rngs: Sequence[np.random.Generator],
) -> SimulatedField:
    """Draw a field's sky, take its exposures and put its truth together.

    Parameters
    ----------
    outbursts : tuple of Outburst
        What lights its echoes.
    exposures : tuple of Exposure
        The epochs, in order of time.
    plan : EchoPlan
        Its echoes; the brightness is that of the middle epoch.
    kind : {"echoes", "nuisances"}
        How much there is of what may look like an echo.
    n_stars : int or None
        Stars of 13 to 23 mag on a frame; None for the usual density.
    rngs : sequence of numpy.random.Generator
        For dust, for the ordinary sky, and one for every epoch's clutter and noise.

    Raises
    ------
    ValueError
        If the echoes do not fit into the frame.
    """
    dust, sky, *nights = rngs
    grid = len(exposures) // 2
    middle = exposures[grid]
    others = exposures[:grid] + exposures[grid + 1 :]
    echoes = place_echoes(dust, outbursts, plan=plan, exposures=(middle, *others))
    scene = random_backdrop(
        sky,
        middle,
        n_stars=n_stars,
        kind=kind,
        echoes=echoes,
        n_epochs=len(exposures),
    )
    size = middle.camera.shape[0]
    taken = [
        observe(
            scene,
            exposure,
            epoch=epoch,
            clutter=random_clutter(rng, size, kind),
            rng=rng,
        )
        for epoch, (exposure, rng) in enumerate(zip(exposures, nights, strict=True))
    ]
    return SimulatedField(
        name=middle.field,
        frames=tuple(
            SimulatedFrame(pixels=pixels, header=standard_header(exposure))
            for exposure, (pixels, _) in zip(exposures, taken, strict=True)
        ),
        truth=_field_truth(
            scene, exposures, [truth for _, truth in taken], outbursts, grid
        ),
    )


def _field_truth(
    scene: Scene,
    exposures: tuple[Exposure, ...],
    frames: list[FrameTruth],
    outbursts: tuple[Outburst, ...],
    grid: int,
) -> FieldTruth:
    variances = [frame.variance for frame in frames]
    tracks = [
        measure_track(echo, exposures, variances=variances, grid=grid)
        for echo in scene.echoes
    ]
    return FieldTruth(
        frames=tuple(frames),
        mjds=tuple(exposure.mjd for exposure in exposures),
        grid=grid,
        sources=tuple(outburst.source for outburst in outbursts),
        echoes=tuple(sorted(tracks, key=lambda track: -track.bound_all)),
    )


def light_width(outburst: Outburst, ra: float, dec: float, mjd: float) -> float:
    """Return how far a usual echo moves while its outburst lasts, arcsec."""
    speed = flat_speed(outburst.source, ra, dec, mjd)
    return speed * outburst.light_curve.duration_d / 365.25


def _brief_outbursts(
    rng: np.random.Generator,
    camera: Camera,
    ra: float,
    dec: float,
    mjd: float,
    epochs: int,
) -> tuple[Outburst, ...]:
    """Draw outbursts whose echoes can move several widths over the epochs."""
    diagonal = camera.shape[0] * camera.scale_arcsec / 3600.0 * np.sqrt(0.5)
    widest = widest_light(epochs)
    while True:
        outbursts = random_outbursts(rng, ra, dec, mjd, 1.2 * diagonal)
        if all(light_width(o, ra, dec, mjd) < widest for o in outbursts):
            return outbursts
