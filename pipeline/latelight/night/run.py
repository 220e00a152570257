"""Run a night: plan it, hand the pairs out, put epochs together, write it all down.

Results are taken in the order of the pairs, whatever the order in which they
finish, so that the catalogues do not depend on the number of workers.
"""

from __future__ import annotations

import logging
import shutil
import time
import uuid
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Protocol, TypeVar

from latelight.config import NightConfig
from latelight.night.chain import Outcome, PairTask, process_pair
from latelight.night.engine import Lost, run_tasks
from latelight.night.pairing import AnyPair, Plan, failed_pair
from latelight.night.record import Event, log_event, log_to
from latelight.night.run_book import RunBook
from latelight.night.scan import Night, plan_night
from latelight.night.series import group_parts
from latelight.night.stacked import StackTask, process_stack
from latelight.night.tracking import (
    SeriesOutcome,
    SeriesTask,
    failed_series,
    process_series,
)
from latelight.night.writing import name_all, write_products
from latelight.products.atomic import make_folder
from latelight.products.difference import (
    write_difference,
    write_difference_picture,
)
from latelight.products.rows import CandidateRow, PairRow
from latelight.products.series_rows import SeriesRow
from latelight.products.track_rows import TrackRow
from latelight.records import Source

__all__ = ["NightResult", "Progress", "run_night"]

AnyTask = PairTask | StackTask
Task = TypeVar("Task")
Result = TypeVar("Result")

_INTERRUPTED = "interrupted before it was finished; run again"


class Progress(Protocol):
    """Told how far a night is."""

    def begin(self, total: int) -> None:
        """Take the number of pairs to come."""

    def step(self, row: PairRow) -> None:
        """Take a pair that is done or has failed."""

    def end(self) -> None:
        """Hear that no more pairs will come."""

    def followed(self, row: SeriesRow) -> None:
        """Take a series of epochs that is done or has failed."""


@dataclass(frozen=True, slots=True)
class NightResult:
    """What a night brought.

    Attributes
    ----------
    pairs : tuple of PairRow
        Pairs in order, then frames that took part in none.
    series : tuple of SeriesRow
        Fields of three epochs or more.
    candidates : tuple of CandidateRow
        Best first.
    tracks : tuple of TrackRow
        Worth a look, best first.
    interrupted : bool
        Whether it was stopped before all pairs were finished.
    """

    pairs: tuple[PairRow, ...]
    series: tuple[SeriesRow, ...]
    candidates: tuple[CandidateRow, ...]
    tracks: tuple[TrackRow, ...]
    interrupted: bool

    @property
    def n_failed(self) -> int:
        """How many pairs and series failed."""
        rows: tuple[PairRow | SeriesRow, ...] = (*self.pairs, *self.series)
        return sum(row.status == "failed" for row in rows)

    @property
    def n_pairs_done(self) -> int:
        """How many pairs were finished."""
        return sum(row.status == "done" for row in self.pairs)


def run_night(
    config: NightConfig,
    sources: tuple[Source, ...],
    *,
    jobs: int,
    progress: Progress,
) -> NightResult:
    """Run all pairs of a night and write its products.

    Parameters
    ----------
    config : NightConfig
        All settings.
    sources : tuple of Source
        Candidate origins.
    jobs : int
        Processes; 1 works in this one.
    progress : Progress
        Told of every pair.

    Raises
    ------
    SettingsError
        If no file matches, or the template named in the settings is unusable.
    ProductError
        If a product cannot be written.
    """
    folder = Path(config.night.output)
    make_folder(folder / "cutouts")
    if config.products.differences:
        make_folder(folder / "differences")
    run_id = uuid.uuid4().hex[:12]
    book = RunBook(folder, run_id, config, jobs)
    book.write()  # before any work: an unwritable folder shows at once
    with log_to(folder / "log.jsonl", run_id=run_id):
        log_event(Event(f"run started, {jobs} at a time"))
        night = plan_night(config, jobs=jobs)
        book.inputs = night.digests
        for remark in night.plan.remarks:
            log_event(Event(remark))
        for row in night.plan.failed:
            reason = f"failed: {row.reason}"
            log_event(Event(reason, pair=row.pair, level=logging.ERROR))
        result = _work_through(night, config, sources, jobs, progress, book)
        log_event(
            Event(
                f"run ended: {result.n_pairs_done} pairs done, {result.n_failed} "
                f"failed, {len(result.candidates)} candidates, "
                f"{len(result.tracks)} tracks"
            )
        )
        book.close(
            "interrupted" if result.interrupted else "ended",
            {
                "pairs_done": result.n_pairs_done,
                "pairs_failed": len(result.pairs) - result.n_pairs_done,
                "series_done": sum(row.status == "done" for row in result.series),
                "series_failed": sum(row.status == "failed" for row in result.series),
                "candidates": len(result.candidates),
                "tracks": len(result.tracks),
            },
        )
    return result


def _work_through(
    night: Night,
    config: NightConfig,
    sources: tuple[Source, ...],
    jobs: int,
    progress: Progress,
    book: RunBook,
) -> NightResult:
    """Run pairs and series, then write everything that needs the whole night."""
    scratch = book.folder / f".series-{book.run_id}"
    make_folder(scratch)
    try:
        outcomes, interrupted = _run_pairs(
            _tasks(night.plan, config, sources, scratch),
            config,
            jobs,
            progress,
            book,
        )
        series: list[SeriesOutcome] = []
        if not interrupted:
            series, interrupted = _run_series(outcomes, config, sources, jobs, progress)
    finally:
        shutil.rmtree(scratch, ignore_errors=True)
    start = time.perf_counter()
    named = name_all(outcomes, series)
    pairs = tuple(outcome.row for outcome in outcomes) + night.plan.failed
    rows = tuple(outcome.row for outcome in series)
    book.products += write_products(
        book.folder, named, outcomes=outcomes, pairs=pairs, series=rows, config=config
    )
    seconds = time.perf_counter() - start
    log_event(Event("tables and cutouts written", stage="products", seconds=seconds))
    return NightResult(pairs, rows, named.candidates, named.track_rows, interrupted)


