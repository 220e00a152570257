"""Centre lines: turned, lengthened, cut short, moved, compared."""

from __future__ import annotations

import numpy as np

from latelight.motion.bend import Bend, along_trace, bent_trace, handedness
from latelight.records import ArcTrace, FloatArray, TrackSeed
from latelight.sky import wrap_180

__all__ = [
    "along_motion",
    "distance_between",
    "flipped",
    "lengthened",
    "moved",
    "shifted",
    "stretch_of",
]


def along_motion(seed: TrackSeed) -> ArcTrace:
    """Return a seed's trace with its normals on the side it moves to."""
    trace = seed.trace
    middle = trace.normal_angle[trace.x.size // 2]
    if abs(float(wrap_180(middle - seed.direction_angle))) <= 90.0:
        return trace
    return flipped(trace)


def flipped(trace: ArcTrace) -> ArcTrace:
    """Return a trace with its normals turned round."""
    return ArcTrace(trace.x, trace.y, trace.normal_angle + 180.0)


def lengthened(trace: ArcTrace, by: float) -> ArcTrace:
    """Return a trace carried on at both ends along its circle.

    Parameters
    ----------
    trace : ArcTrace
        At least two points.
    by : float
        Length to be added at each end, pixels.
    """
    along = along_trace(trace)
    bend = (trace.normal_angle[-1] - trace.normal_angle[0]) / max(along[-1] * 2, 1.0)
    # A short ridge's normals say little about its circle.
    bend = float(np.clip(bend, -1.0, 1.0))
    ahead = np.arange(1.0, np.floor(by) + 1.0)
    turn = 90.0 * handedness(trace)
    pieces = []
    for end, sense in ((0, -1.0), (-1, 1.0)):
        normal = trace.normal_angle[end] + sense * bend * ahead
        tangent = np.radians(normal - 0.5 * sense * bend + turn)
        pieces.append(
            (
                trace.x[end] + sense * np.cumsum(np.cos(tangent)),
                trace.y[end] + sense * np.cumsum(np.sin(tangent)),
                normal,
            )
        )
    before, after = pieces
    x, y, normal = (
        np.concatenate([first[::-1], own, last])
        for first, own, last in zip(
            before, (trace.x, trace.y, trace.normal_angle), after, strict=True
        )
    )
    return ArcTrace(x, y, normal)


def stretch_of(trace: ArcTrace, centre: float, half: float) -> ArcTrace:
    """Return the part of a trace within a distance of a place along it, pixels."""
    keep = np.abs(along_trace(trace) - centre) <= half
    if keep.sum() < 8:
        return trace
    return ArcTrace(trace.x[keep], trace.y[keep], trace.normal_angle[keep])


def shifted(trace: ArcTrace, offset: float, slope: float) -> ArcTrace:
    """Return a trace moved by ``offset + slope s`` along its normals."""
    return bent_trace(trace, Bend(offset, slope, 0.0, 0.0, 0.0, 0.0))


def moved(trace: ArcTrace, angle: float, distance: float) -> ArcTrace:
    """Return a trace carried as a whole along a pixel angle, degrees."""
    direction = np.radians(angle)
    return ArcTrace(
        trace.x + distance * np.cos(direction),
        trace.y + distance * np.sin(direction),
        trace.normal_angle,
    )


def distance_between(
    one: ArcTrace, other: ArcTrace, *, carried_on: float = 0.2
) -> float:
    """Return how far two ridges are apart where they run side by side, pixels.

    The median distance of the points of the shorter one from the longer one;
    infinite when they cross.

    Parameters
    ----------
    one, other : ArcTrace
        The ridges.
    carried_on : float
        By how much of its length the longer one is carried on at both ends.
    """
    short, long = (one, other) if one.x.size <= other.x.size else (other, one)
    turn = float(
        wrap_180(
            2.0
            * (
                short.normal_angle[short.x.size // 2]
                - long.normal_angle[long.x.size // 2]
            )
        )
    )
    if abs(turn) > 2.0 * 30.0:
        return float("inf")
    rest = lengthened(long, carried_on * long.x.size)
    step = max(1, short.x.size // 24)
    return float(np.median(_nearest(short.x[::step], short.y[::step], rest)))


def _nearest(x: FloatArray, y: FloatArray, trace: ArcTrace) -> FloatArray:
    """Return the distance of points from the nearest point of a trace, pixels."""
    gap = np.hypot(x[:, None] - trace.x[None, ::2], y[:, None] - trace.y[None, ::2])
    return gap.min(axis=1)
