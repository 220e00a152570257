"""Lobes that do not run parallel.

Where an echo's speed changes along the arc, or patchy dust turns one ridge, the
other lobe lies at an angle to the traced one and averages away along it.  It is
looked for at small angles and bends; the strip is then cut with offsets that grow
along the arc, which straightens both lobes at once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.shapes import standard_shape
from latelight.motion.strip import Strip
from latelight.records import FloatArray

__all__ = ["Fan", "find_fan"]

_SEGMENT_PX = 8.0
_SLOPES = np.tan(np.radians(np.linspace(-10.0, 10.0, 11)))
_SAGITTAS_PX = np.array([-4.0, -2.0, 0.0, 2.0, 4.0])
# Sigmas of the other lobe, and by how much its chi-square must gain.
_LEAST_SNR = 4.5
_LEAST_GAIN = 9.0


@dataclass(frozen=True, slots=True)
class Fan:
    """Where the other lobe is, and how it runs.

    Attributes
    ----------
    place : float
        Distance from the traced lobe along the normal, pixels.
    slope : float
        Tangent of its angle to the traced lobe.
    bend : float
        Difference of its curvature, 1/pixel.
    """

    place: float
    slope: float
    bend: float

    def stretch(self, along: FloatArray) -> FloatArray:
        """Return the factor of the offsets at distances along the trace."""
        move = self.slope * along + 0.5 * self.bend * along**2
        return np.clip(1.0 + move / self.place, 0.3, 3.0)


def find_fan(
    strip: Strip,
    along: FloatArray,
    *,
    sign: int,
    width: float,
    max_shift: float,
    excess: float,
) -> Fan | None:
    """Look for another lobe that is not parallel to the traced one.

    Parameters
    ----------
    strip : Strip
        The unrolled arc, the traced lobe straight at offset 0.
    along : float64 array, shape (n,)
        Distance of each column from the middle, pixels.
    sign : {1, -1}
        Sign of the lobe looked for.
    width : float
        Full width of a lobe, pixels.
    max_shift : float
        Farthest place, pixels.
    excess : float
        Variance of a sum over a lobe over that of independent pixels.

    Returns
    -------
    Fan or None
        None where no lobe is seen, or a parallel one does as well.
    """
    n_segments = max(3, round((along[-1] - along[0]) / _SEGMENT_PX))
    edges = np.linspace(0, along.size, n_segments + 1).astype(int)[:-1]
    counts = np.diff(np.append(edges, along.size))
    centres = np.add.reduceat(along, edges) / counts
    values = np.add.reduceat(strip.values * strip.weight, edges, axis=1)
    weight = np.add.reduceat(strip.weight, edges, axis=1)
    lobe = standard_shape(0.6)
    lobes = lobe.at(strip.offsets[None, :] - strip.offsets[:, None], width, 1)
    response = sign * (lobes @ values).T / excess
    norm = (lobes**2 @ weight).T / excess

    # Nearer than this the traced lobe itself answers, and lobes run parallel.
    places = strip.offsets[np.abs(strip.offsets) <= max_shift]
    places = places[np.abs(places) >= 1.3 * width]
    half = 0.5 * (along[-1] - along[0])
    bends = 2.0 * _SAGITTAS_PX / max(half, 10.0) ** 2
    move = (
        _SLOPES[:, None, None, None] * centres
        + 0.5 * bends[None, :, None, None] * centres**2
        + places[None, None, :, None]
    )
    row = np.rint(move - strip.offsets[0]).astype(np.intp)
    row = np.clip(row, 0, strip.offsets.size - 1)
    segment = np.arange(centres.size)
    total = response[segment, row].sum(axis=-1)
    square = np.maximum(norm[segment, row].sum(axis=-1), 1e-12)
    snr = np.where(total > 0.0, total / np.sqrt(square), 0.0)
    # Near lobes and small angles are the likelier; other echoes lie about.
    unlikely = (
        3.0 * np.log1p(np.abs(places) / width) + (_SLOPES / 0.1)[:, None, None] ** 2
    )
    i, j, k = np.unravel_index(np.argmax(snr**2 - unlikely), snr.shape)
    parallel = snr[_SLOPES.size // 2, _SAGITTAS_PX.size // 2].max()
    if snr[i, j, k] < _LEAST_SNR or snr[i, j, k] ** 2 < parallel**2 + _LEAST_GAIN:
        return None
    return Fan(float(places[k]), float(_SLOPES[i]), float(bends[j]))
