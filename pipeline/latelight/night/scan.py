"""Find a night's frames, read their headers, and plan the pairs."""

from __future__ import annotations

import glob
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

from latelight.config import NightConfig
from latelight.errors import FrameError, SettingsError
from latelight.frames.digest import file_digest
from latelight.frames.files import frame_stem
from latelight.frames.headers import FrameHeader, read_headers
from latelight.night.chain import load_frame
from latelight.night.engine import Lost, run_tasks
from latelight.night.pairing import Plan, failed_frame, plan_pairs, set_aside
from latelight.night.quality import Quality, flux_noises, quality_of, widths
from latelight.night.settings import TEMPLATE_CHOICES
from latelight.night.stack_planning import StackPlan, plan_stacks
from latelight.products.rows import PairRow
from latelight.registration.stars import detect_stars

__all__ = ["Night", "find_files", "plan_night"]


@dataclass(frozen=True, slots=True)
class Night:
    """A night that is ready to run.

    Attributes
    ----------
    headers : tuple of FrameHeader
        Frames that can be read, ordered by path and chip, without copies.
    plan : Plan
        Pairs, and everything that cannot run.
    digests : dict
        SHA-256 of every file that could be read.
    """

    headers: tuple[FrameHeader, ...]
    plan: Plan
    digests: dict[Path, str]


def plan_night(config: NightConfig, *, jobs: int) -> Night:
    """Read the headers of a night and choose a template for every frame.

    Parameters
    ----------
    config : NightConfig
        All settings.
    jobs : int
        Processes, where frames must be measured to choose a template.

    Raises
    ------
    SettingsError
        If no file matches, the template named in the settings is unusable, or a
        stack is asked for with a method of subtraction that takes none.
    """
    headers, failed, digests = _read_all(find_files(config), config)
    kept, copies = set_aside(headers, digests)
    templates = _given_templates(config, digests)
    kept, unmeasured, rank = _ranked(kept, config, jobs)
    stacked = _stacks(kept, config)
    plan = plan_pairs(
        stacked.rest, settings=config.pairs, rank=rank, templates=templates
    )
    every = (*failed, *copies, *unmeasured, *plan.failed)
    remarks = stacked.remarks + plan.remarks
    return Night(kept, Plan(plan.pairs, every, remarks, stacked.stacks), digests)


def _stacks(headers: tuple[FrameHeader, ...], config: NightConfig) -> StackPlan:
    """Return the stacks, where the settings ask for them, and all other frames."""
    if config.pairs.template != "stack":
        return StackPlan((), headers, ())
    if config.subtraction.method != "kernel":
        fault = (
            'subtraction.method: must be "kernel" with pairs.template = "stack", got '
            f'"{config.subtraction.method}"; change one of the two'
        )
        raise SettingsError(None, [fault])
    return plan_stacks(
        headers, settings=config.pairs, min_epochs=config.stacking.min_epochs
    )


def find_files(config: NightConfig) -> tuple[Path, ...]:
    """Return the files that match the globs, without those of the output folder.

    Raises
    ------
    SettingsError
        If there are none.
    """
    output = Path(config.night.output).resolve()
    found: set[Path] = set()
    for pattern in config.night.frames:
        for name in glob.glob(pattern, recursive=True):  # noqa: PTH207 - absolute
            path = Path(name)
            if path.is_file() and output not in path.resolve().parents:
                found.add(path)
    if not found:
        wanted = ", ".join(config.night.frames)
        fault = f"night.frames: no file matches {wanted}; correct the path or pattern"
        raise SettingsError(None, [fault])
    return tuple(sorted(found))


def _read_all(
    paths: Sequence[Path], config: NightConfig
) -> tuple[list[FrameHeader], list[PairRow], dict[Path, str]]:
    """Read every header; a file that cannot be read becomes a failed row."""
    headers: list[FrameHeader] = []
    failed: list[PairRow] = []
    digests: dict[Path, str] = {}
    for path in paths:
        try:
            digests[path] = file_digest(path)
            headers += read_headers(path, config.header)
        except FrameError as error:
            failed.append(_failed_file(path, error.reason))
    return headers, failed, digests


def _failed_file(path: Path, reason: str) -> PairRow:
    name = frame_stem(path)
    return PairRow(
        pair=name,
        field="",
        filter="",
        template="",
        science=name,
        mjd_template=None,
        mjd_science=None,
        status="failed",
        reason=f"{path.name}: {reason}",
    )


def _given_templates(
    config: NightConfig, digests: dict[Path, str]
) -> tuple[FrameHeader, ...]:
    """Return the frames of the template file that the settings name, if they do."""
    if config.pairs.template in TEMPLATE_CHOICES:
        return ()
    path = Path(config.pairs.template)
    try:
        digests[path] = file_digest(path)
        return read_headers(path, config.header)
    except FrameError as error:
        choices = ", ".join(TEMPLATE_CHOICES)
        fault = f"pairs.template: {error}; or write one of {choices}"
        raise SettingsError(None, [fault]) from None


def _ranked(
    headers: tuple[FrameHeader, ...], config: NightConfig, jobs: int
) -> tuple[
    tuple[FrameHeader, ...], tuple[PairRow, ...], Callable[[FrameHeader], float]
]:
    """Return the frames that can be ranked, the others' rows, and the rank."""
    if config.pairs.template not in ("sharpest", "deepest"):
        return headers, (), lambda header: header.mjd
    quality: dict[tuple[Path, str], Quality] = {}
    failed: list[PairRow] = []
    tasks = [(header, config) for header in headers]
    for index, found in sorted(run_tasks(_measure, tasks, jobs=jobs), key=_first):
        header = headers[index]
        if isinstance(found, Quality):
            quality[header.path, header.chip] = found
        else:
            reason = found.reason if isinstance(found, Lost) else found
            failed.append(failed_frame(header, reason))
    kept = tuple(h for h in headers if (h.path, h.chip) in quality)
    measured = [quality[h.path, h.chip] for h in kept]
    if config.pairs.template == "sharpest":
        scores = widths(measured)
    else:
        scores = flux_noises(kept, measured)
    ranks = {(h.path, h.chip): s for h, s in zip(kept, scores, strict=True)}
    return kept, tuple(failed), lambda header: ranks[header.path, header.chip]


def _first(item: tuple[int, object]) -> int:
    return item[0]


def _measure(task: tuple[FrameHeader, NightConfig]) -> Quality | str:
    """Measure a frame; return why it cannot be when so."""
    header, config = task
    try:
        frame = load_frame(header, config)
        stars = detect_stars(frame.plane, settings=config.registration)
    except Exception as error:
        return f"unusable as a frame of a pair: {error}"
    found = quality_of(frame, stars)
    return found or "no star stands out: sharpness and depth are unknown"
