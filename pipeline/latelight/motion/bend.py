"""How a traced ridge must be turned and bent to follow the echo."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.strip import Strip
from latelight.records import ArcTrace, FloatArray

__all__ = ["Bend", "along_trace", "bent_trace", "handedness", "measure_bend"]

_STEP = 0.5
_REACH = 10.0
_SEGMENT_PX = 6.0
_PATCH_PX = 24.0
_PATCH_SCATTER = 0.5


@dataclass(frozen=True, slots=True)
class Bend:
    """A correction of a trace: ``offset + slope s + bend s**2 / 2`` along the normal.

    ``s`` is the distance along the trace from its middle, pixels.

    Attributes
    ----------
    offset : float
        Pixels.
    slope, slope_err : float
        Tangent of the turn, and 1 sigma.
    bend : float
        Change of curvature, 1/pixel.
    centre, length : float
        Where the light along the trace is centred, and how far it extends: the
        length of a uniform arc of the same spread, pixels.
    """

    offset: float
    slope: float
    slope_err: float
    bend: float
    centre: float
    length: float


def along_trace(trace: ArcTrace) -> FloatArray:
    """Return the distance along a trace from its middle, pixels."""
    steps = np.hypot(np.diff(trace.x), np.diff(trace.y))
    s = np.concatenate([[0.0], np.cumsum(steps)])
    return s - 0.5 * s[-1]


def bent_trace(trace: ArcTrace, bend: Bend) -> ArcTrace:
    """Return a trace moved along its normals by a correction."""
    s = along_trace(trace)
    move = bend.offset + bend.slope * s + 0.5 * bend.bend * s**2
    angle = np.radians(trace.normal_angle)
    slope = bend.slope + bend.bend * s
    return ArcTrace(
        x=trace.x + move * np.cos(angle),
        y=trace.y + move * np.sin(angle),
        normal_angle=trace.normal_angle
        - handedness(trace) * np.degrees(np.arctan(slope)),
    )


def handedness(trace: ArcTrace) -> int:
    """Return +1 where the trace runs 90 degrees ahead of its normals, else -1."""
    middle = trace.x.size // 2
    before, after = max(middle - 1, 0), min(middle + 1, trace.x.size - 1)
    angle = np.radians(trace.normal_angle[middle])
    cross = np.cos(angle) * (trace.y[after] - trace.y[before]) - np.sin(angle) * (
        trace.x[after] - trace.x[before]
    )
    return 1 if cross >= 0.0 else -1


def measure_bend(
    strip: Strip,
    along: FloatArray,
    model: FloatArray,
    *,
    excess: float,
    max_slope: float,
) -> Bend:
    """Turn and bend a trace until the echo lies straight in its strip.

    Parameters
    ----------
    strip : Strip
        The unrolled arc, m rows by n columns.
    along : float64 array, shape (n,)
        Distance of each column from the middle, pixels.
    model : float64 array, shape (m,)
        Profile of the echo at the strip's offsets, counts.
    excess : float
        Variance of a sum over the profile over that of independent pixels.
    max_slope : float
        Largest turn tried, as a slope.

    Notes
    -----
    The ln(likelihood) of every slope, bend and offset is the sum over patches of
    the arc of ``((r + A0/v)^2 / (g + 1/v) - A0^2/v - ln(1 + g v)) / 2``: r is the
    patch's response to the model, g its norm, and the patch's own brightness has a
    normal prior of mean A0 (1, the mean profile's) and variance v.  The offset and
    the bend are integrated out.
    """
    response, norm, centres = _segment_responses(strip, along, model)
    response, norm = response / excess, norm / excess
    length = float(along[-1] - along[0])
    # A correction beyond these would carry the ridge off the strip's middle.
    max_bend = 8.0 * 3.0 / max(length, 20.0) ** 2
    offsets = np.linspace(-2.0, 2.0, 9)
    slopes = np.linspace(-1.0, 1.0, 21) * min(max_slope, _REACH / (0.5 * length))
    bends = np.linspace(-1.0, 1.0, 7) * max_bend
    for number in range(3):
        log_p = _log_likelihood(response, norm, centres, offsets, slopes, bends)
        # Large changes of curvature are unlikely: the trace followed the ridge.
        log_p = log_p - 0.5 * (bends / (0.5 * max_bend))[None, None, :] ** 2
        weight = np.exp(log_p - log_p.max())
        moments = [
            _moments(nodes, weight.sum(axis=axes))
            for nodes, axes in (
                (offsets, (1, 2)),
                (slopes, (0, 2)),
                (bends, (0, 1)),
            )
        ]
        if number < 2:
            offsets, slopes, bends = (
                mean + 3.0 * np.hypot(std, 0.4 * (nodes[1] - nodes[0])) * grid
                for (mean, std), nodes, grid in zip(
                    moments,
                    (offsets, slopes, bends),
                    (
                        np.linspace(-1, 1, 7),
                        np.linspace(-1, 1, 13),
                        np.linspace(-1, 1, 7),
                    ),
                    strict=True,
                )
            )
    (offset, _), (slope, slope_err), (bend, _) = moments
    light = _light(response, norm, offset + slope * centres + 0.5 * bend * centres**2)
    centre, spread = _moments(centres, light)
    return Bend(
        offset=offset,
        slope=slope,
        slope_err=slope_err,
        bend=bend,
        centre=centre,
        length=min(np.sqrt(12.0) * spread, length),
    )


def _segment_responses(
    strip: Strip, along: FloatArray, model: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Match the model at offsets of half a pixel in segments along the arc.

    Returns
    -------
    response, norm : float64 array, shape (n_segments, n_offsets)
        Matched sums and their norms.
    centres : float64 array, shape (n_segments,)
        Where the segments are.
    """
    n_segments = max(3, round((along[-1] - along[0]) / _SEGMENT_PX))
    edges = np.linspace(0, along.size, n_segments + 1).astype(int)[:-1]
    counts = np.diff(np.append(edges, along.size))
    values = np.add.reduceat(strip.values * strip.weight, edges, axis=1)
    weight = np.add.reduceat(strip.weight, edges, axis=1)
    centres = np.add.reduceat(along, edges) / counts
    shifts = np.arange(-_REACH, _REACH + _STEP, _STEP)
    moved = np.array(
        [
            np.interp(strip.offsets - shift, strip.offsets, model, left=0, right=0)
            for shift in shifts
        ]
    )
    return (moved @ values).T, (moved**2 @ weight).T, centres


def _log_likelihood(
    response: FloatArray,
    norm: FloatArray,
    centres: FloatArray,
    offsets: FloatArray,
    slopes: FloatArray,
    bends: FloatArray,
) -> FloatArray:
    """Return ln(likelihood), shape (n_offsets, n_slopes, n_bends)."""
    move = (
        offsets[:, None, None, None]
        + slopes[None, :, None, None] * centres
        + 0.5 * bends[None, None, :, None] * centres**2
    )
    place = np.clip((move + _REACH) / _STEP, 0.0, response.shape[1] - 1.001)
    first = place.astype(np.intp)
    part = place - first
    segment = np.arange(centres.size)
    r = response[segment, first] * (1.0 - part) + response[segment, first + 1] * part
    g = norm[segment, first] * (1.0 - part) + norm[segment, first + 1] * part
    spacing = (centres[-1] - centres[0]) / max(centres.size - 1, 1)
    size = max(1, round(_PATCH_PX / max(spacing, 1e-6)))
    edges = np.arange(0, max(centres.size - size // 2, 1), size)
    r = np.add.reduceat(r, edges, axis=-1)
    g = np.add.reduceat(g, edges, axis=-1)
    v = _PATCH_SCATTER**2
    terms = (r + 1.0 / v) ** 2 / (g + 1.0 / v) - 1.0 / v - np.log1p(g * v)
    return 0.5 * terms.sum(axis=-1)


def _light(response: FloatArray, norm: FloatArray, move: FloatArray) -> FloatArray:
    """Return the light along the ridge, of each segment, never negative."""
    column = np.clip(np.rint((move + _REACH) / _STEP), 0, response.shape[1] - 1)
    segment = np.arange(move.size)
    at = segment, column.astype(np.intp)
    # Three segments are smoothed together: single ones are noisy.
    box = np.ones(3)
    light = np.convolve(response[at], box, mode="same")
    light /= np.maximum(np.convolve(norm[at], box, mode="same"), 1e-12)
    light = np.clip(light, 0.0, 2.0)
    return light if light.sum() > 0.0 else np.ones_like(light)


def _moments(nodes: FloatArray, weight: FloatArray) -> tuple[float, float]:
    mean = float(np.average(nodes, weights=weight))
    return mean, float(np.sqrt(np.average((nodes - mean) ** 2, weights=weight)))
