"""The epochs of a field, read once and brought onto the pixels of one of them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np

from latelight.config import NightConfig
from latelight.errors import StageError
from latelight.masks import MaskBit
from latelight.night.calibration import known
from latelight.night.chain import load_frame, seeing
from latelight.night.journal import Journal
from latelight.night.overlap import overlap_fraction
from latelight.night.pairing import StackPair
from latelight.night.quality import Quality, flux_noises, quality_of, widths
from latelight.records import Alignment, Frame, Plane, StarList
from latelight.registration.alignment import align
from latelight.registration.pixel_map import identity_map
from latelight.registration.resampling import resample
from latelight.registration.stars import detect_stars
from latelight.stacking.choice import EpochChoice, EpochQuality, choose_epochs

__all__ = [
    "FieldGrid",
    "GridEpoch",
    "ReadEpoch",
    "gather",
    "on_each_epoch",
    "read_epochs",
]

_STAGE = "stacking"
_REGISTRATION = "registration"
Item = TypeVar("Item")
Result = TypeVar("Result")


@dataclass(frozen=True, slots=True)
class ReadEpoch:
    """An epoch as it was read: its frame, its stars and how good it is."""

    pair: StackPair
    journal: Journal
    frame: Frame
    stars: StarList
    quality: Quality


@dataclass(frozen=True, slots=True)
class GridEpoch:
    """An epoch on the reference's pixels.

    Attributes
    ----------
    pair, journal : StackPair, Journal
        What is asked of it, and what is known so far.
    zero_point : float or None
        Magnitude of one of its counts.
    stars : StarList
        Its own, on its own pixels.
    alignment : Alignment
        Reference pixels to its own.
    plane : Plane
        Its pixels, on the reference's grid.
    """

    pair: StackPair
    journal: Journal
    zero_point: float | None
    stars: StarList
    alignment: Alignment
    plane: Plane


@dataclass(frozen=True, slots=True)
class FieldGrid:
    """The epochs of a field on the pixels of the reference.

    Attributes
    ----------
    reference : GridEpoch
        The one whose pixels they are; it is one of the members.
    wcs : astropy.wcs.WCS or None
        Of the pixels.
    members : list of GridEpoch
        The other epochs that are stacked; emptied by the one who takes them on, so
        that their pixels can be let go.
    others : tuple of GridEpoch
        Epochs that are searched only.
    """

    reference: GridEpoch
    wcs: Any
    members: list[GridEpoch]
    others: tuple[GridEpoch, ...]


def read_epochs(
    pairs: Sequence[StackPair], journals: Sequence[Journal], config: NightConfig
) -> list[ReadEpoch]:
    """Read the frames of a field and find their stars.

    A frame that cannot be used closes its own journal and is left out.
    """
    return on_each_epoch(
        list(zip(pairs, journals, strict=True)),
        journal=lambda item: item[1],
        work=lambda item: _read(*item, config),
    )


def on_each_epoch(
    items: list[Item],
    *,
    journal: Callable[[Item], Journal],
    work: Callable[[Item], Result],
) -> list[Result]:
    """Work on every item under its journal's guard; empty the list on the way.

    What fails closes its journal and is left out.  Items are let go one by one, so
    that the pixels they hold do not pile up beside those that are made of them.
    """
    results: list[Result] = []
    while items:
        item = items.pop(0)
        with journal(item).guarded():
            results.append(work(item))
    return results


def _read(pair: StackPair, journal: Journal, config: NightConfig) -> ReadEpoch:
    with journal.stage("frames"):
        frame = load_frame(pair.science, config)
    for note in frame.notes:
        journal.say(f"{frame.name}: {note}", stage="frames")
    journal.add(notes="; ".join(f"{frame.name}: {note}" for note in frame.notes))
    with journal.stage("stars"):
        stars = detect_stars(frame.plane, settings=config.registration)
    journal.add(
        n_stars_science=len(stars),
        fwhm_science_px=known(stars.fwhm_px),
        seeing_science=seeing(frame, stars),
    )
    quality = quality_of(frame, stars)
    if quality is None:
        msg = "no star stands out; leave the frame out or lower detect_sigma"
        raise StageError(_REGISTRATION, msg)
    return ReadEpoch(pair, journal, frame, stars, quality)


def gather(epochs: list[ReadEpoch], config: NightConfig) -> FieldGrid:
    """Choose the epochs of the stack, and bring all epochs onto one grid.

    Parameters
    ----------
    epochs : list of ReadEpoch
        At least one; emptied, so that their pixels can be let go.
    config : NightConfig
        All settings.

    Notes
    -----
    An epoch that cannot be registered closes its own journal and is left out.
    """
    choice = _choose(epochs, config)
    index, alignments = _find_reference(epochs, choice, config)
    reference = epochs[index]
    for i, reason in choice.left_out.items():
        epochs[i].journal.say(f"not stacked: {reason}", stage=_STAGE)
    found = {id(e.journal): a for e, a in zip(epochs, alignments, strict=True)}
    members = {id(epochs[i].journal) for i in choice.members}
    placed = on_each_epoch(
        epochs,
        journal=lambda epoch: epoch.journal,
        work=lambda epoch: _place(epoch, reference, found[id(epoch.journal)], config),
    )
    apart = [e for e in placed if e.journal is not reference.journal]
    return FieldGrid(
        reference=next(e for e in placed if e.journal is reference.journal),
        wcs=reference.frame.wcs,
        members=[e for e in apart if id(e.journal) in members],
        others=tuple(e for e in apart if id(e.journal) not in members),
    )


def _choose(epochs: Sequence[ReadEpoch], config: NightConfig) -> EpochChoice:
    quality = [epoch.quality for epoch in epochs]
    headers = [epoch.pair.science for epoch in epochs]
    return choose_epochs(
        [
            EpochQuality(*values)
            for values in zip(
                widths(quality),
                flux_noises(headers, quality),
                _overlaps(epochs),
                strict=True,
            )
        ],
        settings=config.stacking,
    )


def _overlaps(epochs: Sequence[ReadEpoch]) -> list[float]:
    """Return the part of each frame that lies on the one in the middle of all."""
    places = [epoch.pair.science.footprint for epoch in epochs]
    known_places = [place for place in places if place is not None]
    if len(known_places) < len(places):
        return [1.0] * len(places)  # only their stars can tell
    shared = np.array(
        [[overlap_fraction(a, b) for b in known_places] for a in known_places]
    )
    return shared[int(np.argmax(shared.sum(axis=0)))].tolist()


def _find_reference(
    epochs: Sequence[ReadEpoch], choice: EpochChoice, config: NightConfig
) -> tuple[int, list[Alignment | Exception]]:
    """Return the reference, and the alignment of every epoch or why it has none.

    The first choice with which half of the other members align, so that one faulty
    frame does not cost the field.
    """
    tried: list[tuple[int, int, list[Alignment | Exception]]] = []
    for index in choice.references:
        found = [_try_to_align(epochs[index], epoch, config) for epoch in epochs]
        fits = sum(isinstance(found[i], Alignment) for i in choice.members) - 1
        tried.append((fits, index, found))
        if 2 * fits >= len(choice.members) - 1:
            break
    _, index, found = max(tried, key=lambda trial: trial[0])
    return index, found


def _try_to_align(
    reference: ReadEpoch, epoch: ReadEpoch, config: NightConfig
) -> Alignment | Exception:
    """Align an epoch; an error is told when the epoch's turn comes."""
    shape = reference.frame.plane.pixels.shape
    if epoch is reference:
        rows = np.arange(len(epoch.stars))
        return Alignment(identity_map(shape), rows, rows, rms_px=0.0, method="wcs")
    try:
        return align(
            reference.stars,
            epoch.stars,
            reference.frame.wcs,
            epoch.frame.wcs,
            science_shape=shape,
            template_shape=epoch.frame.plane.pixels.shape,
            settings=config.registration,
        )
    except Exception as error:
        return error


