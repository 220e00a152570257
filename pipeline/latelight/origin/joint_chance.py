"""How often random directions look as much like one origin as the arcs do.

The places, errors and neighbourhoods of the arcs are kept and their directions drawn
anew: filaments turn as one, arcs that other origins explain are drawn from the law of
those origins, and their speeds too.  What is compared is the best score anywhere on
the sky.
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
    arc_ratios,
    first_origin,
    mixture_base,
    refined,
    valued,
)
from latelight.origin.joint_search import PairList, choose_pairs
from latelight.origin.joint_speeds import draw_speeds
from latelight.records import FloatArray, IntArray

__all__ = ["chance_of_score"]

# Draw skies in lots, and stop as soon as the answer is clear.
_LOT = 8
_CLEAR_DEX = 5.0
_ANCHORS = (0.5, 0.75)
# Tails of the best score, dex a dex: of one origin at most as heavy as Markov allows;
# of further ones, whose partners are fitted too, heavier (650 skies were measured).
_SLOPE_FIRST, _SLOPE_FURTHER = 1.0, 0.8
_MAX_ARCS, _MOST_PAIRS = 300, 1000


def chance_of_score(
    likelihood: OriginLikelihood,
    components: Sequence[Component],
    score: float,
    *,
    rng: np.random.Generator,
    skies: int,
    level: float,
    more: int = 1,
) -> float:
    """Return the probability that arcs without further origins gain as much by some.

    Parameters
    ----------
    likelihood : OriginLikelihood
        Of the arcs.
    components : sequence of Component
        The origins found so far.
    score : float
        What further origins gain, dex.
    rng : numpy.random.Generator
        Source of the randomness.
    skies : int
        How many random skies at most.
    level : float
        Chance below which an origin is claimed.
    more : int
        How many further origins.

    Notes
    -----
    At any one place the likelihood ratio of random directions has the mean 1, so the
    chance that it exceeds 10**x is at most 10**-x (Markov); the best of many places has
    a Gumbel law of that slope, whose median and quartile are measured.  So small
    chances need few skies, and are overstated rather than understated: the measured
    tail of a first origin is steeper.  The law hardly depends on the number of arcs: of
    many, a sample is drawn.
    """
    some = _sample(likelihood, rng)
    pairs = choose_pairs(some.arcs, rng, most=_MOST_PAIRS)
    draw = _drawer(some, components)
    slope = _SLOPE_FIRST if more == 1 and not components else _SLOPE_FURTHER
    best: list[float] = []
    while len(best) < skies:
        for _ in range(min(_LOT, skies - len(best))):
            sky = replace(some, arcs=draw(rng))
            best.append(_gain(sky, components, pairs, more) / np.log(10.0))
        chance = _gumbel_tail(score, best, slope)
        hopeless = chance > min(0.3, 10.0 * level)
        certain = score > max(best) + _CLEAR_DEX
        if hopeless or certain:
            break
    return chance


def _gain(
    sky: OriginLikelihood,
    components: Sequence[Component],
    pairs: PairList,
    more: int,
) -> float:
    """Return what further origins gain on a random sky, natural log."""
    before = Mixture()
    if components:
        # What is known to be there is fitted anew, like the real arcs.
        before = refined(sky, valued(sky, tuple(components)), pairs)
    elif more == 1:
        first = first_origin(sky, pairs)
        return 0.0 if first is None else first[1]
    after = before
    for _ in range(more):
        after = add_origin(sky, after, pairs)
    return after.value - before.value


def _sample(likelihood: OriginLikelihood, rng: np.random.Generator) -> OriginLikelihood:
    """Return the likelihood of at most so many of the arcs."""
    n = len(likelihood.arcs)
    if n <= _MAX_ARCS:
        return likelihood
    rows = np.sort(rng.choice(n, _MAX_ARCS, replace=False))
    return likelihood.of(rows)


def _gumbel_tail(score: float, best: Sequence[float], slope: float) -> float:
    """Return the chance of a score, from the best scores of random skies.

    The law is anchored at the median or at the quartile, whichever is less favourable:
    of few arcs, circles often do not cross at all.
    """
    chances = [
        -np.expm1(np.log(share) * 10.0 ** min(slope * (place - score), 300.0))
        for share, place in zip(_ANCHORS, np.quantile(best, _ANCHORS), strict=True)
    ]
    return float(max(chances))


def _drawer(
    likelihood: OriginLikelihood, components: Sequence[Component]
) -> Callable[[np.random.Generator], MovingArcs]:
    """Return a function that draws the motions of all arcs anew."""
    arcs = likelihood.arcs
    base = mixture_base(likelihood, components)
    lit = [one.share * arc_ratios(likelihood, one) / base for one in components]
    taken = np.cumsum(np.array(lit).reshape(len(components), len(arcs)), axis=0)
    now = [turns(arcs, one.direction) for one in components]
    n_groups = int(arcs.filament.max(initial=0)) + 1

    def draw(rng: np.random.Generator) -> MovingArcs:
        turn = rng.uniform(0.0, 2.0 * np.pi, n_groups)[arcs.filament]
        level = rng.random(len(arcs))
        speed = arcs.log_speed
        owner: IntArray = (level > taken).sum(axis=0)
        for index, one in enumerate(components):
            law = rng.choice(one.law_weights.size, size=len(arcs), p=one.law_weights)
            new = likelihood.laws.draw(law, rng)
            mine = owner == index
            # Position angles grow from north to east, the pole lies on the other side.
            turn[mine] = np.radians(new - now[index])[mine]
            drawn = draw_speeds(arcs, one.direction, one.speeds, rng)
            speed = np.where(mine, drawn, speed)
        return replace(_turned(arcs, turn), log_speed=speed)

    return draw


def _turned(arcs: MovingArcs, turn: FloatArray) -> MovingArcs:
    """Return arcs with their motions turned by angles in radians, towards the east."""
    place, motion, pole = np.moveaxis(arcs.frames, 1, 0)
    cos, sin = np.cos(turn)[:, None], np.sin(turn)[:, None]
    new = cos * motion - sin * pole
    frames = np.stack([place, new, np.cross(place, new)], axis=1)
    return replace(arcs, frames=frames)
