"""The two lobes of an echo in the profile across it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.arcs._kernels import lobe_sums, search_lobes
from latelight.arcs.profiles import LobeShapes, lobe_profile
from latelight.records import FloatArray

__all__ = ["Lobes", "find_lobes"]


@dataclass(frozen=True, slots=True)
class Lobes:
    """One lobe or two; places in pixels across from the circle.

    Attributes
    ----------
    gain : float
        Gain in chi-square over a constant, noise as stated by the variance.
    sigma_px, tail_px : float
        Gaussian sigma and signed exponential scale of both lobes, pixels.
    positive, negative : float
        Places of the lobes; NaN for one that is not there.
    positive_height, negative_height : float
        Counts per pixel; the second is not above zero.
    """

    gain: float
    sigma_px: float
    tail_px: float
    positive: float
    negative: float
    positive_height: float
    negative_height: float

    @property
    def sign(self) -> int:
        """Sign of the brighter lobe."""
        return 1 if self.positive_height >= -self.negative_height else -1

    @property
    def brighter(self) -> float:
        """Place of the brighter lobe."""
        return self.positive if self.sign > 0 else self.negative

    @property
    def reach(self) -> tuple[float, float]:
        """Least and greatest place of the lobes that are there."""
        places = [p for p in (self.positive, self.negative) if np.isfinite(p)]
        return min(places), max(places)

    def seen_from(self, u: float) -> Lobes:
        """Return the lobes seen from a circle ``u`` pixels farther across."""
        return replace(self, positive=self.positive - u, negative=self.negative - u)

    def mirrored(self) -> Lobes:
        """Return the lobes seen along the opposite normal."""
        return replace(
            self,
            tail_px=-self.tail_px,
            positive=-self.positive,
            negative=-self.negative,
        )

    def profile(self, half_height: int) -> FloatArray:
        """Return counts per pixel at -half_height ... half_height pixels across."""
        offset = np.arange(-half_height, half_height + 1, dtype=float)
        total = np.zeros(offset.size)
        for place, height in (
            (self.positive, self.positive_height),
            (self.negative, self.negative_height),
        ):
            if height != 0.0:
                total += height * lobe_profile(
                    offset - place, self.sigma_px, self.tail_px
                )
        return total


def find_lobes(
    signal: FloatArray, weight: FloatArray, shapes: LobeShapes, *, reach: int
) -> tuple[Lobes, Lobes] | None:
    """Return the best pair of opposite lobes and the best single lobe.

    Parameters
    ----------
    signal, weight : float64 array, shape (2 h + 1,)
        Sums of D/V and 1/V at each pixel across.
    shapes : LobeShapes
        The bank.
    reach : int
        One lobe lies within this many pixels of the middle.

    Returns
    -------
    (Lobes, Lobes) or None
        None where the profile is masked, or no opposite lobes fit.
    """
    total = float(weight.sum())
    if total <= 0.0:
        return None
    size = (shapes.sigma_px.size, signal.size)
    matched, power, mass = np.empty(size), np.empty(size), np.empty(size)
    lobe_sums(signal, weight, shapes.profiles, shapes.half_width, matched, power, mass)
    found = np.zeros((2, 6))
    search_lobes(
        matched,
        power,
        mass,
        shapes.overlap,
        float(signal.sum()),
        total,
        shapes.least_shift,
        reach,
        found,
    )
    if found[0, 0] <= 0.0:
        return None
    middle = signal.size // 2
    gain, shape, plus, plus_height, minus, minus_height = found[0].tolist()
    pair = Lobes(
        gain,
        float(shapes.sigma_px[int(shape)]),
        float(shapes.tail_px[int(shape)]),
        plus - middle,
        minus - middle,
        plus_height,
        minus_height,
    )
    gain, shape, place, height = found[1, :4].tolist()
    place -= middle
    single = Lobes(
        gain,
        float(shapes.sigma_px[int(shape)]),
        float(shapes.tail_px[int(shape)]),
        place if height > 0.0 else np.nan,
        place if height <= 0.0 else np.nan,
        max(height, 0.0),
        min(height, 0.0),
    )
    return pair, single
