"""Several origins at once: each explains a part of the arcs, the rest is random."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from latelight.origin.joint_laws import turns
from latelight.origin.joint_likelihood import REACH_DEG, SHARES, OriginLikelihood
from latelight.origin.joint_search import PairList, best_origin
from latelight.origin.joint_speeds import SpeedLaw, fit_speeds, speed_ratios
from latelight.records import BoolArray, FloatArray

__all__ = [
    "Component",
    "Mixture",
    "add_origin",
    "arc_ratios",
    "beside_others",
    "first_origin",
    "fit_component",
    "membership",
    "mixture_base",
    "refined",
    "valued",
    "with_speeds",
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
_SHARE_ROUNDS = 12
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
    speeds : SpeedLaw or None
        Speeds of its arcs; None while they are not asked.
    """

    direction: FloatArray
    share: float
    reach_deg: float
    law_weights: FloatArray
    speeds: SpeedLaw | None = None


@dataclass(frozen=True, slots=True)
class Mixture:
    """Origins and how well they explain the arcs together.

    Attributes
    ----------
    components : tuple of Component
        The origins.
    value : float
        Natural log likelihood ratio of directions and speeds against random arcs.
    """

    components: tuple[Component, ...] = ()
    value: float = 0.0


def arc_ratios(likelihood: OriginLikelihood, one: Component) -> FloatArray:
    """Return the likelihood ratio of each arc for an origin, 0 beyond its reach."""
    ratio = likelihood.arc_ratios(one.direction, one.law_weights, one.reach_deg)
    return ratio * speed_ratios(likelihood.arcs, one.direction, one.speeds)


def mixture_base(
    likelihood: OriginLikelihood, components: Sequence[Component]
) -> FloatArray:
    """Return the likelihood ratio of each arc under a mixture, shape (n,)."""
    base = np.ones(len(likelihood.arcs))
    for one in components:
        ratio = arc_ratios(likelihood, one)
        base += one.share * np.where(ratio > 0.0, ratio - 1.0, 0.0)
    # Shares are of the arcs within reach, so where reaches differ they may add up to
    # a little more than one.
    return np.maximum(base, 1e-3)


def beside_others(
    likelihood: OriginLikelihood, components: Sequence[Component], index: int
) -> OriginLikelihood:
    """Return the likelihood of one origin of a mixture beside the others."""
    one = components[index]
    gain = speed_ratios(likelihood.arcs, one.direction, one.speeds)
    base = mixture_base(likelihood, without(likelihood, components, index))
    return likelihood.beside(base, gain)


def membership(beside: OriginLikelihood, one: Component) -> FloatArray:
    """Return the probability that each arc comes from an origin."""
    lit = one.share * arc_ratios(beside, one)
    return lit / (lit + (1.0 - one.share) * beside.base)


def without(
    likelihood: OriginLikelihood, components: Sequence[Component], index: int
) -> tuple[Component, ...]:
    """Return the mixture of all arcs that do not come from one of the origins.

    The shares of the others grow as far as they reach the same arcs.
    """
    gone = components[index]
    lost = _within(likelihood, gone)
    rest = []
    for other in (*components[:index], *components[index + 1 :]):
        own = _within(likelihood, other)
        overlap = float((own & lost).sum()) / max(float(own.sum()), 1.0)
        share = other.share / (1.0 - gone.share * overlap)
        rest.append(replace(other, share=min(share, _SHARE_LIMITS[1])))
    return tuple(rest)


def first_origin(
    likelihood: OriginLikelihood,
    pairs: PairList,
    *,
    extra: FloatArray | None = None,
) -> tuple[Component, float] | None:
    """Return the best single origin, by directions alone, and its natural log ratio.

    None when no two circles cross; arguments as for :func:`add_origin`.
    """
    direction, value = best_origin(likelihood, pairs, extra=extra)
    if not np.isfinite(value):
        return None
    return fit_component(likelihood, direction), value


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
    beside = likelihood.beside(mixture_base(likelihood, before.components))
    made = _inserted(likelihood, before.components, beside, pairs, extra)
    return before if made is None else refined(likelihood, made, pairs)


