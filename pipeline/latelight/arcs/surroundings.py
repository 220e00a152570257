"""Whether a ridge goes on where an arc would not: along a line, around a circle."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.arcs._kernels import block_matches, search_bends
from latelight.arcs.fit import BLOCK_PX, Fit, level_free, sum_along
from latelight.arcs.footprint import mask_ridge
from latelight.arcs.geometry import Circle
from latelight.arcs.profiles import lobe_profile
from latelight.records import Difference, FloatArray
from latelight.threads import on_each

__all__ = ["Line", "Ring", "filled", "follow_line", "follow_ring", "ring_about"]

_LINE_SLOPES = np.linspace(-0.05, 0.05, 41)
_RADII_PX = 18.0 * 1.13 ** np.arange(15)
"""Radii of ghosts, haloes and rings, 18 to 100 pixels."""
_SECTORS = 4


@dataclass(frozen=True, slots=True)
class Line:
    """The straight line through a ridge, as far as it shows.

    Attributes
    ----------
    length_px : float
        Length of its best stretch, pixels.
    snr, beyond_snr : float
        Its significance as one PSF-wide ridge, and that of the part beyond the
        ends of the fitted arc.
    filled : float
        Fraction of the part beyond the ends that shines.
    to_edges : bool
        Both ends of the stretch lie where the frame ends.
    circle : Circle
        The line, as a circle of no curvature, in its middle.
    """

    length_px: float
    snr: float
    beyond_snr: float
    filled: float
    to_edges: bool
    circle: Circle


@dataclass(frozen=True, slots=True)
class Ring:
    """The circle through a ridge on which the rest most resembles the ridge.

    Attributes
    ----------
    x, y, radius_px : float
        Its centre and radius, pixels.
    snr : float
        Significance of the arc's own profile on the rest of the circle.
    share : float
        Height there over the height on the arc.
    lit, dark : int
        How many of the four sectors of the rest show it, and do not; those without
        data count as neither.
    """

    x: float
    y: float
    radius_px: float
    snr: float
    share: float
    lit: int
    dark: int


def filled(matched: FloatArray, power: FloatArray) -> float:
    """Return the fraction of a ridge's length that takes part in its signal.

    Blocks are joined until a piece expects 2.5 sigma; a piece takes part when it
    reaches a third of the mean height.
    """
    total = power.sum()
    if total <= 0.0 or matched.size == 0:
        return 0.0
    height = matched.sum() / total
    each = abs(height) * np.sqrt(total / matched.size)
    run = int(np.clip(np.ceil((2.5 / max(each, 1e-30)) ** 2), 1, matched.size))
    edges = np.arange(0, matched.size, run)
    heights = np.add.reduceat(matched, edges)
    powers = np.add.reduceat(power, edges)
    seen = powers > 0.2 * np.median(powers)
    return float(
        np.mean(heights[seen] * np.sign(height) > abs(height) / 3 * powers[seen])
    )


def follow_line(difference: Difference, fit: Fit, noise_ratio: float) -> Line:
    """Follow the straight line through a ridge across the frame."""
    diagonal = float(np.hypot(*difference.pixels.shape))
    half_height = int(np.ceil(4.0 * difference.fwhm_px))
    line = Circle(fit.circle.x, fit.circle.y, fit.circle.angle, 0.0)
    sums = sum_along(difference, line, diagonal, half_height)
    offset = np.arange(-half_height, half_height + 1, dtype=float)
    profile = fit.pair.sign * lobe_profile(offset, difference.fwhm_px / 2.3548, 0.0)
    shape = (sums.along.size, 2 * half_height + 1)
    matched, power = np.empty(shape), np.empty(shape)
    block_matches(
        level_free(sums), sums.weight, profile, 0, profile.size, matched, power
    )
    middle = sums.along.size // 2
    best = np.zeros(5)
    search_bends(
        matched,
        power,
        sums.along,
        _LINE_SLOPES,
        np.zeros(1),
        middle - 2,
        middle + 1,
        best,
    )
    gain, slope, _, first, last = best.tolist()
    shifts = np.floor(slope * sums.along + half_height + 0.5).astype(int)
    usable = (shifts >= 0) & (shifts <= 2 * half_height)
    rows = np.arange(sums.along.size)
    usable &= (rows >= first) & (rows <= last)
    usable &= np.abs(sums.along) > fit.half_length + BLOCK_PX
    beyond, beyond_power = (m[rows[usable], shifts[usable]] for m in (matched, power))
    inside = np.flatnonzero(sums.count.sum(axis=1) > 0)
    to_edges = inside.size > 0 and bool(
        first <= inside[0] + 2 and last >= inside[-1] - 2
    )
    centre = 0.5 * (sums.along[int(first)] + sums.along[int(last)])
    return Line(
        length_px=(last - first + 1.0) * BLOCK_PX,
        snr=float(np.sqrt(gain)) / noise_ratio,
        beyond_snr=_snr(beyond, beyond_power) / noise_ratio,
        filled=filled(beyond, beyond_power),
        to_edges=to_edges,
        circle=line.bent(slope, 0.0).moved(float(centre), 0.0),
    )


def follow_ring(difference: Difference, fit: Fit, noise_ratio: float) -> Ring:
    """Look for the arc's own profile on the rest of every circle through it."""
    beyond = _without(difference, fit)

    def follow(radius: float) -> Ring:
        return _ring(difference, beyond, fit, radius, noise_ratio)

    radii = [side * radius for radius in _RADII_PX.tolist() for side in (1.0, -1.0)]
    nothing = Ring(fit.circle.x, fit.circle.y, np.inf, 0.0, 0.0, 0, 0)
    # The first of equals wins.
    return max([nothing, *on_each(follow, radii)], key=lambda r: (r.lit, r.snr))


