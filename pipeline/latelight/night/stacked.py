"""All epochs of one field, each searched against a stack of the others."""

from __future__ import annotations

import traceback
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from latelight.config import NightConfig
from latelight.night.calibration import Calibration, known
from latelight.night.chain import Outcome, judge
from latelight.night.common_psf import CommonField, bring_together
from latelight.night.comparing import (
    Compared,
    combine_all,
    compare_member,
    compare_other,
)
from latelight.night.findings import Findings, find_all
from latelight.night.gathering import GridEpoch, gather, read_epochs
from latelight.night.journal import Journal
from latelight.night.pairing import Stack
from latelight.night.series import Epoch, Grid, SeriesPart, seed_on_grid, write_part
from latelight.records import (
    Arc,
    ArcTrace,
    Difference,
    Motion,
    Plane,
    Source,
    StarList,
)
from latelight.stacking.combine import plane_weight
from latelight.subtraction.difference import subtract

__all__ = ["StackTask", "process_stack"]

_STAGE = "stacking"


@dataclass(frozen=True, slots=True)
class StackTask:
    """What a worker needs to work on one field.

    Attributes
    ----------
    stack : Stack
        Its epochs.
    config : NightConfig
        All settings.
    sources : tuple of Source
        Candidate origins.
    scratch : Path or None
        Where the differences go, when a series is made of them.
    """

    stack: Stack
    config: NightConfig
    sources: tuple[Source, ...]
    scratch: Path | None = None


def process_stack(task: StackTask) -> tuple[Outcome, ...]:
    """Take the epochs of one field from their files to their candidates.

    Returns
    -------
    tuple of Outcome
        One an epoch, in the order of the task's pairs.  An epoch that fails costs its
        own row; what goes wrong for all of them at once fails every row that is open.
    """
    journals = [Journal(pair) for pair in task.stack.pairs]
    done: dict[str, Outcome] = {}
    try:
        done = _run(task, journals)
    except Exception as error:
        reason = f"{_STAGE}: unexpected {type(error).__name__}: {error}"
        for journal in journals:
            if not journal.closed:
                journal.close_failed(reason, trace=traceback.format_exc())
    return tuple(
        replace(
            done.get(journal.row.pair, Outcome(journal.row)),
            row=journal.row,
            events=tuple(journal.events),
        )
        for journal in journals
    )


def _run(task: StackTask, journals: Sequence[Journal]) -> dict[str, Outcome]:
    """Call the stages in their order; return what each epoch gave, by its pair."""
    config = task.config
    read = read_epochs(task.stack.pairs, journals, config)
    if not read:
        return {}
    field = bring_together(gather(read, config), config)
    static = combine_all(field.members, field, config)
    done: dict[str, Outcome] = {}
    for member in field.members:
        with member.epoch.journal.guarded():
            compared = compare_member(member, field, config)
            done[compared.pair.name] = _search(compared, field, static, task)
    for epoch in field.others:
        with epoch.journal.guarded():
            compared = compare_other(epoch, field, config)
            done[compared.pair.name] = _search(compared, field, static, task)
    return done


def _search(
    compared: Compared, field: CommonField, static: Plane, task: StackTask
) -> Outcome:
    """Subtract, find and measure; the row and the log are added in the end."""
    config, epoch, matched = task.config, compared.epoch, compared.matched
    journal = epoch.journal
    journal.add(
        scale=known(matched.scale),
        scale_err=known(matched.scale_err),
        convolved=matched.convolved,
        held_out_chi2=known(matched.held_out_chi2),
    )
    stars = _with_saturated(field.stars, epoch)
    with journal.stage("subtraction"):
        difference = subtract(matched, stars=stars, settings=config.subtraction)
    calibration = Calibration(field.wcs, field.zero_point)
    judge(difference, calibration, journal)
    findings = find_all(
        difference,
        matched,
        stars=stars,
        pair=compared.pair,
        calibration=calibration,
        sources=task.sources,
        config=config,
        journal=journal,
    )
    part = None
    if task.scratch is not None:
        file = task.scratch / f"{compared.pair.name}.npy"
        with journal.stage("series"):
            write_part(file, _series_epoch(difference, compared, static))
            part = _part(file, difference, compared, findings, field)
    journal.close_done(
        f"{len(findings.arcs)} ridges, {len(findings.candidates)} candidates"
    )
    keep = config.products.differences
    return Outcome(
        row=journal.row,
        findings=findings,
        difference=difference if keep else None,
        wcs=field.wcs if keep else None,
        part=part,
    )


def _with_saturated(stars: StarList, epoch: GridEpoch) -> StarList:
    """Return the field's stars, those marked that are saturated in an epoch."""
    saturated = stars.saturated.copy()
    ours, theirs = epoch.alignment.science_index, epoch.alignment.template_index
    saturated[ours] |= epoch.stars.saturated[theirs]
    return replace(stars, saturated=saturated)


def _series_epoch(difference: Difference, compared: Compared, static: Plane) -> Epoch:
    """Return an epoch minus the stack of all epochs, on the scale of the field.

    That stack is the same for every epoch, as a series needs it; its noise is no
    part of the epoch's.
    """
    pixels = difference.pixels + (compared.template.pixels - static.pixels)
    variance = difference.variance - compared.matched.template.variance
    mask = difference.mask | static.mask
    return Epoch(
        pixels=np.where(mask == 0, pixels, np.float32(0.0)),
        variance=variance,
        mask=mask,
        template_variance=0.0,
    )


def _part(
    file: Path,
    difference: Difference,
    compared: Compared,
    findings: Findings,
    field: CommonField,
) -> SeriesPart:
    """Describe the epoch that was left in a scratch file."""
    pair, reference = compared.pair, field.reference
    plane = field.members[0].epoch.plane
    grid = Grid(
        name=reference.name,
        field=reference.field,
        filter=reference.filter,
        chip=reference.chip,
        mjd=reference.mjd,
        fwhm_px=field.stars.fwhm_px,
        variance=1.0 / plane_weight(plane),
        shape=(plane.pixels.shape[0], plane.pixels.shape[1]),
        calibration=Calibration(field.wcs, field.zero_point),
    )
    seeds = tuple(
        seed_on_grid(
            _at_science(moving.arc, moving.motion),
            moving.motion,
            index=moving.index,
            pair=pair.name,
            pixel_map=None,
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
        template_variance=0.0,
        seeds=seeds,
        noise_ratio=difference.noise_ratio,
    )


def _at_science(arc: Arc, motion: Motion) -> Arc:
    """Return an arc that follows the ridge of the science epoch.

    Where the stack's lobe is the deeper, the trace runs along that one.
    """
    if arc.sign > 0:
        return arc
    trace = arc.trace
    normals = np.radians(trace.normal_angle)
    middle = normals[trace.x.size // 2]
    way = (motion.x - arc.x) * np.cos(middle) + (motion.y - arc.y) * np.sin(middle)
    moved = ArcTrace(
        trace.x + way * np.cos(normals),
        trace.y + way * np.sin(normals),
        trace.normal_angle,
    )
    return replace(arc, trace=moved, sign=1)
