"""Why a ridge is set aside: one small question an artefact."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from latelight.arcs.evidence import Evidence
from latelight.arcs.surroundings import Ring

__all__ = ["ARTEFACTS", "Artefact", "judge"]

_SPIKE_SHARE = 0.03
"""A spike holds no more than this share of its star's light."""
_HALO_SHARE = 0.05
"""A halo holds no more than this share of its star's light."""
_HALO_RADIUS_PX = 120.0

_SPIKE_CORES = 15.0
"""A spike begins within this many radii of the star's saturated core."""

_STREAK_PX = 40.0
_STREAK_SHARE = 0.25
"""A ridge is part of a streak that covers so many pixels and so much of it: trails
that cross an arc cover less."""

_SINGLE_FACTOR = 2.0
"""How much more significant an arc of one lobe must be: most artefacts have one."""

_LEAST_ASPECT = 1.7
_LEAST_ASPECT_PLAIN = 1.3
"""Length of an arc over its extent across, both lobes.  Fast echoes may lie as far
apart as they are long, but so do the rims of ghosts: short ones must be plain."""
_PLAIN_FACTOR = 2.0
"""How many times the threshold is plain."""
_LEAST_SLENDERNESS = 4.4
"""Length of an arc over the width of one lobe."""

_GROUND = 0.4
"""Fraction of good pixels needed on either side of a single lobe."""
_LEDGE = 0.7
"""Step of the ground across a single lobe, in its heights, that makes it an edge."""

Extent = Literal["", "line", "ring"]


@dataclass(frozen=True, slots=True)
class Artefact:
    """One thing that looks like an arc and is none.

    Attributes
    ----------
    reason : str
        The verdict, in words.
    is_it : callable
        The question, asked of the evidence.
    extent : str
        What else it spoils: ``"line"`` all along its straight line, ``"ring"``
        the whole disc of its ring, ``""`` nothing.
    """

    reason: str
    is_it: Callable[[Evidence], bool]
    extent: Extent = ""


def judge(evidence: Evidence) -> tuple[str, Extent]:
    """Return ``"arc"``, or the first reason to set a ridge aside, and its extent."""
    for artefact in ARTEFACTS:
        if artefact.is_it(evidence):
            return artefact.reason, artefact.extent
    return "arc", ""


def masked(evidence: Evidence) -> bool:
    """Tell whether too little of it is on good pixels to judge.

    What is left beside a trail may still be plain enough.
    """
    plain = evidence.snr > 1.6 * evidence.settings.threshold
    return evidence.masked > (0.7 if plain else 0.4)


def trail(evidence: Evidence) -> bool:
    """Tell whether a straight, evenly lit line goes on beyond the ends."""
    line = evidence.line()
    longest = evidence.settings.longest_px
    if line.length_px > 2.0 * longest and line.beyond_snr > 8.0 and line.filled > 0.8:
        return True
    narrow = evidence.narrowest < 1.5 and not _paired(evidence)
    long = line.length_px > longest or line.to_edges
    lit = line.beyond_snr > 4.0 and line.filled > 0.6
    return (narrow or _alone(evidence)) and long and lit


def streak(evidence: Evidence) -> bool:
    """Tell whether it runs along a masked trail, spike or bleed, as their ends do."""
    least = max(_STREAK_PX, _STREAK_SHARE * evidence.length_px)
    return evidence.streak_px > least and not _paired(evidence)


def spike(evidence: Evidence) -> bool:
    """Tell whether a narrow line points at a star that could cast it."""
    close = evidence.shift_px < 1.2 * evidence.fwhm_px
    if evidence.narrowest > 1.6:
        return False
    if not (close or _alone(evidence)):
        return False
    stars = evidence.stars
    s, u = evidence.fit.circle.coordinates(stars.x, stars.y)
    aimed = np.abs(u) < 1.5 * evidence.fwhm_px + 0.03 * np.abs(s)
    gap = np.abs(s) - evidence.fit.half_length
    near = gap < np.maximum(_SPIKE_CORES * stars.core_px, 3.0 * evidence.fwhm_px)
    light = _height(evidence) * evidence.lobe_width_px * evidence.length_px
    return bool(np.any(aimed & near & (light < _SPIKE_SHARE * stars.flux)))


def halo(evidence: Evidence) -> bool:
    """Tell whether the circle about a bright star through it goes on."""
    stars = evidence.stars
    s, u = evidence.fit.circle.coordinates(stars.x, stars.y)
    square = np.abs(s) < 0.5 * (np.abs(u) + evidence.fit.half_length)
    light = np.pi * u**2 * _height(evidence)
    could = square & (np.abs(u) < _HALO_RADIUS_PX) & (light < _HALO_SHARE * stars.flux)
    for x, y in zip(stars.x[could].tolist(), stars.y[could].tolist(), strict=True):
        found = evidence.ring_about(x, y)
        if _goes_round(found) and found.snr > 2.5 and found.share > 0.15:
            return True
    return False


