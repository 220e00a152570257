"""Look at a scene: one exposure, taken apart into its truth and its pixels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.records import Source
from latelight.simulation.artefacts import (
    add_trail,
    random_trail,
    reflections,
    spikes,
)
from latelight.simulation.detector import cosmic_rays, read_out, true_variance
from latelight.simulation.echoes import Echo, Viewpoint, render_echo
from latelight.simulation.exposures import Exposure
from latelight.simulation.measuring import measure_echo
from latelight.simulation.objects import (
    Galaxies,
    StarField,
    paint_stars,
    random_movers,
    render_galaxies,
    stars_on_frame,
)
from latelight.simulation.truth import FrameTruth, PairTruth

__all__ = ["Clutter", "Scene", "observe", "pair_truth"]

# Points along the path of a moving body during one exposure.
MOVER_STEPS = 9


@dataclass(frozen=True, slots=True)
class Clutter:
    """How much of what is not sky gets into one exposure.

    Attributes
    ----------
    trails, cosmic_rays, movers : int
        How many of each.
    """

    trails: int
    cosmic_rays: int
    movers: int


@dataclass(frozen=True, slots=True)
class Scene:
    """The sky of a field.

    Attributes
    ----------
    stars : StarField
        Stars, with magnitudes at every epoch.
    galaxies : Galaxies
        Galaxies.
    echoes : tuple of Echo
        Echoes.
    """

    stars: StarField
    galaxies: Galaxies
    echoes: tuple[Echo, ...]


def observe(
    scene: Scene,
    exposure: Exposure,
    *,
    epoch: int,
    clutter: Clutter,
    rng: np.random.Generator,
) -> tuple[np.ndarray, FrameTruth]:
    """Take one exposure of a scene.

    Parameters
    ----------
    scene : Scene
        What is in the sky.
    exposure : Exposure
        When, how and through what.
    epoch : int
        Row of the scene's magnitudes to use.
    clutter : Clutter
        Trails, cosmic rays and movers to draw.
    rng : numpy.random.Generator
        Draws clutter and noise.

    Returns
    -------
    pixels : uint16 array, shape (ny, nx)
        Counts, sky included.
    truth : FrameTruth
        What went into them.
    """
    camera = exposure.camera
    image = exposure.sky()
    echoes = np.zeros(camera.shape)
    for echo in scene.echoes:
        render_echo(echo, Viewpoint.of(echo, exposure)).add_to(echoes)
    image += echoes

    stars = stars_on_frame(scene.stars, exposure, epoch)
    paint_stars(image, exposure, stars.x, stars.y, stars.counts)
    for patch in render_galaxies(scene.galaxies, exposure):
        patch.add_to(image)
    for patch in spikes(stars, exposure):
        patch.add_to(image)
    patches, ghosts = reflections(stars, exposure, rng)
    for patch in patches:
        patch.add_to(image)
    movers = random_movers(rng, exposure, count=clutter.movers)
    _paint_movers(image, exposure, movers)
    trails = tuple(random_trail(rng, exposure) for _ in range(clutter.trails))
    for trail in trails:
        add_trail(image, trail, exposure)

    hits = cosmic_rays(rng, shape=camera.shape, count=clutter.cosmic_rays)
    pixels, saturated = read_out(image, hits, camera, rng)
    variance = true_variance(image, camera)
    sigma_electrons = camera.gain * np.sqrt(true_variance(exposure.sky(), camera))
    faulty = np.zeros(camera.shape, dtype=bool)
    for column in camera.bad_columns:
        faulty[column.first : column.last, column.col] = True
    truth = FrameTruth(
        wcs=exposure.wcs,
        zero_point=exposure.zero_point,
        fwhm_px=exposure.psf.fwhm_px,
        stars=stars,
        expected=image.astype(np.float32),
        variance=variance.astype(np.float32),
        echoes=echoes.astype(np.float32),
        cosmic_rays=hits > sigma_electrons,
        saturated=saturated,
        bad_columns=faulty,
        trails=trails,
        movers=movers[:, :3],
        ghosts=ghosts,
    )
    return pixels, truth


def pair_truth(
    scene: Scene,
    *,
    science: tuple[Exposure, FrameTruth],
    template: tuple[Exposure, FrameTruth],
    sources: tuple[Source, ...],
) -> PairTruth:
    """Put the truth of two exposures of one scene together.

    Parameters
    ----------
    scene : Scene
        What both looked at.
    science, template : (Exposure, FrameTruth)
        The two epochs.
    sources : tuple of Source
        The outbursts.
    """
    measured = [
        measure_echo(
            echo,
            science[0],
            template[0],
            science_variance=science[1].variance,
            template_variance=template[1].variance,
        )
        for echo in scene.echoes
    ]
    days = science[0].mjd - template[0].mjd
    return PairTruth(
        science=science[1],
        template=template[1],
        scale=10.0 ** (0.4 * (science[0].zero_point - template[0].zero_point)),
        later="science" if days > 0 else "template",
        interval_yr=abs(days) / 365.25,
        echoes=tuple(sorted(measured, key=lambda e: -e.bound)),
        sources=sources,
    )


def _paint_movers(image: np.ndarray, exposure: Exposure, movers: np.ndarray) -> None:
    for part in np.linspace(-0.5, 0.5, MOVER_STEPS):
        paint_stars(
            image,
            exposure,
            movers[:, 0] + part * movers[:, 3],
            movers[:, 1] + part * movers[:, 4],
            exposure.counts(movers[:, 2]) / MOVER_STEPS,
        )
