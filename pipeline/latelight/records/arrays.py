"""The kinds of arrays that travel between the stages."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["BoolArray", "FloatArray", "IntArray", "MaskArray", "PixelArray"]

FloatArray = NDArray[np.float64]
PixelArray = NDArray[np.float32]
MaskArray = NDArray[np.uint16]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
