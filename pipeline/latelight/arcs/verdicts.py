"""Why a ridge is set aside: one small question an artefact."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from latelight.arcs.evidence import Evidence

__all__ = ["ARTEFACTS", "Artefact", "judge"]

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
    """Tell whether too little of it is on good pixels to judge."""
    return evidence.masked > 0.5


def trail(evidence: Evidence) -> bool:
    """Tell whether a straight, single, evenly lit line goes on beyond the ends."""
    line = evidence.line
    narrow = evidence.lobe_width_px < 1.5 * evidence.fwhm_px
    alone = evidence.single_snr**2 > 0.8 * evidence.snr**2
    long = line.length_px > evidence.settings.longest_px or line.to_edges
    lit = line.beyond_snr > 4.0 and line.filled > 0.6
    return (narrow or alone) and long and lit


def spike(evidence: Evidence) -> bool:
    """Tell whether a narrow ridge points at a bright star it could come from."""
    if evidence.lobe_width_px > 1.6 * evidence.fwhm_px:
        return False
    stars = evidence.stars
    s, u = evidence.fit.circle.coordinates(stars.x, stars.y)
    aimed = np.abs(u) < 1.5 * evidence.fwhm_px + 0.03 * np.abs(s)
    near = np.abs(s) < 2.0 * evidence.length_px
    return bool(np.any(aimed & near & (_light(evidence) < 0.03 * stars.flux)))


def halo(evidence: Evidence) -> bool:
    """Tell whether it lies square to the direction of a star bright enough."""
    stars = evidence.stars
    s, u = evidence.fit.circle.coordinates(stars.x, stars.y)
    square = np.abs(s) < 0.5 * np.abs(u)
    near = np.abs(u) < _HALO_RADIUS_PX
    height = max(evidence.fit.pair.positive_height, -evidence.fit.pair.negative_height)
    disc = np.pi * u**2 * height
    return bool(np.any(square & near & (disc < 0.03 * stars.flux)))


def ring(evidence: Evidence) -> bool:
    """Tell whether the rest of a circle through it shines too."""
    found = evidence.ring
    return found.lit >= 3 and found.snr > 4.5 and found.share > 0.3


def curled(evidence: Evidence) -> bool:
    """Tell whether its curvature is surely stronger than any arc's."""
    fit = evidence.fit
    surely = abs(fit.bend) - 3.0 * fit.bend_err * evidence.noise_ratio
    return surely > 1.0 / evidence.settings.least_radius_px


def lump(evidence: Evidence) -> bool:
    """Tell whether most of the signal comes from one short piece."""
    return evidence.trimmed_snr < 0.45 * evidence.snr


def patches(evidence: Evidence) -> bool:
    """Tell whether most of its length does not shine."""
    return evidence.filled < 0.5


def stubby(evidence: Evidence) -> bool:
    """Tell whether it is hardly longer than wide."""
    return evidence.length_px < 3.0 * evidence.lobe_width_px


def wide(evidence: Evidence) -> bool:
    """Tell whether its lobes are wider than any echo's."""
    return evidence.lobe_width_px > evidence.settings.widest_px


def _light(evidence: Evidence) -> float:
    """Return the counts in the brighter lobe."""
    pair = evidence.fit.pair
    height = max(pair.positive_height, -pair.negative_height)
    return height * evidence.lobe_width_px * evidence.length_px


_HALO_RADIUS_PX = 120.0

ARTEFACTS = (
    Artefact("masked: over half of it lies on bad pixels", masked),
    Artefact("trail: a straight line longer than any arc", trail, "line"),
    Artefact("spike: points at a bright star", spike),
    Artefact("halo: concentric with a bright star", halo),
    Artefact("ring: the circle goes on, as a ghost or halo does", ring, "ring"),
    Artefact("curled: its radius is shorter than any arc's", curled),
    Artefact("wide: wider than any echo", wide),
    Artefact("stub: hardly longer than wide", stubby),
    Artefact("lump: most of the signal comes from a short piece", lump),
    Artefact("patches: most of its length does not shine", patches),
)