def ring(evidence: Evidence) -> bool:
    """Tell whether the rest of a circle through it shines too."""
    found = evidence.ring()
    return _goes_round(found) and found.snr > 3.5 and found.share > 0.35


def residue(evidence: Evidence) -> bool:
    """Tell whether its light lies close to bright stars."""
    return evidence.away_share < 0.5


def dipole(evidence: Evidence) -> bool:
    """Tell whether it is a PSF-wide line a fraction of the PSF out of place."""
    narrow = evidence.lobe_width_px < 1.3 * evidence.fwhm_px
    return narrow and evidence.shift_px < 0.7 * evidence.fwhm_px


def curled(evidence: Evidence) -> bool:
    """Tell whether its curvature is surely stronger than any arc's."""
    fit = evidence.fit
    surely = abs(fit.bend) - fit.bend_err * evidence.noise_ratio
    return surely > 1.0 / evidence.settings.least_radius_px


def lump(evidence: Evidence) -> bool:
    """Tell whether most of the signal comes from one short piece.

    The rest may be enough for an arc with a bright knot, but not a source's wings.
    """
    share = evidence.trimmed_snr / evidence.pair_snr
    enough = evidence.trimmed_snr > evidence.settings.threshold
    return share < (0.25 if enough else 0.45)


def ledge(evidence: Evidence) -> bool:
    """Tell whether its one lobe may be the edge of something wider."""
    flanks = evidence.flanks
    edge = flanks.data < _GROUND or flanks.step > _LEDGE
    return edge and (_alone(evidence) or not evidence.two_lobed)


def single(evidence: Evidence) -> bool:
    """Tell whether it shows one lobe only and is not strong enough for that."""
    weak = evidence.snr < _SINGLE_FACTOR * evidence.settings.threshold
    return weak and not evidence.two_lobed


def apart(evidence: Evidence) -> bool:
    """Tell whether the second lobe lies at the very end of the search for it."""
    return (
        evidence.two_lobed
        and evidence.shift_px > evidence.settings.largest_shift_px - 1.0
    )


def patches(evidence: Evidence) -> bool:
    """Tell whether most of its length does not shine."""
    return evidence.filled < 0.5


def stubby(evidence: Evidence) -> bool:
    """Tell whether it is shorter than any arc, or hardly longer than across."""
    across = evidence.lobe_width_px
    if evidence.two_lobed:
        across += evidence.shift_px
    plain = evidence.snr > _PLAIN_FACTOR * evidence.settings.threshold
    least = max(
        evidence.settings.shortest_px,
        (_LEAST_ASPECT_PLAIN if plain else _LEAST_ASPECT) * across,
        _LEAST_SLENDERNESS * evidence.lobe_width_px,
    )
    return evidence.length_px < least


def wide(evidence: Evidence) -> bool:
    """Tell whether its lobes are wider than any echo's."""
    return evidence.lobe_width_px > evidence.settings.widest_px


def _goes_round(found: Ring) -> bool:
    """Tell whether more sectors of a circle shine than not, of those with data."""
    return found.lit > found.dark or found.dark == 0


def _alone(evidence: Evidence) -> bool:
    """Tell whether one lobe says nearly all: four fifths of the chi-square."""
    return evidence.single_snr**2 > 0.8 * evidence.pair_snr**2


def _paired(evidence: Evidence) -> bool:
    """Tell whether two lobes of like height lie clear of each other.

    The side lobes of a brilliant trail are faint and touch it.
    """
    apart = evidence.shift_px > 2.0 * evidence.fwhm_px
    return evidence.two_lobed and apart and evidence.weaker_share > 0.4


def _height(evidence: Evidence) -> float:
    """Return the height of the brighter lobe, counts per pixel."""
    pair = evidence.fit.pair
    return max(pair.positive_height, -pair.negative_height)


ARTEFACTS = (
    Artefact("trail: a straight line longer than any arc", trail, "line"),
    Artefact("masked: too much of it lies on bad pixels", masked),
    Artefact("streak: runs along a masked trail or spike", streak),
    Artefact("spike: points at a bright star", spike),
    Artefact("halo: concentric with a bright star", halo),
    Artefact("residue: its light lies close to bright stars", residue),
    Artefact("dipole: a narrow line a fraction of the PSF out of place", dipole),
    Artefact("curled: its radius is shorter than any arc's", curled),
    Artefact("wide: wider than any echo", wide),
    Artefact("stub: too short, or hardly longer than across", stubby),
    Artefact("lump: most of the signal comes from a short piece", lump),
    Artefact("ledge: no lower ground on both sides of its one lobe", ledge),
    Artefact("single: one lobe only, and faint", single),
    Artefact("apart: lobes farther apart than any echo's", apart),
    Artefact("patches: most of its length does not shine", patches),
    Artefact("ring: the circle goes on, as a ghost or halo does", ring, "ring"),
)
