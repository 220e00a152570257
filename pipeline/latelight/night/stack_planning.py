"""Which frames are searched against a stack of the others."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from latelight.frames.headers import FrameHeader
from latelight.night.pairing import (
    Neighbours,
    Stack,
    StackPair,
    StackTemplate,
    file_name,
    time_order,
    with_unique_names,
)
from latelight.night.settings import PairSettings

__all__ = ["StackPlan", "plan_stacks"]


@dataclass(frozen=True, slots=True)
class StackPlan:
    """Fields whose template is a stack, and the frames of all others.

    Attributes
    ----------
    stacks : tuple of Stack
        Ordered by field, filter, chip and epoch.
    rest : tuple of FrameHeader
        Frames of fields of too few epochs, to be paired.
    remarks : tuple of str
        What is paired although a stack was asked for, in words for the log.
    """

    stacks: tuple[Stack, ...]
    rest: tuple[FrameHeader, ...]
    remarks: tuple[str, ...]


def plan_stacks(
    headers: Sequence[FrameHeader], *, settings: PairSettings, min_epochs: int
) -> StackPlan:
    """Part fields of enough epochs from the others.

    Parameters
    ----------
    headers : sequence of FrameHeader
        Frames without copies.
    settings : PairSettings
        Least time between epochs, least overlap.
    min_epochs : int
        Fewest epochs for a stack.

    Notes
    -----
    Frames nearer in time than ``min_days``, one after the other, are one epoch: none
    of them enters the stack for another.
    """
    groups: list[list[FrameHeader]] = []
    rest: list[FrameHeader] = []
    remarks: list[str] = []
    for group in _groups(headers, settings):
        count = _count_epochs(group, settings.min_days)
        if count >= min_epochs:
            groups.append(group)
            continue
        rest += group
        if count > 1:
            first = group[0]
            remarks.append(
                f"{count} epochs only of field {first.field!r}, filter "
                f"{first.filter!r}: the earliest is the template; a stack needs "
                f"{min_epochs} (stacking.min_epochs)"
            )
    pairs = [[_pair(h, group, settings.min_days) for h in group] for group in groups]
    named = iter(with_unique_names([pair for group in pairs for pair in group]))
    return StackPlan(
        stacks=tuple(Stack(tuple(next(named) for _ in group)) for group in pairs),
        rest=tuple(rest),
        remarks=tuple(remarks),
    )


def _groups(
    headers: Sequence[FrameHeader], settings: PairSettings
) -> list[list[FrameHeader]]:
    """Return the frames of each place and filter, in order of time."""
    known = Neighbours(headers)
    taken: set[int] = set()
    groups: list[list[FrameHeader]] = []
    # Those with a field word first: they know best what belongs together.
    for header in sorted(headers, key=lambda h: (not h.field, time_order(h))):
        if id(header) in taken:
            continue
        near = known.of(header, min_overlap=settings.min_overlap)
        group = [h for h in near if id(h) not in taken]
        taken.update(id(h) for h in group)
        groups.append(sorted(group, key=lambda h: (h.mjd, h.name, str(h.path))))
    return sorted(groups, key=lambda group: time_order(group[0]))


def _count_epochs(group: Sequence[FrameHeader], min_days: float) -> int:
    gaps = np.diff([header.mjd for header in group])
    return 1 + int(np.count_nonzero(gaps >= min_days))


def _pair(
    science: FrameHeader, group: Sequence[FrameHeader], min_days: float
) -> StackPair:
    mjds = [h.mjd for h in group if abs(h.mjd - science.mjd) >= min_days]
    template = StackTemplate(
        name=f"stack of {len(mjds)}", mjd=float(np.mean(mjds)), mjds=tuple(mjds)
    )
    return StackPair(file_name(science.name, "stack"), template, science)
