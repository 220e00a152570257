"""What travels between the stages: frozen records of arrays and numbers.

Conventions, everywhere in the package:

- arrays are ``[row, col]`` = ``[y, x]``; pixel centres are integers, the first is 0;
- pixels and variances are float32 in native byte order and C order, masks uint16
  bits of :class:`latelight.masks.MaskBit`, non-zero = do not use;
- bad pixels hold finite filler values: always read them together with the mask;
- pixel angles are degrees counter-clockwise from +x towards +y;
- position angles are degrees east of north on the sky, 0-360;
- depth is in pc along the line of sight from the source, positive towards the
  observer; time in Julian years since the outburst's light reached the observer.

No stage imports another; they share these records only.
"""

from latelight.records.alignment import Alignment, PixelMap, StarList
from latelight.records.arc import Arc, ArcTrace, Motion
from latelight.records.arrays import (
    BoolArray,
    FloatArray,
    IntArray,
    MaskArray,
    PixelArray,
)
from latelight.records.difference import CompactResidual, Difference
from latelight.records.frame import Frame, Plane
from latelight.records.interpretation import Interpretation
from latelight.records.matching import MatchedPair, SpatialKernel, SpatialPsf
from latelight.records.series import EpochSeries
from latelight.records.source import OriginScore, Source
from latelight.records.track import Track, TrackPoint, TrackSeed

__all__ = [
    "Alignment",
    "Arc",
    "ArcTrace",
    "BoolArray",
    "CompactResidual",
    "Difference",
    "EpochSeries",
    "FloatArray",
    "Frame",
    "IntArray",
    "Interpretation",
    "MaskArray",
    "MatchedPair",
    "Motion",
    "OriginScore",
    "PixelArray",
    "PixelMap",
    "Plane",
    "Source",
    "SpatialKernel",
    "SpatialPsf",
    "StarList",
    "Track",
    "TrackPoint",
    "TrackSeed",
]
