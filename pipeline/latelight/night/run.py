"""Run a night: plan it, hand the pairs out, gather what comes back, write it down.

Results are taken in the order of the pairs, whatever the order in which they
finish, so that the catalogues do not depend on the number of workers.
"""

from __future__ import annotations

import json
import logging
import time
import uuid
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Protocol

from latelight.config import NightConfig
from latelight.night.chain import Outcome, PairTask, process_pair
from latelight.night.engine import Lost, run_tasks
from latelight.night.pairing import failed_pair
from latelight.night.record import Event, log_event, log_to, versions, write_record
from latelight.night.scan import Night, plan_night
from latelight.products.atomic import make_folder
from latelight.products.cutouts import Cutout, write_cutout
from latelight.products.designation import (
    pixel_designation,
    sky_designation,
    unique_ids,
)
from latelight.products.difference import (
    write_difference,
    write_difference_picture,
)
from latelight.products.picture import write_picture
from latelight.products.rows import ArcRow, CandidateRow, PairRow
from latelight.products.tables import write_tables
from latelight.records import Source

__all__ = ["NightResult", "Progress", "run_night"]


class Progress(Protocol):
    """Told how far a night is."""

    def begin(self, total: int) -> None:
        """Take the number of pairs to come."""

    def step(self, row: PairRow) -> None:
        """Take a pair that is done or has failed."""

    def end(self) -> None:
        """Hear that no more pairs will come."""


@dataclass(frozen=True, slots=True)
class NightResult:
    """What a night brought.

    Attributes
    ----------
    pairs : tuple of PairRow
        Pairs in order, then frames that took part in none.
    candidates : tuple of CandidateRow
        Best first.
    interrupted : bool
        Whether it was stopped before all pairs were finished.
    """

    pairs: tuple[PairRow, ...]
    candidates: tuple[CandidateRow, ...]
    interrupted: bool

    @property
    def n_failed(self) -> int:
        """How many rows failed."""
        return sum(row.status == "failed" for row in self.pairs)


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
    record = _Record(folder, run_id, config, jobs)
    record.write()  # before any work: an unwritable folder shows at once
    with log_to(folder / "log.jsonl", run_id=run_id):
        log_event(Event(f"run started, {jobs} at a time"))
        night = plan_night(config, jobs=jobs)
        record.inputs = night.digests
        for remark in night.plan.remarks:
            log_event(Event(remark))
        for row in night.plan.failed:
            reason = f"failed: {row.reason}"
            log_event(Event(reason, pair=row.pair, level=logging.ERROR))
        result = _work_through(night, config, sources, jobs, progress, record)
        log_event(
            Event(
                f"run ended: {len(result.pairs) - result.n_failed} done, "
                f"{result.n_failed} failed, {len(result.candidates)} candidates"
            )
        )
        record.close(result)
    return result


def _work_through(
    night: Night,
    config: NightConfig,
    sources: tuple[Source, ...],
    jobs: int,
    progress: Progress,
    record: _Record,
) -> NightResult:
    """Run the pairs, then write everything that needs the whole night."""
    tasks = [PairTask(pair, config, sources) for pair in night.plan.pairs]
    outcomes: list[Outcome] = []
    interrupted = False
    progress.begin(len(tasks))
    try:
        for outcome in _in_order(tasks, jobs):
            for event in outcome.events:
                log_event(event)
            outcomes.append(_keep_difference(outcome, config, record))
            progress.step(outcome.row)
    except KeyboardInterrupt:
        interrupted = True
        reason = "interrupted before it was finished; run again"
        for task in tasks[len(outcomes) :]:
            outcomes.append(Outcome(failed_pair(task.pair, reason)))
        log_event(Event("interrupted", level=logging.ERROR))
    finally:
        progress.end()
    arcs, cutouts = _with_ids(outcomes)
    rows = tuple(outcome.row for outcome in outcomes) + night.plan.failed
    _write_products(outcomes, arcs, cutouts, rows, config, record)
    best_first = sorted((c.row for c in cutouts), key=lambda row: (-row.snr, row.id))
    return NightResult(rows, tuple(best_first), interrupted)


def _in_order(tasks: Sequence[PairTask], jobs: int) -> Iterator[Outcome]:
    """Yield the outcomes of the pairs in the pairs' order."""
    waiting: dict[int, Outcome] = {}
    upcoming = 0
    for index, result in run_tasks(process_pair, tasks, jobs=jobs):
        if isinstance(result, Lost):
            name = tasks[index].pair.name
            message = f"failed: {result.reason}"
            result = Outcome(
                row=failed_pair(tasks[index].pair, result.reason),
                events=(Event(message, pair=name, level=logging.ERROR),),
            )
        waiting[index] = result
        while upcoming in waiting:
            yield waiting.pop(upcoming)
            upcoming += 1


