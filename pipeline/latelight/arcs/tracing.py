"""How far a ridge goes: from its best stretch on to fainter pieces in line."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from latelight.arcs.fit import BLOCK_PX, Fit, Reach, level_free, sum_along
from latelight.records import Difference, FloatArray

__all__ = ["block_significance", "extend"]

_PIECE = np.ones(3)
"""Blocks of one piece."""
_LIT_SIGMA = 3.0
"""A piece belongs to the ridge from here: one in a thousand is noise."""
_GAP_BLOCKS = 4
"""Longest gap bridged: 32 pixels of thin dust, shorter than the shortest arc."""


def block_significance(
    difference: Difference, fit: Fit, half_height: int, half_length: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return middles, matched signal and power of the lobes in blocks along an arc."""
    sums = sum_along(difference, fit.circle, half_length, half_height)
    profile = fit.pair.profile(half_height)
    return sums.along, level_free(sums) @ profile, sums.weight @ profile**2


def extend(difference: Difference, fit: Fit, reach: Reach, noise_ratio: float) -> Fit:
    """Carry the ends of a ridge on to the pieces that continue it.

    Hysteresis: the best stretch starts it at high significance, pieces of three
    sigma in line with it, at most four blocks on, carry it farther.
    """
    along, matched, power = block_significance(
        difference, fit, reach.half_height, reach.half_length
    )
    # Blocks with little data tell nothing.
    seen = power > 0.3 * np.median(power[np.abs(along) <= fit.half_length])
    matched, power = np.where(seen, matched, 0.0), np.where(seen, power, 0.0)
    pieces = np.convolve(matched, _PIECE, "same") / np.sqrt(
        np.maximum(np.convolve(power, _PIECE, "same"), 1e-30)
    )
    lit = pieces > _LIT_SIGMA * noise_ratio
    core = np.nonzero(np.abs(along) <= fit.half_length)[0]
    edge = 0.5 * BLOCK_PX
    return replace(
        fit,
        first=float(along[_carry(lit, int(core[0]), -1)]) - edge,
        last=float(along[_carry(lit, int(core[-1]), 1)]) + edge,
    )


def _carry(lit: np.ndarray, start: int, step: int) -> int:
    end = start
    for block in range(start + step, lit.size if step > 0 else -1, step):
        if lit[block]:
            end = block
        elif abs(block - end) > _GAP_BLOCKS:
            break
    return end
