"""Which frame is subtracted from which, and why the others are not."""

from __future__ import annotations

import re
from collections import defaultdict
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal, TypeVar

from latelight.frames.headers import FrameHeader
from latelight.night.overlap import overlap_fraction
from latelight.night.settings import PairSettings
from latelight.products.rows import PairRow

__all__ = [
    "AnyPair",
    "Neighbours",
    "Pair",
    "Plan",
    "Stack",
    "StackPair",
    "StackTemplate",
    "failed_frame",
    "failed_pair",
    "file_name",
    "plan_pairs",
    "set_aside",
    "time_order",
    "with_unique_names",
]

Side = Literal["science", "template"]

# Two readings of one clock; no exposure is shorter than this apart from the next.
_SAME_MOMENT_DAYS = 1e-6


@dataclass(frozen=True, slots=True)
class Pair:
    """Two frames to be compared.

    Attributes
    ----------
    name : str
        Unique in a night, and fit for the name of a file.
    template, science : FrameHeader
        The frame that is subtracted, and the one it is subtracted from.
    """

    name: str
    template: FrameHeader
    science: FrameHeader

    @property
    def later(self) -> Side:
        """Which of the two was taken later."""
        return "science" if self.science.mjd > self.template.mjd else "template"


@dataclass(frozen=True, slots=True)
class StackTemplate:
    """A template made of several epochs.

    Attributes
    ----------
    name : str
        What it is made of, in words.
    mjd : float
        Its mean epoch, MJD.
    mjds : tuple of float
        Those of its frames.
    """

    name: str
    mjd: float
    mjds: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class StackPair:
    """A frame to be compared with a stack of the other epochs of its field.

    Attributes
    ----------
    name : str
        Unique in a night, and fit for the name of a file.
    template : StackTemplate
        The stack.
    science : FrameHeader
        The frame.
    """

    name: str
    template: StackTemplate
    science: FrameHeader

    @property
    def later(self) -> Side | None:
        """Which of the two was taken later; None when the stack has both sides."""
        if all(mjd < self.science.mjd for mjd in self.template.mjds):
            return "science"
        if all(mjd > self.science.mjd for mjd in self.template.mjds):
            return "template"
        return None


AnyPair = Pair | StackPair
SomePair = TypeVar("SomePair", Pair, StackPair)


@dataclass(frozen=True, slots=True)
class Stack:
    """The epochs of one field that are worked on together.

    Attributes
    ----------
    pairs : tuple of StackPair
        Each epoch with the stack of the others, in order of time.
    """

    pairs: tuple[StackPair, ...]


@dataclass(frozen=True, slots=True)
class Plan:
    """What will be done with a set of frames.

    Attributes
    ----------
    pairs : tuple of Pair
        Ordered by field, filter, chip and epoch.
    failed : tuple of PairRow
        Frames that cannot take part, with the reason.
    remarks : tuple of str
        Frames left out as is right, in words for the log.
    stacks : tuple of Stack
        Fields whose template is a stack, in the same order.
    """

    pairs: tuple[Pair, ...]
    failed: tuple[PairRow, ...]
    remarks: tuple[str, ...]
    stacks: tuple[Stack, ...] = ()

    @property
    def comparisons(self) -> tuple[AnyPair, ...]:
        """Everything that will be compared: pairs, then frames with stacks."""
        return (*self.pairs, *(pair for stack in self.stacks for pair in stack.pairs))


def set_aside(
    headers: Iterable[FrameHeader], digests: Mapping[Path, str]
) -> tuple[tuple[FrameHeader, ...], tuple[PairRow, ...]]:
    """Part frames from copies of them: the first by path stays.

    Parameters
    ----------
    headers : iterable of FrameHeader
        Frames.
    digests : mapping
        Digest of every file.

    Returns
    -------
    kept : tuple of FrameHeader
        Ordered by path and chip.
    failed : tuple of PairRow
        The copies: files of the same bytes, or frames of the same chip, filter,
        field and moment.
    """
    kept: list[FrameHeader] = []
    failed: list[PairRow] = []
    of_words: dict[tuple[str, str, str], list[FrameHeader]] = defaultdict(list)
    for header in sorted(headers, key=lambda h: (str(h.path), h.chip)):
        alike = of_words[header.chip, header.filter, header.field]
        twin = next((k for k in alike if _is_copy(header, k, digests)), None)
        if twin is None:
            kept.append(header)
            alike.append(header)
            continue
        how = (
            "the files are byte for byte the same"
            if digests[header.path] == digests[twin.path]
            else f"same chip, filter and field at MJD {header.mjd:.6f}"
        )
        reason = f"duplicate of {twin.path.name} ({how}): left out; remove one of them"
        failed.append(failed_frame(header, reason))
    return tuple(kept), tuple(failed)


def _is_copy(a: FrameHeader, b: FrameHeader, digests: Mapping[Path, str]) -> bool:
    """Whether two frames of the same chip, filter and field are one."""
    if a.path == b.path:
        return False
    return _days(a, b) < _SAME_MOMENT_DAYS or digests[a.path] == digests[b.path]


