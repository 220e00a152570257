"""Set and read bits of a mask without leaving uint16."""

from __future__ import annotations

from typing import Any

import numpy as np

from latelight.masks import MaskBit
from latelight.records import BoolArray, MaskArray

__all__ = ["has_bit", "set_bit"]


def set_bit(mask: MaskArray, where: Any, bit: MaskBit) -> None:
    """Set a bit of the pixels a numpy index chooses, in place."""
    mask[where] |= np.uint16(bit)


def has_bit(mask: MaskArray, bit: MaskBit) -> BoolArray:
    """Return where any of the bits is set."""
    found: BoolArray = (mask & np.uint16(bit)) != 0
    return found
