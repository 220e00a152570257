"""All epochs unrolled along one arc and summed, the static sky free everywhere.

With weights w and one free constant in every sample of the strip, ln(likelihood) of
a model m is, but for a constant, ``sum m_i y_i - (1/2) sum m_i O_ij m_j`` with

    y_i = w_i (d_i - sum_j w_j d_j / W),  O_ij = delta_ij w_i - w_i w_j / W,

W the sum of the weights: exactly what a fit of the static sky would give, whatever
is masked at one epoch or another.  Both are summed in bins along the arc.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.bend import along_trace
from latelight.motion.tracks._kernels import strip_sums
from latelight.records import ArcTrace, EpochSeries, FloatArray
from latelight.threads import over_rows

__all__ = ["BIN_PX", "StripSums", "cut_strips"]

BIN_PX = 16.0
"""Length along the arc that shares one sum: over less, dust is alike."""


@dataclass(frozen=True, slots=True)
class StripSums:
    """Profiles of all epochs in b bins along the arc.

    Attributes
    ----------
    offsets : float64 array, shape (m,)
        Pixels along the motion.
    along : float64 array, shape (b,)
        Middles of the bins, pixels from the middle of the trace.
    signal : float64 array, shape (b, m, n)
        y of the module's docstring.
    omega : float64 array, shape (b, m, n, n)
        O, the covariance of ``signal``.
    weight : float64 array, shape (b, m, n)
        Sum of the weights.
    """

    offsets: FloatArray
    along: FloatArray
    signal: FloatArray
    omega: FloatArray
    weight: FloatArray

    def whole(self) -> StripSums:
        """Return the sums over the whole arc: one bin."""
        return StripSums(
            self.offsets,
            np.zeros(1),
            self.signal.sum(axis=0, keepdims=True),
            self.omega.sum(axis=0, keepdims=True),
            self.weight.sum(axis=0, keepdims=True),
        )

    def turned_round(self) -> StripSums:
        """Return the sums with offsets counted the other way."""
        return StripSums(
            -self.offsets[::-1],
            self.along,
            self.signal[:, ::-1].copy(),
            self.omega[:, ::-1].copy(),
            self.weight[:, ::-1].copy(),
        )


def cut_strips(
    series: EpochSeries,
    trace: ArcTrace,
    *,
    lowest: float,
    highest: float,
    excess: FloatArray,
    fan: float = 0.0,
) -> StripSums:
    """Unroll all epochs along a trace.

    Parameters
    ----------
    series : EpochSeries
        The epochs.
    trace : ArcTrace
        Centre line; its normals point along the motion.
    lowest, highest : float
        Range of the offsets, pixels.
    excess : float64 array, shape (n,)
        Factor on the variance: of a ridge's height in correlated noise.
    fan : float
        1/pixel: at a distance s along the arc, offsets are stretched by
        ``1 + fan s``, where the arc moves faster on one side.
    """
    along = along_trace(trace)
    n_bins = max(2, round((along[-1] - along[0]) / BIN_PX))
    edges = np.linspace(along[0], along[-1], n_bins + 1)
    bins = np.clip(np.searchsorted(edges, along, side="right") - 1, 0, n_bins - 1)
    offsets = np.arange(np.floor(lowest), np.ceil(highest) + 1.0)
    angle = np.radians(trace.normal_angle)
    stretch = np.clip(1.0 + fan * along, 0.3, 3.0)
    shape = (n_bins, offsets.size, len(series))
    signal, weight = np.zeros(shape), np.zeros(shape)
    omega = np.zeros((*shape, len(series)))

    def rows(first: int, last: int) -> None:
        strip_sums(
            series.pixels,
            series.variance,
            series.mask,
            excess,
            trace.x,
            trace.y,
            stretch * np.cos(angle),
            stretch * np.sin(angle),
            offsets,
            bins,
            signal,
            omega,
            weight,
            first,
            last,
        )

    over_rows(rows, offsets.size)
    middles = 0.5 * (edges[1:] + edges[:-1])
    return StripSums(offsets, middles, signal, omega, weight)