def refined(likelihood: OriginLikelihood, mixture: Mixture, pairs: PairList) -> Mixture:
    """Seek every origin anew beside the others, in turns, until nothing is gained.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of a single origin.
    mixture : Mixture
        Origins near which and over the whole sky is sought; speeds are asked too.
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
            beside = beside_others(likelihood, trial.components, 0)
            others = without(likelihood, trial.components, 0)
            again = _inserted(likelihood, others, beside, some, here)
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
    law = start
    ratios = beside.laws.ratios(turns(beside.arcs, direction)) * beside.gain[:, None]
    near = beside.arcs.frames[:, 0] @ direction >= np.cos(np.radians(reach))
    count = beside.arcs.weight * near
    for _ in range(_LAW_ROUNDS):
        each = share * ratios * law
        parts = each / (each.sum(axis=1) + (1.0 - share) * beside.base)[:, None]
        mine = count @ parts
        law = (_LAW_ARCS * start + mine) / (_LAW_ARCS + mine.sum())
        share = float(np.clip(mine.sum() / max(count.sum(), 1e-9), *_SHARE_LIMITS))
    return Component(direction, share, reach, law)


def with_speeds(likelihood: OriginLikelihood, one: Component) -> Component:
    """Return an origin with the law of the speeds of its arcs.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of this origin beside the others.
    one : Component
        The origin.
    """
    own = membership(likelihood, one)
    return replace(one, speeds=fit_speeds(likelihood.arcs, one.direction, own))


def _inserted(
    likelihood: OriginLikelihood,
    others: tuple[Component, ...],
    beside: OriginLikelihood,
    pairs: PairList,
    extra: FloatArray | None,
) -> Mixture | None:
    """Return a mixture with the best further origin at its end."""
    direction, value = best_origin(beside, pairs, extra=extra)
    if not np.isfinite(value):
        return None
    new = with_speeds(beside, fit_component(beside, direction))
    return valued(likelihood, _shared(likelihood, (*others, new)))


def _shared(
    likelihood: OriginLikelihood, components: tuple[Component, ...]
) -> tuple[Component, ...]:
    """Return origins with the shares that suit them together.

    Each share is of the arcs within that origin's reach; the expectation is maximised
    in turns (Dempster, Laird & Rubin 1977, J. R. Stat. Soc. B 39, 1).
    """
    if len(components) < 2:
        return components
    ratio = np.stack([arc_ratios(likelihood, one) for one in components])
    near = ratio > 0.0
    weight = likelihood.arcs.weight
    count = np.maximum(near @ weight, 1e-9)
    share = np.array([one.share for one in components])
    for _ in range(_SHARE_ROUNDS):
        claimed = near.T @ share
        # No arc's shares may add up to more than nearly all of it.
        scale = np.minimum(1.0, _SHARE_LIMITS[1] / np.maximum(claimed, 1e-9))
        lit = share[:, None] * ratio * scale
        own = lit / (lit.sum(axis=0) + 1.0 - claimed * scale)
        share = np.clip(own @ weight / count, *_SHARE_LIMITS)
    return tuple(
        replace(one, share=float(value))
        for one, value in zip(components, share, strict=True)
    )


def _within(likelihood: OriginLikelihood, one: Component) -> BoolArray:
    """Return which arcs lie within the reach of an origin."""
    near = likelihood.arcs.frames[:, 0] @ one.direction
    return np.asarray(near >= np.cos(np.radians(one.reach_deg)))


def valued(likelihood: OriginLikelihood, components: tuple[Component, ...]) -> Mixture:
    """Return origins as a mixture, with its value."""
    base = mixture_base(likelihood, components)
    return Mixture(components, float(likelihood.arcs.weight @ np.log(base)))
