"""Random pairs of frames with exact truth."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np

from latelight.simulation.backdrop import (
    Kind,
    SimulatedFrame,
    check_order,
    random_backdrop,
    random_clutter,
    standard_header,
)
from latelight.simulation.conditions import random_camera, random_exposure
from latelight.simulation.echoes import Echo
from latelight.simulation.exposures import Exposure
from latelight.simulation.observing import observe, pair_truth
from latelight.simulation.outbursts import (
    EchoPlan,
    Outburst,
    flat_speed,
    place_echoes,
    random_outburst,
)
from latelight.simulation.truth import PairTruth
from latelight.simulation.writing import write_image

__all__ = ["SimulatedPair", "random_outbursts", "random_pair"]

Epoch = Literal["science", "template"]


@dataclass(frozen=True, slots=True)
class SimulatedPair:
    """Two epochs of one field, and the truth.

    Attributes
    ----------
    template, science : SimulatedFrame
        The frames.
    truth : PairTruth
        What is exactly known about them.
    """

    template: SimulatedFrame
    science: SimulatedFrame
    truth: PairTruth

    def write(self, folder: Path) -> tuple[Path, Path]:
        """Write ``template.fits`` and ``science.fits``; return their paths.

        Raises
        ------
        ProductError
            If a file cannot be written.
        """
        folder = Path(folder)
        template, science = (
            write_image(folder / f"{name}.fits", frame.pixels, frame.header)
            for name, frame in (("template", self.template), ("science", self.science))
        )
        return template, science


def random_pair(
    seed: int,
    *,
    kind: Kind = "echoes",
    size: int = 1024,
    science_sharper: bool = False,
    template_later: bool = False,
    n_stars: int | None = None,
) -> SimulatedPair:
    """Make two epochs of a random field.

    Parameters
    ----------
    seed : int
        The same seed and arguments give the same pair.
    kind : {"echoes", "nuisances"}
        6-8 echoes (fewer in small frames) among ordinary sky and moderate
        nuisances; or no echo and plenty of nuisances.
    size : int
        Side of the frames, pixels, at least 256.
    science_sharper : bool
        Whether the science frame has the better seeing.
    template_later : bool
        Whether the template was taken after the science frame.
    n_stars : int, optional
        Stars of 13 to 23 mag on a frame; by default 36 per square arcminute.

    Raises
    ------
    ValueError
        If ``kind`` is unknown or ``size`` too small.
    """
    check_order(kind, size)
    streams = [np.random.default_rng(s) for s in np.random.SeedSequence(seed).spawn(5)]
    conditions, sky, dust, first, second = streams
    outbursts, science, template = _random_epochs(
        conditions,
        size,
        kind,
        sharper="science" if science_sharper else "template",
        later="template" if template_later else "science",
        field=f"SIM-{seed}",
    )
    echoes: tuple[Echo, ...] = ()
    if kind == "echoes":
        room = min(1.0, (size / 1024) ** 2)
        plan = EchoPlan(count=max(1, round(int(dust.integers(6, 9)) * room)))
        echoes = place_echoes(dust, outbursts, plan=plan, exposures=(science, template))
    scene = random_backdrop(
        sky, science, n_stars=n_stars, kind=kind, echoes=echoes, n_epochs=2
    )
    taken = [
        observe(
            scene,
            exposure,
            epoch=epoch,
            clutter=random_clutter(rng, size, kind),
            rng=rng,
        )
        for epoch, (exposure, rng) in enumerate(((template, first), (science, second)))
    ]
    truth = pair_truth(
        scene,
        science=(science, taken[1][1]),
        template=(template, taken[0][1]),
        sources=tuple(o.source for o in outbursts),
    )
    template_frame, science_frame = (
        SimulatedFrame(pixels=pixels, header=standard_header(exposure))
        for exposure, (pixels, _) in zip((template, science), taken, strict=True)
    )
    return SimulatedPair(template=template_frame, science=science_frame, truth=truth)


def _random_epochs(
    rng: np.random.Generator,
    size: int,
    kind: Kind,
    *,
    sharper: Epoch,
    later: Epoch,
    field: str,
) -> tuple[tuple[Outburst, ...], Exposure, Exposure]:
    """Draw outbursts and the conditions of the science and template exposures."""
    camera = random_camera(rng, (size, size), many_columns=kind == "nuisances")
    ra, dec = rng.uniform(0.0, 360.0), rng.uniform(-65.0, 65.0)
    mjd = rng.uniform(60_000.0, 61_500.0)
    diagonal = size * camera.scale_arcsec / 3600.0 * np.sqrt(0.5)
    outbursts = random_outbursts(rng, ra, dec, mjd, 1.2 * diagonal)
    days = _random_interval(rng, outbursts, ra, dec, mjd)
    sharp = rng.uniform(1.0, 1.4) / camera.scale_arcsec
    broad = sharp * rng.uniform(1.06, 1.4)
    seeing = (sharp, broad) if sharper == "science" else (broad, sharp)
    moments = (mjd, mjd - days if later == "science" else mjd + days)
    science, template = (
        random_exposure(
            rng, camera, ra=ra, dec=dec, mjd=moment, fwhm_px=fwhm, field=field
        )
        for moment, fwhm in zip(moments, seeing, strict=True)
    )
    return outbursts, science, template


def random_outbursts(
    rng: np.random.Generator, ra: float, dec: float, mjd: float, clear_deg: float
) -> tuple[Outburst, ...]:
    """Draw the one or two outbursts that light a field."""
    far = rng.random() < 0.5
    count = 2 if rng.random() < 0.15 else 1
    return tuple(
        random_outburst(
            rng, name=name, ra=ra, dec=dec, mjd=mjd, far=far, clear_deg=clear_deg
        )
        for name in ("outburst A", "outburst B")[:count]
    )


def _random_interval(
    rng: np.random.Generator,
    outbursts: tuple[Outburst, ...],
    ra: float,
    dec: float,
    mjd: float,
) -> float:
    """Draw days between the epochs so that the echoes move about 2-13 arcsec."""
    speeds = [flat_speed(o.source, ra, dec, mjd) for o in outbursts]
    shift = 2.2 * 6.0 ** rng.random()
    return float(np.clip(shift / np.mean(speeds), 20 / 365.25, 4.0) * 365.25)
