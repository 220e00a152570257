"""Trace many arcs back to common origins, listed or not.

One origin after the other is found on what the others leave unexplained, claimed when
random directions hardly ever score as high, and refined beside the others.  The score
of an origin is the log10 likelihood ratio of the arcs with it and without it, averaged
over the unknown law of the tilts, the share of the arcs it lit and their reach.

Listed sources that have too few arcs for an origin of their own anywhere on the sky are
asked last: their place is known, so the bar is lower.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from latelight.origin.joint_arcs import MovingArcs, sky_of, unit_vectors
from latelight.origin.joint_chance import chance_of_score
from latelight.origin.joint_laws import direction_laws, law_widths
from latelight.origin.joint_likelihood import OriginLikelihood, origin_likelihood
from latelight.origin.joint_mixture import (
    Component,
    Mixture,
    add_origin,
    fit_component,
    mixture_base,
    without,
)
from latelight.origin.joint_region import Ellipse, Ridge, error_region
from latelight.origin.joint_search import PairList, choose_pairs
from latelight.origin.settings import OriginSettings
from latelight.records import FloatArray, Source

__all__ = ["CHI2_99", "JointOrigin", "JointOrigins", "Unclaimed", "find_origins"]

SEED = 20270101
# Chi-square of two degrees of freedom that holds 99 %.
CHI2_99 = 9.210340371976184


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
        mixture, claimed = Mixture(), _Claimed()
        while True:
            after = add_origin(self.likelihood, mixture, self.pairs, extra=self.places)
            gain = (after.value - mixture.value) / np.log(10.0)
            if len(after.components) == len(mixture.components) or gain <= 0.0:
                return claimed, None
            level = self.settings.chance_level
            if claimed.chances:
                level = self.settings.further_chance_level
            chance = chance_of_score(
                self.likelihood,
                mixture.components,
                gain,
                rng=self.rng,
                skies=self.settings.random_skies,
                level=level,
            )
            regions = self._regions(after.components)
            if (
                chance > level
                or len(claimed.chances) == self.settings.max_origins
                or not _separate(after.components, regions)
            ):
                last = after.components[-1].direction
                return claimed, Unclaimed(last, gain, chance, regions[-1])
            mixture = after
            chances = (*claimed.chances, chance)
            claimed = _Claimed(after.components, regions, chances)

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
            scores = beside.marginal(self.places) / np.log(10.0)
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
        beside = self._beside_others(components, index)
        widths = law_widths(self.settings.direction_scatter_deg)
        return JointOrigin(
            region=region,
            direction=one.direction,
            score=float(beside.marginal(one.direction[None])[0] / np.log(10.0)),
            chance=chance,
            membership=_membership(beside, one),
            scatter_deg=float(one.law_weights @ widths),
            listed=listed,
        )

    def _regions(
        self, components: tuple[Component, ...]
    ) -> tuple[Ellipse | Ridge, ...]:
        regions = []
        for index, one in enumerate(components):
            beside = self._beside_others(components, index)
            support = _membership(beside, one)
            regions.append(error_region(beside, one.direction, support))
        return tuple(regions)

    def _beside_others(
        self, components: tuple[Component, ...], index: int
    ) -> OriginLikelihood:
        others = without(components, index)
        return self.likelihood.beside(mixture_base(self.likelihood, others))


def _holds(region: Ellipse | Ridge, source: Source) -> bool:
    """Whether a source lies within the 99 % region of an origin."""
    return isinstance(region, Ellipse) and region.chi2(source.ra, source.dec) < CHI2_99


def _separate(
    components: tuple[Component, ...], regions: tuple[Ellipse | Ridge, ...]
) -> bool:
    """Whether no origin lies within the 99 % region of another."""
    for one, region in zip(components, regions, strict=True):
        for other in components:
            ra, dec = (float(v) for v in sky_of(other.direction))
            near = isinstance(region, Ellipse) and region.chi2(ra, dec) < CHI2_99
            if other is not one and near:
                return False
    return True


def _membership(beside: OriginLikelihood, one: Component) -> FloatArray:
    """Return the probability that each arc comes from an origin."""
    lit = one.share * beside.arc_ratios(one.direction, one.law_weights, one.reach_deg)
    return lit / (lit + (1.0 - one.share) * beside.base)