def _keep_difference(outcome: Outcome, config: NightConfig, record: _Record) -> Outcome:
    """Write a difference at once, where the settings ask for it, and let it go."""
    if outcome.difference is None:
        return outcome
    name = outcome.row.pair
    stem = record.folder / "differences" / name
    image, picture = Path(f"{stem}.fits"), Path(f"{stem}.png")
    write_difference(image, outcome.difference, wcs=outcome.wcs)
    write_difference_picture(
        picture,
        outcome.difference,
        pair=name,
        rows=[c.cutout.row for c in outcome.findings.candidates],
        settings=config.products,
    )
    record.products += [image, picture]
    return replace(outcome, difference=None, wcs=None)


def _with_ids(outcomes: Sequence[Outcome]) -> tuple[list[ArcRow], list[Cutout]]:
    """Name the candidates of the whole night, and tell their ridges."""
    found = [
        (number, candidate)
        for number, outcome in enumerate(outcomes)
        for candidate in outcome.findings.candidates
    ]
    rows = [candidate.cutout.row for _, candidate in found]
    ids = unique_ids(
        [_designation(row) for row in rows],
        keys=[(row.pair, row.x, row.y) for row in rows],
    )
    arcs = [list(outcome.findings.arcs) for outcome in outcomes]
    cutouts: list[Cutout] = []
    for (number, candidate), row, name in zip(found, rows, ids, strict=True):
        arc = arcs[number][candidate.arc]
        arcs[number][candidate.arc] = replace(arc, candidate=name)
        cutouts.append(replace(candidate.cutout, row=replace(row, id=name)))
    return [arc for of_pair in arcs for arc in of_pair], cutouts


def _designation(row: CandidateRow) -> str:
    if row.ra is None or row.dec is None:
        return pixel_designation(row.pair, row.x, row.y)
    return sky_designation(row.ra, row.dec)


def _write_products(
    outcomes: Sequence[Outcome],
    arcs: Sequence[ArcRow],
    cutouts: Sequence[Cutout],
    rows: Sequence[PairRow],
    config: NightConfig,
    record: _Record,
) -> None:
    start = time.perf_counter()
    for cutout in cutouts:
        stem = record.folder / "cutouts" / cutout.row.id
        image, picture = Path(f"{stem}.fits"), Path(f"{stem}.png")
        write_cutout(image, cutout)
        write_picture(picture, cutout, settings=config.products)
        record.products += [image, picture]
    record.products += write_tables(
        record.folder,
        candidates=[cutout.row for cutout in cutouts],
        arcs=arcs,
        pairs=rows,
        residuals=[r for outcome in outcomes for r in outcome.findings.residuals],
    )
    seconds = time.perf_counter() - start
    log_event(Event("tables and cutouts written", stage="products", seconds=seconds))


class _Record:
    """What ``run.json`` will say; it also clears away products of earlier runs."""

    def __init__(
        self, folder: Path, run_id: str, config: NightConfig, jobs: int
    ) -> None:
        self.folder = folder
        self.products: list[Path] = []
        self.inputs: dict[Path, str] = {}
        self._path = folder / "run.json"
        self._earlier = _products_of(self._path)
        self._start = time.perf_counter()
        self._text: dict[str, Any] = {
            "run": run_id,
            "status": "running",
            "started": _now(),
            "jobs": jobs,
            "versions": versions(),
            "settings": config.model_dump(mode="json"),
        }

    def write(self) -> None:
        """Write what is known so far; earlier products stay listed until the end."""
        write_record(self._path, {**self._text, "products": sorted(self._earlier)})

    def close(self, result: NightResult) -> None:
        """Write the end of a run, and remove what an earlier one left behind."""
        names = sorted(str(p.relative_to(self.folder)) for p in self.products)
        for name in sorted(self._earlier - set(names)):
            (self.folder / name).unlink(missing_ok=True)
        self._text |= {
            "status": "interrupted" if result.interrupted else "ended",
            "ended": _now(),
            "seconds": round(time.perf_counter() - self._start, 3),
            "pairs_done": len(result.pairs) - result.n_failed,
            "pairs_failed": result.n_failed,
            "candidates": len(result.candidates),
            "inputs": [
                {"path": str(path), "sha256": digest}
                for path, digest in sorted(self.inputs.items())
            ],
            "products": names,
        }
        write_record(self._path, self._text)


def _products_of(path: Path) -> set[str]:
    """Return the products an earlier ``run.json`` lists; none if it is unreadable."""
    try:
        listed = json.loads(path.read_text(encoding="utf-8"))["products"]
    except (OSError, ValueError, KeyError, TypeError):
        return set()
    # Only what lies in the two folders of cutouts and differences, by plain names.
    folders = ("cutouts", "differences")
    return {
        name
        for name in listed
        if len(parts := Path(name).parts) == 2 and parts[0] in folders
    }


def _now() -> str:
    return datetime.now(tz=UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
