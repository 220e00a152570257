"""How often random directions look as much like one origin as the arcs do.

The places, errors and neighbourhoods of the arcs are kept and their directions drawn
anew: filaments turn as one, arcs that other origins explain are drawn from the law of
those origins.  What is compared is the best score anywhere on the sky.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from latelight.origin.joint_arcs import MovingArcs
from latelight.origin.joint_laws import turns
from latelight.origin.joint_likelihood import OriginLikelihood
from latelight.origin.joint_mixture import (
    Component,
    Mixture,
    add_origin,
    mixture_base,
    refined,
)
from latelight.origin.joint_search import choose_pairs
from latelight.records import FloatArray, IntArray

__all__ = ["chance_of_score"]

# Draw skies in lots, and stop as soon as the answer is clear.
_LOT = 8
_CLEAR_DEX = 5.0
_ANCHORS = (0.5, 0.75)
_MAX_ARCS, _MOST_PAIRS = 300, 1000


def chance_of_score(
    likelihood: OriginLikelihood,
    components: Sequence[Component],
    score: float,
    *,
    rng: np.random.Generator,
    skies: int,
    level: float,
) -> float:
    """Return the probability that arcs without a further origin gain as much by one.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of the arcs.
    components : sequence of Component
        The origins found so far.
    score : float
        What a further origin gains, dex.
    rng : numpy.random.Generator
        Source of the randomness.
    skies : int
        How many random skies at most.
    level : float
        Chance below which an origin is claimed.

    Notes
    -----
    At any one place the likelihood ratio of random directions has the mean 1, so the
    chance that it exceeds 10**x is at most 10**-x (Markov); the best of many places has
    a Gumbel law of that slope, whose median and quartile are measured.  So small
    chances need few skies, and are overstated rather than understated (the measured
    tail is steeper).  The law hardly depends on the number of arcs: of many, a sample
    is drawn.
    """
    some = _sample(likelihood, rng)
    pairs = choose_pairs(some.arcs, rng, most=_MOST_PAIRS)
    known = Mixture(tuple(components), -np.inf if components else 0.0)
    draw = _drawer(some, components)
    best: list[float] = []
    while len(best) < skies:
        for _ in range(min(_LOT, skies - len(best))):
            sky = replace(some, arcs=draw(rng))
            # What is known to be there is fitted anew, like the real arcs.
            before = refined(sky, known, pairs)
            after = add_origin(sky, before, pairs)
            best.append((after.value - before.value) / np.log(10.0))
        chance = _gumbel_tail(score, best)
        hopeless = chance > min(0.3, 10.0 * level)
        certain = score > max(best) + _CLEAR_DEX
        if hopeless or certain:
            break
    return chance


def _sample(likelihood: OriginLikelihood, rng: np.random.Generator) -> OriginLikelihood:
    """Return the likelihood of at most so many of the arcs."""
    n = len(likelihood.arcs)
    if n <= _MAX_ARCS:
        return likelihood
    rows = np.sort(rng.choice(n, _MAX_ARCS, replace=False))
    return likelihood.of(rows)


def _gumbel_tail(score: float, best: Sequence[float]) -> float:
    """Return the chance of a score, from the best scores of random skies.

    The law is anchored at the median or at the quartile, whichever is less favourable:
    of few arcs, circles often do not cross at all.
    """
    chances = [
        -np.expm1(np.log(share) * 10.0 ** min(place - score, 300.0))
        for share, place in zip(_ANCHORS, np.quantile(best, _ANCHORS), strict=True)
    ]
    return float(max(chances))


def _drawer(
    likelihood: OriginLikelihood, components: Sequence[Component]
) -> Callable[[np.random.Generator], MovingArcs]:
    """Return a function that draws the motions of all arcs anew."""
    arcs = likelihood.arcs
    base = mixture_base(likelihood, components)
    lit = [
        one.share
        * likelihood.arc_ratios(one.direction, one.law_weights, one.reach_deg)
        / base
        for one in components
    ]
    taken = np.cumsum(np.array(lit).reshape(len(components), len(arcs)), axis=0)
    now = [turns(arcs, one.direction) for one in components]
    n_groups = int(arcs.filament.max(initial=0)) + 1

    def draw(rng: np.random.Generator) -> MovingArcs:
        turn = rng.uniform(0.0, 2.0 * np.pi, n_groups)[arcs.filament]
        level = rng.random(len(arcs))
        owner: IntArray = (level > taken).sum(axis=0)
        for index, one in enumerate(components):
            law = rng.choice(one.law_weights.size, size=len(arcs), p=one.law_weights)
            new = likelihood.laws.draw(law, rng)
            mine = owner == index
            # Position angles grow from north to east, the pole lies on the other side.
            turn[mine] = np.radians(new - now[index])[mine]
        return _turned(arcs, turn)

    return draw


def _turned(arcs: MovingArcs, turn: FloatArray) -> MovingArcs:
    """Return arcs with their motions turned by angles in radians, towards the east."""
    place, motion, pole = np.moveaxis(arcs.frames, 1, 0)
    cos, sin = np.cos(turn)[:, None], np.sin(turn)[:, None]
    new = cos * motion - sin * pole
    frames = np.stack([place, new, np.cross(place, new)], axis=1)
    return replace(arcs, frames=frames)
