"""What workers are given: pairs, and fields whose template is a stack."""

from __future__ import annotations

import logging
from pathlib import Path

from latelight.config import NightConfig
from latelight.night.chain import Outcome, PairTask, process_pair
from latelight.night.pairing import AnyPair, Plan, failed_pair
from latelight.night.record import Event
from latelight.night.stacked import StackTask, process_stack
from latelight.records import Source

__all__ = ["NightTask", "failed_task", "make_tasks", "pairs_of", "process_task"]

NightTask = PairTask | StackTask


def make_tasks(
    plan: Plan,
    config: NightConfig,
    sources: tuple[Source, ...],
    *,
    scratch: Path | None = None,
) -> list[NightTask]:
    """Return the tasks of a plan: its pairs, then its stacks, in order.

    Parameters
    ----------
    plan : Plan
        What is to be done.
    config : NightConfig
        All settings.
    sources : tuple of Source
        Candidate origins.
    scratch : Path or None
        Where differences go, when series are made of them.
    """
    pairs = [PairTask(pair, config, sources, scratch) for pair in plan.pairs]
    stacks = [StackTask(stack, config, sources, scratch) for stack in plan.stacks]
    return [*pairs, *stacks]


def pairs_of(task: NightTask) -> tuple[AnyPair, ...]:
    """Return what a task compares: it gives one outcome for each."""
    return (task.pair,) if isinstance(task, PairTask) else task.stack.pairs


def process_task(task: NightTask) -> tuple[Outcome, ...]:
    """Work on a task; nothing is raised, failures are outcomes too."""
    if isinstance(task, PairTask):
        return (process_pair(task),)
    return process_stack(task)


def failed_task(task: NightTask, reason: str) -> tuple[Outcome, ...]:
    """Return the outcomes of a task that was lost, with lines for the log."""
    text = f"failed: {reason}"
    return tuple(
        Outcome(
            failed_pair(pair, reason),
            events=(Event(text, pair=pair.name, level=logging.ERROR),),
        )
        for pair in pairs_of(task)
    )
