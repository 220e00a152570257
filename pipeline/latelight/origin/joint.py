"""Trace many arcs back to common origins, listed or not.

One origin after the other is found on what the others leave unexplained, claimed when
random directions hardly ever score as high, and refined beside the others.  The score
of an origin is the log10 likelihood ratio of the arcs with it and without it, averaged
over the unknown law of the tilts, the share of the arcs it lit and their reach.  It is
of directions alone; where there are several origins, speeds help to say which arc is
whose.

Listed sources that have too few arcs for an origin of their own anywhere on the sky are
asked last: their place is known, so the bar is lower.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from latelight.origin.joint_arcs import MovingArcs, sky_of, unit_vectors
from latelight.origin.joint_chance import chance_of_score
from latelight.origin.joint_laws import direction_laws, law_widths
from latelight.origin.joint_likelihood import OriginLikelihood, origin_likelihood
from latelight.origin.joint_mixture import (
    Component,
    Mixture,
    add_origin,
    beside_others,
    first_origin,
    fit_component,
    membership,
    mixture_base,
    refined,
    valued,
    with_speeds,
)
from latelight.origin.joint_region import Ellipse, Ridge, error_region
from latelight.origin.joint_search import PairList, choose_pairs
from latelight.origin.settings import OriginSettings
from latelight.records import FloatArray, Source

__all__ = ["CHI2_99", "JointOrigin", "JointOrigins", "Unclaimed", "find_origins"]

SEED = 20270101
# Chi-square of two degrees of freedom that holds 99 %.
CHI2_99 = 9.210340371976184
_CHI2_68 = 2.278868566376729
_DEX = float(np.log(10.0))


@dataclass(frozen=True, slots=True)
class JointOrigin:
    """An origin that is claimed.

    Attributes
    ----------
    region : Ellipse or Ridge or None
        Where it lies; None for a listed source that is claimed at its own place.
    direction : float64 array, shape (3,)
        Its likeliest place, a unit vector.
    score : float
        log10 likelihood ratio of all arcs with it and without it, motions' directions
        alone.
    chance : float
        Probability that arcs without it score as high by accident.
    membership : float64 array, shape (n,)
        Probability that each arc comes from it.
    scatter_deg : float
        Angle from the away direction within which half of its arcs are thought to move,
        before errors of measurement.
    listed : str
        Name of the listed source that is claimed at its own place, else empty.
    """

    region: Ellipse | Ridge | None
    direction: FloatArray
    score: float
    chance: float
    membership: FloatArray
    scatter_deg: float
    listed: str = ""


@dataclass(frozen=True, slots=True)
class Unclaimed:
    """An origin that random directions may well mimic.

    Attributes
    ----------
    direction : float64 array, shape (3,)
        Its place, a unit vector.
    score, chance : float
        As of :class:`JointOrigin`.
    region : Ellipse or Ridge
        Where it would lie.
    """

    direction: FloatArray
    score: float
    chance: float
    region: Ellipse | Ridge


@dataclass(frozen=True, slots=True)
class JointOrigins:
    """What many arcs say together.

    Attributes
    ----------
    origins : tuple of JointOrigin
        Those claimed, best first.
    likelihood : OriginLikelihood
        Of a single origin, for maps.
    rest : Unclaimed or None
        The best further origin; None when no two arcs could have one in common.
    """

    origins: tuple[JointOrigin, ...]
    likelihood: OriginLikelihood
    rest: Unclaimed | None


def find_origins(
    arcs: MovingArcs,
    *,
    settings: OriginSettings,
    sources: Sequence[Source] = (),
    rng: np.random.Generator | None = None,
) -> JointOrigins:
    """Find the common origins of arcs.

    Parameters
    ----------
    arcs : MovingArcs
        The arcs; one, or none, has no common origin.
    settings : OriginSettings
        The priors and the level at which an origin is claimed.
    sources : sequence of Source
        Listed sources.
    rng : numpy.random.Generator, optional
        Source of the randomness of the calibration; a fixed seed by default, so that
        the same arcs give the same answer.
    """
    rng = np.random.default_rng(SEED) if rng is None else rng
    laws = direction_laws(arcs, scatter_deg=settings.direction_scatter_deg)
    likelihood = origin_likelihood(arcs, laws)
    places = unit_vectors([s.ra for s in sources], [s.dec for s in sources])
    search = _Search(likelihood, choose_pairs(arcs, rng), settings, rng, places)
    claimed, rest = search.claimed()
    origins = [
        search.finished(claimed.components, index, region=region)
        for index, region in enumerate(claimed.regions)
    ]
    origins.sort(key=_rank)
    # The smallest chance was that of the first origin to be found, the strongest.
    origins = [
        replace(origin, chance=chance)
        for origin, chance in zip(origins, sorted(claimed.chances), strict=True)
    ]
    origins += search.listed(claimed, sources)
    return JointOrigins(tuple(sorted(origins, key=_rank)), likelihood, rest)


def _rank(origin: JointOrigin) -> tuple[float, ...]:
    return (-origin.score, *(float(v) for v in origin.direction))


@dataclass(frozen=True, slots=True)
class _Claimed:
    """Origins that are claimed: fits, regions, and the chance of each step."""

    components: tuple[Component, ...] = ()
    regions: tuple[Ellipse | Ridge, ...] = ()
    chances: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True)
class _Search:
    """The arcs, and how they are searched."""

    likelihood: OriginLikelihood
    pairs: PairList
    settings: OriginSettings
    rng: np.random.Generator
    places: FloatArray

    def claimed(self) -> tuple[_Claimed, Unclaimed | None]:
        """Add origins as long as random directions hardly ever gain as much.

        Returns those claimed, and the next one that is not.
        """
        claimed = _Claimed()
        while True:
            found, rest = self._one_more(claimed)
            if found is None and not claimed.chances and rest is not None:
                # Of two events neither may stand out alone.
                found = self._two_at_once()
            if found is None:
                return claimed, rest
            claimed = found

    def _one_more(self, claimed: _Claimed) -> tuple[_Claimed | None, Unclaimed | None]:
        """Return the origins with one more, or the one more that is not claimed."""
        before = self._with_speeds(claimed.components)
        after, gain = self._next(before)
        if len(after) == len(claimed.components) or gain <= 0.0:
            return None, None
        level = self.settings.chance_level
        if claimed.chances:
            level = self.settings.further_chance_level
        chance = self._chance(before, gain, level=level)
        regions = self._regions(after)
        full = len(claimed.chances) >= self.settings.max_origins
        if chance > level or full or not _separate(after, regions):
            return None, Unclaimed(after[-1].direction, gain, chance, regions[-1])
        return _Claimed(after, regions, (*claimed.chances, chance)), None

    def _two_at_once(self) -> _Claimed | None:
        """Return two origins that together are claimed, or None."""
        pair = Mixture()
        for _ in range(2):
            pair = add_origin(self.likelihood, pair, self.pairs, extra=self.places)
        gain = pair.value / _DEX
        if len(pair.components) < 2 or self.settings.max_origins < 2 or gain <= 0.0:
            return None
        # A second question about the same arcs: the stricter level.
        level = 0.5 * self.settings.chance_level
        chance = self._chance(Mixture(), gain, level=level, more=2)
        regions = self._regions(pair.components)
        if chance > level or not _separate(pair.components, regions):
            return None
        return _Claimed(pair.components, regions, (chance, chance))

    def _chance(
        self, before: Mixture, gain: float, *, level: float, more: int = 1
    ) -> float:
        return chance_of_score(
            self.likelihood,
            before.components,
            gain,
            rng=self.rng,
            skies=self.settings.random_skies,
            level=level,
            more=more,
        )

    def _with_speeds(self, components: tuple[Component, ...]) -> Mixture:
        """Return the origins claimed, fitted with speeds to be compared with more."""
        if not components:
            return Mixture()
        asked = tuple(
            with_speeds(beside_others(self.likelihood, components, index), one)
            for index, one in enumerate(components)
        )
        return refined(self.likelihood, valued(self.likelihood, asked), self.pairs)

    def _next(self, before: Mixture) -> tuple[tuple[Component, ...], float]:
        """Return the origins with one more, and what it gains, dex."""
        if not before.components:
            first = first_origin(self.likelihood, self.pairs, extra=self.places)
            return ((), 0.0) if first is None else ((first[0],), first[1] / _DEX)
        after = add_origin(self.likelihood, before, self.pairs, extra=self.places)
        return after.components, (after.value - before.value) / _DEX

    def listed(self, claimed: _Claimed, sources: Sequence[Source]) -> list[JointOrigin]:
        """Return listed sources that explain arcs which no origin found explains.

        Each is one place among as many as are listed: its likelihood ratio exceeds
        n / level by accident with at most the probability level (Markov).
        """
        known = claimed.components
        added: list[tuple[float, str]] = []
        # A source where an origin was found is that origin already.
        open_ = np.array(
            [not any(_holds(r, s) for r in claimed.regions) for s in sources], bool
        )
        while open_.any():
            beside = self.likelihood.beside(mixture_base(self.likelihood, known))
            scores = beside.marginal(self.places) / _DEX
            best = int(np.argmax(np.where(open_, scores, -np.inf)))
            chance = min(1.0, len(sources) * 10.0 ** -float(scores[best]))
            if chance > self.settings.chance_level:
                break
            known = (*known, fit_component(beside, self.places[best]))
            added.append((chance, sources[best].name))
            open_[best] = False
        return [
            self.finished(
                known, len(claimed.components) + i, chance=chance, listed=name
            )
            for i, (chance, name) in enumerate(added)
        ]

    def finished(
        self,
        components: tuple[Component, ...],
        index: int,
        *,
        region: Ellipse | Ridge | None = None,
        chance: float = 0.0,
        listed: str = "",
    ) -> JointOrigin:
        """Return a claimed origin with its arcs."""
        one = components[index]
        silent = tuple(replace(each, speeds=None) for each in components)
        alone = beside_others(self.likelihood, silent, index)
        widths = law_widths(self.settings.direction_scatter_deg)
        return JointOrigin(
            region=region,
            direction=one.direction,
            score=float(alone.marginal(one.direction[None])[0] / _DEX),
            chance=chance,
            membership=membership(
                beside_others(self.likelihood, components, index), one
            ),
            scatter_deg=float(one.law_weights @ widths),
            listed=listed,
        )

    def _regions(
        self, components: tuple[Component, ...]
    ) -> tuple[Ellipse | Ridge, ...]:
        regions = []
        for index, one in enumerate(components):
            beside = beside_others(self.likelihood, components, index)
            support = membership(beside, one)
            regions.append(error_region(beside, one.direction, support))
        return tuple(regions)


def _holds(region: Ellipse | Ridge, source: Source) -> bool:
    """Whether a source lies within the 99 % region of an origin."""
    return isinstance(region, Ellipse) and region.chi2(source.ra, source.dec) < CHI2_99


def _separate(
    components: tuple[Component, ...], regions: tuple[Ellipse | Ridge, ...]
) -> bool:
    """Whether no two origins lie within each other's 68 % region: one, split in two."""
    places = [tuple(float(v) for v in sky_of(one.direction)) for one in components]
    for first, second in combinations(range(len(components)), 2):
        here, there = regions[first], regions[second]
        if not (isinstance(here, Ellipse) and isinstance(there, Ellipse)):
            continue
        gap = max(here.chi2(*places[second]), there.chi2(*places[first]))
        if gap < _CHI2_68:
            return False
    return True
