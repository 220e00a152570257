"""Why a ridge is set aside: one small question an artefact."""

from __future__ import annotations

from collections.abc import Callable

from latelight.arcs.evidence import Evidence

__all__ = ["QUESTIONS", "judge"]

Question = Callable[[Evidence], str | None]


def judge(evidence: Evidence) -> str:
    """Return ``"arc"``, or the first reason to set a ridge aside."""
    for question in QUESTIONS:
        reason = question(evidence)
        if reason is not None:
            return reason
    return "arc"


def lump(evidence: Evidence) -> str | None:
    """Most of the signal comes from one short piece: a source, not an arc."""
    if evidence.trimmed_snr < 0.45 * evidence.snr:
        return "one lump: most of the signal comes from a short piece"
    return None


def trail(evidence: Evidence) -> str | None:
    """Straight, PSF-wide and longer than any arc."""
    line = evidence.line
    if line.snr > 0.7 * evidence.snr and line.length_px > evidence.longest_px:
        return "trail: a straight line longer than any arc"
    return None


def masked(evidence: Evidence) -> str | None:
    """Too little of it is on good pixels to judge."""
    if evidence.masked > 0.5:
        return "masked: over half of it lies on bad pixels"
    return None


QUESTIONS: tuple[Question, ...] = (masked, trail, lump)
