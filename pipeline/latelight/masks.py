"""The one registry of mask bits: a non-zero pixel is not to be used."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntFlag

__all__ = ["MASK_MEANINGS", "MaskBit", "MaskMeaning"]


class MaskBit(IntFlag):
    """Why a pixel is not to be used; bits of a uint16 mask."""

    NO_DATA = 1
    EDGE = 2
    SATURATED = 4
    BLEED = 8
    COSMIC_RAY = 16
    BAD_COLUMN = 32
    TRAIL = 64
    DECLARED = 128
    SPIKE = 256
    COMPACT = 512


@dataclass(frozen=True, slots=True)
class MaskMeaning:
    """One line of the registry: the bit and what it says, in words."""

    bit: MaskBit
    meaning: str


MASK_MEANINGS = (
    MaskMeaning(MaskBit.NO_DATA, "no value: NaN, infinite, blank or outside the frame"),
    MaskMeaning(MaskBit.EDGE, "too near the frame's edge"),
    MaskMeaning(MaskBit.SATURATED, "at or above the saturation level, and its rim"),
    MaskMeaning(MaskBit.BLEED, "charge bled along the readout from a saturated star"),
    MaskMeaning(MaskBit.COSMIC_RAY, "hit by a cosmic ray"),
    MaskMeaning(MaskBit.BAD_COLUMN, "bad column or row of the detector"),
    MaskMeaning(MaskBit.TRAIL, "under a bright straight trail"),
    MaskMeaning(MaskBit.DECLARED, "marked in the frame's own mask plane"),
    MaskMeaning(MaskBit.SPIKE, "diffraction spike or core of a very bright star"),
    MaskMeaning(MaskBit.COMPACT, "compact residual of the difference, not an arc"),
)
