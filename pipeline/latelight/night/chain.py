"""One pair through all the stages, and the only place that knows their order."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from latelight.config import NightConfig
from latelight.frames.headers import FrameHeader
from latelight.frames.reader import read_frames
from latelight.matching.match import match_pair
from latelight.matching.psf import measure_psf
from latelight.night.calibration import Calibration, known
from latelight.night.findings import Findings, find_all
from latelight.night.journal import Journal
from latelight.night.pairing import Pair
from latelight.night.record import Event
from latelight.night.series import Grid, SeriesPart, seed_on_grid, to_grid, write_part
from latelight.products.rows import PairRow
from latelight.records import (
    Alignment,
    Difference,
    Frame,
    MatchedPair,
    Plane,
    Source,
    StarList,
)
from latelight.registration.alignment import align
from latelight.registration.resampling import resample
from latelight.registration.stars import detect_stars
from latelight.subtraction.difference import subtract
from latelight.subtraction.proper import subtract_proper
from latelight.threads import on_each

__all__ = ["Outcome", "PairTask", "judge", "load_frame", "process_pair", "seeing"]


@dataclass(frozen=True, slots=True)
class PairTask:
    """What a worker needs to work on one pair.

    Attributes
    ----------
    pair : Pair
        The two frames.
    config : NightConfig
        All settings.
    sources : tuple of Source
        Candidate origins.
    scratch : Path or None
        Where its difference goes, when it is an epoch of a series.
    """

    pair: Pair
    config: NightConfig
    sources: tuple[Source, ...]
    scratch: Path | None = None


@dataclass(frozen=True, slots=True)
class Outcome:
    """All that came of one pair.

    Attributes
    ----------
    row : PairRow
        How it went.
    findings : Findings
        What was found; empty for a failed pair.
    events : tuple of Event
        Lines for the log, in order.
    difference : Difference or None
        Kept when the settings ask for it.
    wcs : astropy.wcs.WCS or None
        Of the difference.
    part : SeriesPart or None
        What it gives to the series of its field.
    """

    row: PairRow
    findings: Findings = field(default_factory=Findings)
    events: tuple[Event, ...] = ()
    difference: Difference | None = None
    wcs: Any = None
    part: SeriesPart | None = None


def process_pair(task: PairTask) -> Outcome:
    """Take one pair from its files to its candidates.

    Whatever goes wrong becomes a failed row: an error raised on purpose with its
    reason, anything else with its kind, and its traceback in the log.
    """
    journal = Journal(task.pair)
    findings, difference, wcs, part = Findings(), None, None, None
    with journal.guarded():
        findings, difference, wcs, part = _run(task, journal)
    keep = task.config.products.differences
    return Outcome(
        row=journal.row,
        findings=findings,
        events=tuple(journal.events),
        difference=difference if keep else None,
        wcs=wcs if keep else None,
        part=part,
    )


def load_frame(header: FrameHeader, config: NightConfig) -> Frame:
    """Read the frame that a header belongs to.

    Raises
    ------
    FrameError
        If it cannot be used, or is gone.
    """
    (frame,) = read_frames(header.path, config.header, config.frames, chip=header.chip)
    return frame


def _run(
    task: PairTask, journal: Journal
) -> tuple[Findings, Difference, Any, SeriesPart | None]:
    """Call the stages in their order."""
    config = task.config
    science, template = _read(task, journal)
    stars, template_stars = _find_stars(science, template, config, journal)
    alignment, resampled = _register(
        science, template, stars, template_stars, config, journal
    )
    grid = _grid(template, template_stars, task.pair)
    del template  # a third of the memory, and no longer needed
    with journal.stage("matching"):
        matched = match_pair(
            science.plane,
            resampled,
            science_stars=stars,
            template_stars=template_stars,
            alignment=alignment,
            settings=config.matching,
        )
    journal.add(
        scale=known(matched.scale),
        scale_err=known(matched.scale_err),
        convolved=matched.convolved,
        held_out_chi2=known(matched.held_out_chi2),
    )
    with journal.stage("subtraction"):
        difference = _subtract(science, resampled, matched, alignment, stars, config)
    del resampled
    calibration = _calibrate(science, matched, task.pair, journal)
    judge(difference, calibration, journal)
    findings = find_all(
        difference,
        matched,
        stars=stars,
        pair=task.pair,
        calibration=calibration,
        sources=task.sources,
        config=config,
        journal=journal,
    )
    sky_noise = float(np.median(science.plane.variance))
    part = _leave_part(
        task, findings, difference, alignment, grid, matched.scale, sky_noise, journal
    )
    journal.close_done(
        f"{len(findings.arcs)} ridges, {len(findings.candidates)} candidates"
    )
    return findings, difference, science.wcs, part


def _grid(template: Frame, stars: StarList, pair: Pair) -> Grid:
    """Return the pixels of the template, which all epochs of a series share."""
    return Grid(
        name=template.name,
        field=template.field,
        filter=template.filter,
        chip=template.chip,
        mjd=pair.template.mjd,
        fwhm_px=stars.fwhm_px,
        variance=float(np.median(template.plane.variance)),
        shape=template.plane.pixels.shape,
        calibration=Calibration(template.wcs, template.zero_point),
    )


def _leave_part(
    task: PairTask,
    findings: Findings,
    difference: Difference,
    alignment: Alignment,
    grid: Grid,
    scale: float,
    sky_noise: float,
    journal: Journal,
) -> SeriesPart | None:
    """Leave the difference behind for the series of its field, where it has one."""
    if task.scratch is None:
        return None
    pair, file = task.pair, task.scratch / f"{task.pair.name}.npy"
    with journal.stage("series"):
        # Of the frames as read: convolving one only spreads its noise over pixels.
        from_template = grid.variance * scale**2
        epoch = to_grid(
            difference,
            alignment.pixel_map,
            scale=scale,
            template_share=from_template / (from_template + sky_noise),
            shape=grid.shape,
            settings=task.config.registration,
        )
        write_part(file, epoch)
        seeds = tuple(
            seed_on_grid(
                moving.arc,
                moving.motion,
                index=moving.index,
                pair=pair.name,
                pixel_map=alignment.pixel_map,
                epochs=(pair.science.mjd, pair.template.mjd),
                fwhm_px=difference.fwhm_px,
            )
            for moving in findings.moving
        )
    return SeriesPart(
        file=file,
        grid=grid,
        pair=pair.name,
        name=pair.science.name,
        mjd=pair.science.mjd,
        fwhm_px=difference.fwhm_px,
        template_variance=epoch.template_variance,
        seeds=seeds,
    )


def _read(task: PairTask, journal: Journal) -> tuple[Frame, Frame]:
    with journal.stage("frames"):
        science, template = on_each(
            lambda header: load_frame(header, task.config),
            (task.pair.science, task.pair.template),
        )
    notes = [f"{f.name}: {note}" for f in (science, template) for note in f.notes]
    for note in notes:
        journal.say(note, stage="frames")
    journal.add(notes="; ".join(notes))
    return science, template


def _find_stars(
    science: Frame, template: Frame, config: NightConfig, journal: Journal
) -> tuple[StarList, StarList]:
    with journal.stage("stars"):
        stars = detect_stars(science.plane, settings=config.registration)
        template_stars = detect_stars(template.plane, settings=config.registration)
    journal.add(
        n_stars_science=len(stars),
        n_stars_template=len(template_stars),
        fwhm_science_px=known(stars.fwhm_px),
        fwhm_template_px=known(template_stars.fwhm_px),
        seeing_science=seeing(science, stars),
        seeing_template=seeing(template, template_stars),
    )
    return stars, template_stars


def _register(
    science: Frame,
    template: Frame,
    stars: StarList,
    template_stars: StarList,
    config: NightConfig,
    journal: Journal,
) -> tuple[Alignment, Plane]:
    shape = science.plane.pixels.shape
    with journal.stage("registration"):
        alignment = align(
            stars,
            template_stars,
            science.wcs,
            template.wcs,
            science_shape=shape,
            template_shape=template.plane.pixels.shape,
            settings=config.registration,
        )
    journal.add(
        n_matched=int(alignment.science_index.size),
        registration_rms=known(alignment.rms_px),
        registration_error=known(alignment.pixel_map.error_px),
        registration_method=alignment.method,
    )
    with journal.stage("resampling"):
        resampled = resample(
            template.plane,
            alignment.pixel_map,
            shape=shape,
            settings=config.registration,
        )
    return alignment, resampled


def _subtract(
    science: Frame,
    resampled: Plane,
    matched: MatchedPair,
    alignment: Alignment,
    stars: StarList,
    config: NightConfig,
) -> Difference:
    """Subtract by the method that the settings choose."""
    settings = config.subtraction
    if settings.method == "kernel":
        return subtract(matched, stars=stars, settings=settings)
    index = alignment.science_index
    index = index[stars.clean[index]]
    x, y = stars.x[index], stars.y[index]
    return subtract_proper(
        science.plane,
        resampled,
        science_psf=measure_psf(science.plane, x=x, y=y, settings=config.matching),
        template_psf=measure_psf(resampled, x=x, y=y, settings=config.matching),
        scale=matched.scale,
        registration_error_px=alignment.pixel_map.error_px,
        stars=stars,
        settings=settings,
    )


def _calibrate(
    science: Frame, matched: MatchedPair, pair: Pair, journal: Journal
) -> Calibration:
    """Tie the science frame to the sky and to magnitudes, or say why not."""
    if science.wcs is None:
        reason = "sky columns are empty: the science frame has no celestial WCS"
        journal.say(reason, stage="sky")
    zero_point = science.zero_point
    if zero_point is None and pair.template.zero_point is not None:
        # One template count is `scale` science counts.
        zero_point = pair.template.zero_point + 2.5 * math.log10(matched.scale)
        journal.say("zero point taken over from the template", stage="sky")
    elif zero_point is None:
        journal.say("no magnitudes: neither frame has a zero point", stage="sky")
    return Calibration(science.wcs, zero_point)


def judge(difference: Difference, calibration: Calibration, journal: Journal) -> None:
    """Record how quiet and how deep a difference is."""
    journal.add(
        fwhm_difference_px=known(difference.fwhm_px),
        noise_ratio=known(difference.noise_ratio),
        n_residuals=len(difference.compact),
    )
    good = difference.mask == 0
    if good.any():
        sigma = float(np.sqrt(np.median(difference.variance[good])))
        sigma *= difference.noise_ratio
        journal.add(depth=calibration.depth(sigma, difference.pixels.shape))


def seeing(frame: Frame, stars: StarList) -> float | None:
    """Return the width of the stars, arcsec."""
    ny, nx = frame.plane.pixels.shape
    scale = Calibration(frame.wcs, None).scale(0.5 * (nx - 1), 0.5 * (ny - 1))
    return None if scale is None else known(stars.fwhm_px * scale)
