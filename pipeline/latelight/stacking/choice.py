"""Which epochs of a field become its template, and on whose pixels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from latelight.stacking.settings import StackingSettings

__all__ = ["EpochChoice", "EpochQuality", "choose_epochs"]


@dataclass(frozen=True, slots=True)
class EpochQuality:
    """What decides about an epoch.

    Attributes
    ----------
    seeing : float
        Width of the stars, in one unit for all epochs, > 0.
    noise : float
        1 sigma of a star's flux, on one flux scale for all epochs, > 0.
    overlap : float
        Part of the frame that lies on the one in the middle of the field, 0 to 1.
    """

    seeing: float
    noise: float
    overlap: float


@dataclass(frozen=True, slots=True)
class EpochChoice:
    """The epochs of a stack.

    Attributes
    ----------
    members : tuple of int
        Epochs that are stacked, rising; at least one.
    references : tuple of int
        The same, best reference first: the others are brought to its pixels, PSF
        and flux scale.
    left_out : dict of int to str
        Why each of the others is not stacked.
    """

    members: tuple[int, ...]
    references: tuple[int, ...]
    left_out: dict[int, str]


def choose_epochs(
    epochs: Sequence[EpochQuality], *, settings: StackingSettings
) -> EpochChoice:
    """Choose the epochs that are stacked, and the reference.

    Parameters
    ----------
    epochs : sequence of EpochQuality
        At least one.
    settings : StackingSettings
        ``min_epochs``, ``max_epochs``, ``max_seeing``, ``min_weight``,
        ``min_overlap``.

    Returns
    -------
    EpochChoice
        The ``min_epochs`` best by each rule stay whatever the limit.  The broadest
        member is the reference, so that all others can be convolved to its PSF and
        nothing has to be sharpened.

    Raises
    ------
    ValueError
        If there is no epoch.
    """
    if not epochs:
        msg = "epochs must not be empty"
        raise ValueError(msg)
    left_out: dict[int, str] = {}
    kept = list(range(len(epochs)))
    for rule in (_off_the_middle, _too_broad, _too_shallow, _too_many):
        reasons = rule([epochs[index] for index in kept], settings)
        left_out |= {i: why for i, why in zip(kept, reasons, strict=True) if why}
        kept = [index for index in kept if index not in left_out]
    return EpochChoice(
        members=tuple(kept),
        references=tuple(sorted(kept, key=lambda i: (-epochs[i].seeing, i))),
        left_out=left_out,
    )


# Rules: why each epoch is not stacked, or an empty text.


def _allowed(
    values: Sequence[float], limit: float, settings: StackingSettings
) -> float:
    """Return the largest value allowed: the limit, or that of enough epochs."""
    return max(limit, sorted(values)[: settings.min_epochs][-1])


def _off_the_middle(
    epochs: Sequence[EpochQuality], settings: StackingSettings
) -> list[str]:
    missing = [1.0 - epoch.overlap for epoch in epochs]
    limit = _allowed(missing, 1.0 - settings.min_overlap, settings)
    return [
        ""
        if 1.0 - epoch.overlap <= limit
        else f"{100.0 * epoch.overlap:.0f} % of it lies on the frame in the middle "
        f"(stacking.min_overlap = {settings.min_overlap:g})"
        for epoch in epochs
    ]


def _too_broad(epochs: Sequence[EpochQuality], settings: StackingSettings) -> list[str]:
    seeing = [epoch.seeing for epoch in epochs]
    sharpest = min(seeing)
    limit = _allowed(seeing, settings.max_seeing * sharpest, settings)
    return [
        ""
        if epoch.seeing <= limit
        else f"seeing {epoch.seeing / sharpest:.2f} times that of the sharpest "
        f"(stacking.max_seeing = {settings.max_seeing:g})"
        for epoch in epochs
    ]


def _too_shallow(
    epochs: Sequence[EpochQuality], settings: StackingSettings
) -> list[str]:
    noise = [epoch.noise for epoch in epochs]
    quietest = min(noise)
    limit = _allowed(noise, quietest / settings.min_weight**0.5, settings)
    return [
        ""
        if epoch.noise <= limit
        else f"weight {(quietest / epoch.noise) ** 2:.3f} of the deepest's "
        f"(stacking.min_weight = {settings.min_weight:g})"
        for epoch in epochs
    ]


def _too_many(epochs: Sequence[EpochQuality], settings: StackingSettings) -> list[str]:
    order = sorted(range(len(epochs)), key=lambda index: epochs[index].noise)
    beyond = set(order[settings.max_epochs :])
    why = f"{settings.max_epochs} epochs are deeper (stacking.max_epochs)"
    return [why if index in beyond else "" for index in range(len(epochs))]
