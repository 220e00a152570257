"""Several origins at once: each explains a part of the arcs, the rest is random."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from latelight.origin.joint_laws import turns
from latelight.origin.joint_likelihood import REACH_DEG, SHARES, OriginLikelihood
from latelight.origin.joint_search import PairList, best_origin
from latelight.records import FloatArray

__all__ = [
    "Component",
    "Mixture",
    "add_origin",
    "fit_component",
    "mixture_base",
    "refined",
    "without",
]

_PASSES = 3
# Gain of the log likelihood below which a mixture is settled.
_SETTLED = 0.05
# Pairs times arcs when origins are sought anew.
_REFINING_EFFORT = 1e6
# The law averaged over a posterior counts like so many arcs when it is fitted.
_LAW_ARCS = 4.0
_LAW_ROUNDS = 8
_SHARE_LIMITS = (0.02, 0.98)


@dataclass(frozen=True, slots=True)
class Component:
    """One origin of a mixture.

    Attributes
    ----------
    direction : float64 array, shape (3,)
        Unit vector.
    share : float
        Share of the arcs within reach that it lit.
    reach_deg : float
        How far its arcs lie.
    law_weights : float64 array, shape (n_laws,)
        How probable each law of the turn is for it.
    """

    direction: FloatArray
    share: float
    reach_deg: float
    law_weights: FloatArray


@dataclass(frozen=True, slots=True)
class Mixture:
    """Origins and how well they explain the arcs together.

    Attributes
    ----------
    components : tuple of Component
        The origins.
    value : float
        Natural log likelihood ratio against random directions.
    """

    components: tuple[Component, ...] = ()
    value: float = 0.0


def mixture_base(
    likelihood: OriginLikelihood, components: Sequence[Component]
) -> FloatArray:
    """Return the likelihood ratio of each arc under a mixture, shape (n,)."""
    base = np.ones(len(likelihood.arcs))
    for one in components:
        ratio = likelihood.arc_ratios(one.direction, one.law_weights, one.reach_deg)
        base += one.share * np.where(ratio > 0.0, ratio - 1.0, 0.0)
    # Shares are of the arcs within reach, so where reaches differ they may add up to
    # a little more than one.
    return np.maximum(base, 1e-3)


def without(components: Sequence[Component], index: int) -> tuple[Component, ...]:
    """Return the mixture of all arcs that do not come from one of the origins."""
    left = 1.0 - components[index].share
    return tuple(
        replace(one, share=min(one.share / left, 0.98))
        for i, one in enumerate(components)
        if i != index
    )


def add_origin(
    likelihood: OriginLikelihood,
    before: Mixture,
    pairs: PairList,
    *,
    extra: FloatArray | None = None,
) -> Mixture:
    """Add the best further origin to a mixture and fit all anew in turns.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of a single origin.
    before : Mixture
        The origins so far; they may move.
    pairs : int array, shape (m, 2)
        Pairs of arcs whose crossings are tried.
    extra : float64 array, shape (k, 3), optional
        Further places to start from.

    Returns
    -------
    Mixture
        One origin more, or the same when no two circles cross.  Two that pulled one
        peak between them part here: each is sought over the whole sky beside the
        other.
    """
    best = _inserted(likelihood, before.components, pairs, extra)
    if best is None:
        return before
    return refined(likelihood, best, pairs) if before.components else best


def refined(likelihood: OriginLikelihood, mixture: Mixture, pairs: PairList) -> Mixture:
    """Seek every origin anew beside the others, in turns, until nothing is gained.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of a single origin.
    mixture : Mixture
        Origins near which and over the whole sky is sought.
    pairs : int array, shape (m, 2)
        Pairs of arcs whose crossings are tried; some of them when there are many arcs.
    """
    some = pairs[:: 1 + int(len(pairs) * len(likelihood.arcs) / _REFINING_EFFORT)]
    best = trial = mixture
    for _ in range(_PASSES):
        start = best.value
        for _ in mixture.components:
            # The oldest first: the new one goes to the end.
            here = trial.components[0].direction[None]
            others = without(trial.components, 0)
            again = _inserted(likelihood, others, some, here)
            if again is None:
                return best
            trial = again
            if trial.value > best.value:
                best = trial
        if best.value < start + _SETTLED:
            break
    return best


def fit_component(beside: OriginLikelihood, direction: FloatArray) -> Component:
    """Return the share, reach and law that suit an origin beside others.

    The law is that of the posterior for few arcs; many arcs mix the laws as they need,
    so that no second origin is invented to mend the tails of the first.
    """
    weights = beside.weights_at(direction)
    share = float(weights.sum(axis=(0, 2)) @ SHARES)
    reach = float(REACH_DEG[np.argmax(weights.sum(axis=(1, 2)))])
    start = weights.sum(axis=(0, 1))
    law, ratios = start, beside.laws.ratios(turns(beside.arcs, direction))
    near = beside.arcs.frames[:, 0] @ direction >= np.cos(np.radians(reach))
    count = beside.arcs.weight * near
    for _ in range(_LAW_ROUNDS):
        each = share * ratios * law
        parts = each / (each.sum(axis=1) + (1.0 - share) * beside.base)[:, None]
        mine = count @ parts
        law = (_LAW_ARCS * start + mine) / (_LAW_ARCS + mine.sum())
        share = float(np.clip(mine.sum() / max(count.sum(), 1e-9), *_SHARE_LIMITS))
    return Component(direction, share, reach, law)


def _inserted(
    likelihood: OriginLikelihood,
    others: tuple[Component, ...],
    pairs: PairList,
    extra: FloatArray | None,
) -> Mixture | None:
    """Return a mixture with the best further origin at its end."""
    base = mixture_base(likelihood, others)
    beside = likelihood.beside(base)
    direction, value = best_origin(beside, pairs, extra=extra)
    if not np.isfinite(value):
        return None
    new = fit_component(beside, direction)
    kept = tuple(replace(one, share=one.share * (1.0 - new.share)) for one in others)
    total = value + float(likelihood.arcs.weight @ np.log(base))
    return Mixture((*kept, new), total)