def plan_pairs(
    headers: Sequence[FrameHeader],
    *,
    settings: PairSettings,
    rank: Callable[[FrameHeader], float],
    templates: Sequence[FrameHeader] = (),
) -> Plan:
    """Choose a template for every frame.

    Parameters
    ----------
    headers : sequence of FrameHeader
        Frames without copies.
    settings : PairSettings
        Least time between epochs, least overlap.
    rank : callable
        The frame of lowest rank among those of one place and filter is their
        template; ties go to the earlier frame.
    templates : sequence of FrameHeader
        When given, templates are taken from these alone.

    Notes
    -----
    Frames are of one place when they share field word and chip; where a frame
    has no field word, when they overlap on the sky; where a WCS is missing too,
    when they share the chip.
    """
    pairs: list[Pair] = []
    failed: list[PairRow] = []
    remarks: list[str] = []
    given = {t.path for t in templates}
    known = Neighbours(templates or headers)
    for science in sorted(headers, key=time_order):
        if science.path in given:
            continue
        rivals = known.of(science, min_overlap=settings.min_overlap)
        apart = [h for h in rivals if _days(h, science) >= settings.min_days]
        if not apart:
            why = _why_alone(science, rivals, settings, given=bool(templates))
            failed.append(failed_frame(science, why))
            continue
        template = min(rivals, key=lambda h: (rank(h), h.mjd, h.name))
        if template is science:
            continue
        if _days(template, science) < settings.min_days:
            remarks.append(
                f"{science.name}: of the same epoch as its template {template.name} "
                f"(pairs.min_days = {settings.min_days:g}), not compared with it"
            )
            continue
        name = file_name(science.name, template.name)
        pairs.append(Pair(name, template, science))
    return Plan(with_unique_names(pairs), tuple(failed), tuple(remarks))


def time_order(header: FrameHeader) -> tuple[str, str, str, float, str]:
    """Return the key that orders frames by field, filter, chip and epoch."""
    return (header.field, header.filter, header.chip, header.mjd, str(header.path))


def file_name(science: str, template: str) -> str:
    """Return the name of a pair, fit for the name of a file."""
    return re.sub(r"[^\w.+-]+", "_", f"{science}-{template}")


def _days(a: FrameHeader, b: FrameHeader) -> float:
    return abs(a.mjd - b.mjd)


class Neighbours:
    """Frames by their words, so that a night of many chips is searched quickly."""

    def __init__(self, headers: Sequence[FrameHeader]) -> None:
        self._with_field: dict[tuple[str, str, str], list[FrameHeader]] = defaultdict(
            list
        )
        self._of_filter: dict[str, list[FrameHeader]] = defaultdict(list)
        self._without_field: dict[str, list[FrameHeader]] = defaultdict(list)
        for header in headers:
            self._of_filter[header.filter].append(header)
            if header.field:
                self._with_field[_words(header)].append(header)
            else:
                self._without_field[header.filter].append(header)

    def of(self, frame: FrameHeader, *, min_overlap: float) -> list[FrameHeader]:
        """Return the frames that show the same place through the same filter."""
        if not frame.field:
            near = self._of_filter[frame.filter]
            return [h for h in near if _meet(h, frame, min_overlap)]
        near = self._without_field[frame.filter]
        return self._with_field[_words(frame)] + [
            h for h in near if _meet(h, frame, min_overlap)
        ]


def _words(header: FrameHeader) -> tuple[str, str, str]:
    return (header.filter, header.field, header.chip)


def _meet(a: FrameHeader, b: FrameHeader, min_overlap: float) -> bool:
    """Whether two frames, not both with a field word, are of one place."""
    if a is b:
        return True
    if a.footprint is not None and b.footprint is not None:
        return overlap_fraction(a.footprint, b.footprint) >= min_overlap
    return (a.field, a.chip) == (b.field, b.chip)


def _why_alone(
    science: FrameHeader,
    rivals: Sequence[FrameHeader],
    settings: PairSettings,
    *,
    given: bool,
) -> str:
    """Say why a frame has nothing to be compared with."""
    place = f"field {science.field!r}" if science.field else "its place on the sky"
    what = f"{place}, filter {science.filter!r}"
    if science.chip and science.field:
        what += f", chip {science.chip!r}"
    if given and not rivals:
        return f"pairs.template does not show {what}; choose another template"
    if len(rivals) > 1 or given:
        return (
            f"one epoch only of {what}: its {len(rivals)} frames lie within "
            f"pairs.min_days = {settings.min_days:g} d; add frames of another epoch"
        )
    return f"one epoch only: no other frame of {what}; add frames of another epoch"


def with_unique_names(pairs: Sequence[SomePair]) -> tuple[SomePair, ...]:
    """Put numbers on the names that frames of the same name in two folders share."""
    seen: dict[str, int] = {}
    unique: list[SomePair] = []
    for pair in pairs:
        count = seen[pair.name] = seen.get(pair.name, 0) + 1
        name = pair.name if count == 1 else f"{pair.name}-{count}"
        unique.append(replace(pair, name=name))
    return tuple(unique)


def failed_frame(header: FrameHeader, reason: str) -> PairRow:
    """Return the row of a frame that takes part in no pair."""
    return PairRow(
        pair=header.name,
        field=header.field,
        filter=header.filter,
        template="",
        science=header.name,
        mjd_template=None,
        mjd_science=header.mjd,
        status="failed",
        reason=reason,
    )


def failed_pair(pair: AnyPair, reason: str) -> PairRow:
    """Return the row of a pair that could not be finished."""
    return PairRow(
        pair=pair.name,
        field=pair.science.field,
        filter=pair.science.filter,
        template=pair.template.name,
        science=pair.science.name,
        mjd_template=pair.template.mjd,
        mjd_science=pair.science.mjd,
        status="failed",
        reason=reason,
    )