def _place(
    epoch: ReadEpoch,
    reference: ReadEpoch,
    alignment: Alignment | Exception,
    config: NightConfig,
) -> GridEpoch:
    """Bring one epoch onto the reference's pixels."""
    journal, plane = epoch.journal, epoch.frame.plane
    with journal.stage(_REGISTRATION):
        if isinstance(alignment, Exception):
            raise alignment
    journal.add(n_stars_template=len(reference.stars))
    if epoch is not reference:
        journal.add(
            n_matched=int(alignment.science_index.size),
            registration_rms=known(alignment.rms_px),
            registration_error=known(alignment.pixel_map.error_px),
            registration_method=alignment.method,
        )
        with journal.stage("resampling"):
            plane = resample(
                plane,
                alignment.pixel_map,
                shape=reference.frame.plane.pixels.shape,
                settings=config.registration,
            )
            _refuse_elsewhere(plane, reference.frame.name, config)
    zero_point = epoch.frame.zero_point
    return GridEpoch(epoch.pair, journal, zero_point, epoch.stars, alignment, plane)


def _refuse_elsewhere(plane: Plane, reference: str, config: NightConfig) -> None:
    least = config.pairs.min_overlap
    share = float(np.mean((plane.mask & np.uint16(MaskBit.NO_DATA)) == 0))
    if share < least:
        msg = (
            f"it covers {100.0 * share:.1f} % of the reference {reference}, "
            f"pairs.min_overlap = {least:g}; leave the frame out or lower the limit"
        )
        raise StageError(_REGISTRATION, msg)