def ring_about(
    difference: Difference, fit: Fit, x: float, y: float, noise_ratio: float
) -> Ring:
    """Look for the arc's own profile on the rest of the circle about a place."""
    s, _ = (float(v) for v in fit.circle.coordinates(x, y))
    middle = fit.circle.moved(float(np.clip(s, -fit.half_length, fit.half_length)), 0.0)
    angle = float(np.arctan2(y - middle.y, x - middle.x))
    side = 1.0 if np.cos(angle - middle.angle) > 0.0 else -1.0
    aimed = Circle(middle.x, middle.y, angle if side > 0 else angle + np.pi, 0.0)
    distance = float(np.hypot(x - middle.x, y - middle.y))
    if distance < _RADII_PX[0]:
        return Ring(x, y, distance, 0.0, 0.0, 0, 0)
    beyond = _without(difference, fit)
    aimed_fit = replace(fit, circle=aimed)
    return _ring(difference, beyond, aimed_fit, side * distance, noise_ratio)


def _without(difference: Difference, fit: Fit) -> Difference:
    """Return the difference with the ridge itself masked."""
    beyond = replace(difference, mask=difference.mask.copy())
    mask_ridge(beyond.mask, fit)
    return beyond


def _ring(
    difference: Difference,
    beyond: Difference,
    fit: Fit,
    radius: float,
    noise_ratio: float,
) -> Ring:
    circle = Circle(fit.circle.x, fit.circle.y, fit.circle.angle, 1.0 / radius)
    half_height = int(min(0.7 * abs(radius), 30.0))
    sums = sum_along(difference, circle, np.pi * abs(radius), half_height)
    x, y = (float(v) for v in circle.point(0.0, radius))
    on = np.abs(sums.along) <= min(fit.half_length, abs(radius))
    weight = sums.weight[on].sum(axis=0)
    nothing = Ring(x, y, abs(radius), 0.0, 0.0, 0, 0)
    if weight.min() <= 0.0:
        return nothing
    profile = sums.signal[on].sum(axis=0) / weight
    profile = profile - np.average(profile, weights=weight)
    usual = float(weight @ profile**2) / on.sum()
    sums = sum_along(beyond, circle, np.pi * abs(radius), half_height)
    # Start behind the arc, so that the sectors follow one another.
    order = np.argsort(np.mod(sums.along[~on], 2.0 * np.pi * abs(radius)))
    signal, weights = sums.signal[~on][order], sums.weight[~on][order]
    level = signal.sum(axis=1) / np.maximum(weights.sum(axis=1), 1e-30)
    matched = (signal - level[:, None] * weights) @ profile
    power = weights @ profile**2
    if power.sum() <= 0.0:
        return nothing
    lit = dark = 0
    for part, part_power in zip(
        np.array_split(matched, _SECTORS), np.array_split(power, _SECTORS), strict=True
    ):
        if part_power.sum() < 0.3 * usual * part.size:
            continue
        share = part.sum() / part_power.sum()
        shines = _snr(part, part_power) > 2.0 * noise_ratio and share > 0.25
        lit, dark = lit + int(shines), dark + int(not shines)
    return Ring(
        x,
        y,
        abs(radius),
        _snr(matched, power) / noise_ratio,
        float(matched.sum() / power.sum()),
        lit,
        dark,
    )


def _snr(matched: FloatArray, power: FloatArray) -> float:
    return float(matched.sum() / np.sqrt(max(float(power.sum()), 1e-30)))
