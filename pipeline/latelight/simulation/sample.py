"""The sample night: three small invented fields with their truth.

Everything here - observatory, fields, outbursts - is made up.  The same seeds
make the same bytes.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from astropy.io import fits

from latelight.records import Source
from latelight.simulation.backdrop import (
    STARS_PER_ARCMIN2,
    standard_header,
)
from latelight.simulation.conditions import random_camera, random_exposure
from latelight.simulation.exposures import Camera, Exposure
from latelight.simulation.objects import random_galaxies, random_stars
from latelight.simulation.observing import Clutter, Scene, observe, pair_truth
from latelight.simulation.outburst import LightCurve
from latelight.simulation.outbursts import EchoPlan, Outburst, place_echoes
from latelight.simulation.tables import (
    Row,
    echo_rows,
    frame_row,
    nuisance_rows,
    source_rows,
    write_table,
)
from latelight.simulation.truth import FrameTruth
from latelight.simulation.writing import (
    ImageExtension,
    chip_words,
    exposure_words,
    write_extensions,
    write_image,
)

__all__ = ["OTHER_WORDS", "write_sample"]

OTHER_WORDS = {
    "mjd": "JD-START",
    "exposure": "OPENTIME",
    "filter": "BAND",
    "field": "TARGET",
    "gain": "E-PER-DN",
    "read_noise": "E-NOISE",
    "saturation": "DN-FULL",
    "zero_point": "DN-ZERO",
}
OTHER_OBSERVATORY = "Saltmarsh 1.2-m twin-chip camera"
CHIP_EXTENSION, MASK_EXTENSION = "CHIP", "FLAWS"

AGES_AT_MJD = 60_000.0
SORREL = Outburst(
    source=Source("Sorrel 1713", 82.27, -29.61, 4200.0, 250.0, 310.0, 0.0, AGES_AT_MJD),
    light_curve=LightCurve(shape="flash", duration_d=55.0, rise=0.12),
)
GORSE = Outburst(
    source=Source(
        "Gorse Event", 80.95, -33.38, 49_000.0, 2000.0, 420.0, 40.0, AGES_AT_MJD
    ),
    light_curve=LightCurve(shape="plateau", duration_d=110.0, rise=0.08),
)
DECOYS = (
    Source("Teasel 1540", 85.72, -29.75, 3100.0, 300.0, 483.0, 0.0, AGES_AT_MJD),
    Source("Yarrow's Lantern", 83.78, -31.87, 6800.0, 900.0, 150.0, 30.0, AGES_AT_MJD),
    Source(
        "Fenwick's Guest", 80.88, -30.83, 47_000.0, 3000.0, 640.0, 60.0, AGES_AT_MJD
    ),
)


@dataclass(frozen=True, slots=True)
class Field:
    """One field of the sample.

    Attributes
    ----------
    name : str
        Field word in the headers; in lower case, the start of the file names.
    seed : int
        Of everything random in it.
    ra, dec : float
        Pointing, degrees.
    mjds, fwhm_px : tuple of float
        Time and seeing of each epoch.
    clutter : tuple of Clutter
        Of each epoch.
    chips : tuple of (float, float)
        Where the pointing falls from each chip's centre, pixels.
    shape : (int, int)
        Of each chip.
    outburst : Outburst or None
        What lights its echoes.
    plan : EchoPlan
        Echoes on each chip; not used without an outburst.
    very_bright : int
        Stars of 10 to 12.5 mag.
    galaxies_per_arcmin2 : float
        Density of galaxies.
    """

    name: str
    seed: int
    ra: float
    dec: float
    mjds: tuple[float, ...]
    fwhm_px: tuple[float, ...]
    clutter: tuple[Clutter, ...]
    outburst: Outburst | None
    plan: EchoPlan
    chips: tuple[tuple[float, float], ...] = ((0.0, 0.0),)
    shape: tuple[int, int] = (1024, 1024)
    very_bright: int = 0
    galaxies_per_arcmin2: float = 0.8


THORNAPPLE = Field(
    name="THORNAPPLE",
    seed=67,
    ra=83.20,
    dec=-31.00,
    mjds=(60_210.21, 60_330.17, 60_500.36),
    fwhm_px=(3.3, 3.9, 2.7),
    clutter=(Clutter(0, 60, 1), Clutter(1, 70, 0), Clutter(0, 65, 1)),
    outburst=SORREL,
    plan=EchoPlan(count=5, brightness=(21.8, 24.0)),
)
FALLOWMERE = Field(
    name="FALLOWMERE",
    seed=48,
    ra=85.00,
    dec=-32.50,
    mjds=(60_211.30, 60_501.14),
    fwhm_px=(3.0, 3.6),
    clutter=(Clutter(1, 130, 4), Clutter(2, 140, 4)),
    outburst=None,
    plan=EchoPlan(count=1),
    very_bright=3,
    galaxies_per_arcmin2=2.0,
)
MARLPIT = Field(
    name="MARLPIT",
    seed=33,
    ra=80.50,
    dec=-33.00,
    mjds=(59_560.25, 60_502.11),
    fwhm_px=(3.4, 3.0),
    clutter=(Clutter(0, 35, 1), Clutter(1, 35, 0)),
    outburst=GORSE,
    plan=EchoPlan(count=1, brightness=(22.0, 23.2), lengths=(45.0, 80.0)),
    chips=((350.0, 0.0), (-350.0, 0.0)),
    shape=(896, 640),
)


def write_sample(folder: Path) -> list[Path]:
    """Write the sample frames, their sources and their truth into a folder.

    Parameters
    ----------
    folder : Path
        Made if need be; files of the same names are replaced.

    Returns
    -------
    list of Path
        The files written.

    Raises
    ------
    ProductError
        If a file cannot be written.
    """
    folder = Path(folder)
    written: list[Path] = []
    tables: dict[str, list[Row]] = {"echoes": [], "frames": [], "nuisances": []}
    for field in (THORNAPPLE, FALLOWMERE):
        written += _write_plain(folder, field, tables)
    written += _write_chips(folder, MARLPIT, tables)
    for name, rows in tables.items():
        written.append(write_table(folder / f"truth_{name}.ecsv", rows))
    sources = (SORREL.source, GORSE.source, *DECOYS)
    written.append(write_table(folder / "sources.ecsv", source_rows(sources)))
    return written


@dataclass(frozen=True, slots=True)
class _Chip:
    """What one chip saw: the sky with its echoes, and each epoch."""

    scene: Scene
    exposures: tuple[Exposure, ...]
    pixels: tuple[np.ndarray, ...]
    truths: tuple[FrameTruth, ...]


def _observe_field(field: Field) -> list[_Chip]:
    sky, conditions, *streams = np.random.SeedSequence(field.seed).spawn(
        2 + len(field.chips)
    )
    scene = _sky(field, np.random.default_rng(sky))
    return [
        _observe_chip(
            field,
            scene,
            offset,
            # Chips of one exposure share its weather: the same draws again.
            weather=np.random.default_rng(conditions),
            rng=np.random.default_rng(stream),
        )
        for offset, stream in zip(field.chips, streams, strict=True)
    ]


def _sky(field: Field, rng: np.random.Generator) -> Scene:
    scale = Camera(shape=field.shape).scale_arcsec
    reach = max(abs(v) for offset in field.chips for v in offset)
    half = scale * (0.5 * max(field.shape) + reach + 60.0)
    arcmin2 = (2.0 * half / 60.0) ** 2
    return Scene(
        stars=random_stars(
            rng,
            ra=field.ra,
            dec=field.dec,
            half_size_arcsec=half,
            count=round(STARS_PER_ARCMIN2 * arcmin2),
            n_epochs=len(field.mjds),
            variable_share=0.02,
            very_bright=field.very_bright,
        ),
        galaxies=random_galaxies(
            rng,
            ra=field.ra,
            dec=field.dec,
            half_size_arcsec=half,
            count=round(field.galaxies_per_arcmin2 * arcmin2),
        ),
        echoes=(),
    )


def _observe_chip(
    field: Field,
    scene: Scene,
    offset: tuple[float, float],
    *,
    weather: np.random.Generator,
    rng: np.random.Generator,
) -> _Chip:
    camera = random_camera(rng, field.shape, many_columns=field.outburst is None)
    exposures = tuple(
        random_exposure(
            weather,
            camera,
            ra=field.ra,
            dec=field.dec,
            mjd=mjd,
            fwhm_px=fwhm,
            field=field.name,
            chip_offset_px=offset,
        )
        for mjd, fwhm in zip(field.mjds, field.fwhm_px, strict=True)
    )
    if field.outburst is not None:
        echoes = place_echoes(
            rng,
            (field.outburst,),
            plan=field.plan,
            exposures=(exposures[-1], exposures[0]),
        )
        scene = replace(scene, echoes=echoes)
    taken = [
        observe(scene, exposure, epoch=epoch, clutter=field.clutter[epoch], rng=rng)
        for epoch, exposure in enumerate(exposures)
    ]
    return _Chip(
        scene=scene,
        exposures=exposures,
        pixels=tuple(pixels for pixels, _ in taken),
        truths=tuple(truth for _, truth in taken),
    )


def _write_plain(
    folder: Path, field: Field, tables: dict[str, list[Row]]
) -> list[Path]:
    """Write a field of one chip in the standard words, tile-compressed."""
    (chip,) = _observe_field(field)
    paths = []
    for epoch, exposure in enumerate(chip.exposures):
        path = folder / f"{_stem(field, epoch)}.fits.fz"
        header = standard_header(exposure)
        paths.append(write_image(path, chip.pixels[epoch], header))
    _note(tables, field, chip, label="")
    return paths


def _write_chips(
    folder: Path, field: Field, tables: dict[str, list[Row]]
) -> list[Path]:
    """Write a field of several chips in other words, with mask planes, gzipped."""
    chips = _observe_field(field)
    paths = []
    for epoch, exposure in enumerate(chips[0].exposures):
        images = []
        for number, chip in enumerate(chips, start=1):
            words = chip_words(chip.exposures[epoch], words=OTHER_WORDS)
            flaws = chip.truths[epoch].bad_columns.astype(np.uint8)
            images += [
                ImageExtension(CHIP_EXTENSION, number, chip.pixels[epoch], words),
                ImageExtension(MASK_EXTENSION, number, flaws, fits.Header()),
            ]
        primary = exposure_words(
            exposure, words=OTHER_WORDS, observatory=OTHER_OBSERVATORY
        )
        path = folder / f"{_stem(field, epoch)}.fits.gz"
        paths.append(write_extensions(path, images, primary=primary))
    for number, chip in enumerate(chips, start=1):
        _note(tables, field, chip, label=str(number))
    return paths


def _stem(field: Field, epoch: int) -> str:
    return f"{field.name.lower()}_{epoch + 1}"


def _note(
    tables: dict[str, list[Row]], field: Field, chip: _Chip, *, label: str
) -> None:
    """Add one chip's truth: every epoch, and every later epoch against the first."""
    for epoch, exposure in enumerate(chip.exposures):
        truth, frame = chip.truths[epoch], _stem(field, epoch)
        tables["frames"].append(
            frame_row(
                truth, mjd=exposure.mjd, field=field.name, frame=frame, chip=label
            )
        )
        tables["nuisances"] += nuisance_rows(truth, frame=frame, chip=label)
        if epoch == 0:
            continue
        pair = pair_truth(
            chip.scene,
            science=(exposure, truth),
            template=(chip.exposures[0], chip.truths[0]),
            sources=(),
        )
        tables["echoes"] += echo_rows(
            pair, field=field.name, template=_stem(field, 0), science=frame, chip=label
        )