def _tasks(
    plan: Plan, config: NightConfig, sources: tuple[Source, ...], scratch: Path
) -> list[AnyTask]:
    """Return the tasks; pairs of a field of three epochs or more leave a part."""
    count = Counter((pair.template.path, pair.template.chip) for pair in plan.pairs)
    pairs = [
        PairTask(
            pair,
            config,
            sources,
            scratch if count[pair.template.path, pair.template.chip] > 1 else None,
        )
        for pair in plan.pairs
    ]
    stacks = [StackTask(stack, config, sources, scratch) for stack in plan.stacks]
    return [*pairs, *stacks]


def _process(task: AnyTask) -> tuple[Outcome, ...]:
    """Work on one pair, or on one field whose template is a stack."""
    if isinstance(task, StackTask):
        return process_stack(task)
    return (process_pair(task),)


def _failed(task: AnyTask, reason: str) -> tuple[Outcome, ...]:
    """Return what there is to say of a task that came to nothing."""
    return tuple(
        Outcome(
            failed_pair(pair, reason),
            events=(Event(f"failed: {reason}", pair=pair.name, level=logging.ERROR),),
        )
        for pair in _pairs(task)
    )


def _pairs(task: AnyTask) -> tuple[AnyPair, ...]:
    return task.stack.pairs if isinstance(task, StackTask) else (task.pair,)


def _run_pairs(
    tasks: Sequence[AnyTask],
    config: NightConfig,
    jobs: int,
    progress: Progress,
    book: RunBook,
) -> tuple[list[Outcome], bool]:
    """Return the outcomes of all pairs, and whether they were cut short."""
    # In one step a task: an interrupt may come between any two lines.
    done: list[list[Outcome]] = []
    interrupted = False
    progress.begin(sum(len(_pairs(task)) for task in tasks))
    try:
        for of_task in _in_order(_process, tasks, jobs, _failed):
            for event in (event for outcome in of_task for event in outcome.events):
                log_event(event)
            done.append([_keep_difference(o, config, book) for o in of_task])
            for outcome in done[-1]:
                progress.step(outcome.row)
    except KeyboardInterrupt:
        interrupted = True
        log_event(Event("interrupted", level=logging.ERROR))
    finally:
        progress.end()
    cut_short = [_failed(task, _INTERRUPTED) for task in tasks[len(done) :]]
    return [outcome for each in (*done, *cut_short) for outcome in each], interrupted


def _run_series(
    outcomes: Sequence[Outcome],
    config: NightConfig,
    sources: tuple[Source, ...],
    jobs: int,
    progress: Progress,
) -> tuple[list[SeriesOutcome], bool]:
    """Return the outcomes of all series, and whether they were cut short."""
    parts = [outcome.part for outcome in outcomes if outcome.part is not None]
    tasks = [SeriesTask(group, config, sources) for group in group_parts(parts)]
    done: list[SeriesOutcome] = []
    try:
        for outcome in _in_order(process_series, tasks, jobs, _lost_series):
            for event in outcome.events:
                log_event(event)
            done.append(outcome)
            progress.followed(outcome.row)
    except KeyboardInterrupt:
        for task in tasks[len(done) :]:
            done.append(SeriesOutcome(failed_series(task.parts, _INTERRUPTED)))
        log_event(Event("interrupted", level=logging.ERROR))
        return done, True
    return done, False


def _lost_series(task: SeriesTask, reason: str) -> SeriesOutcome:
    """Return what there is to say of a series whose worker was lost."""
    name = task.parts[0].grid.name
    event = Event(f"failed: {reason}", pair=name, level=logging.ERROR)
    return SeriesOutcome(failed_series(task.parts, reason), events=(event,))


def _in_order(
    work: Callable[[Task], Result],
    tasks: Sequence[Task],
    jobs: int,
    lost: Callable[[Task, str], Result],
) -> Iterator[Result]:
    """Yield the results of tasks in the tasks' order."""
    waiting: dict[int, Result] = {}
    upcoming = 0
    for index, result in run_tasks(work, tasks, jobs=jobs):
        if isinstance(result, Lost):
            result = lost(tasks[index], result.reason)
        waiting[index] = result
        while upcoming in waiting:
            yield waiting.pop(upcoming)
            upcoming += 1


def _keep_difference(outcome: Outcome, config: NightConfig, book: RunBook) -> Outcome:
    """Write a difference at once, where the settings ask for it, and let it go."""
    if outcome.difference is None:
        return outcome
    name = outcome.row.pair
    stem = book.folder / "differences" / name
    image, picture = Path(f"{stem}.fits"), Path(f"{stem}.png")
    write_difference(image, outcome.difference, wcs=outcome.wcs)
    write_difference_picture(
        picture,
        outcome.difference,
        pair=name,
        rows=[c.cutout.row for c in outcome.findings.candidates],
        settings=config.products,
    )
    book.products += [image, picture]
    return replace(outcome, difference=None, wcs=None)
