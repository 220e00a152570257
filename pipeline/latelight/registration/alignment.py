"""Alignment: the map from science to template pixels, from stars on both.

The headers' WCS say where each star should be, up to a shift found by a vote;
where they do not, star patterns say so instead.  What is left between the places
said and seen is a low polynomial fitted to all stars.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np

from latelight.errors import StageError
from latelight.records import (
    Alignment,
    BoolArray,
    FloatArray,
    IntArray,
    PixelMap,
    StarList,
)
from latelight.registration.asterisms import match_asterisms
from latelight.registration.crossmatch import (
    Affine,
    chance_log10,
    fit_affine,
    mutual_nearest,
    vote_offset,
)
from latelight.registration.pixel_map import (
    evaluate,
    identity_map,
    jacobian_determinant,
    wcs_map,
)
from latelight.registration.polynomial import Polynomial, fit_displacement
from latelight.registration.settings import RegistrationSettings
from latelight.sky import pixel_scale_arcsec

__all__ = ["align"]

_STAGE = "registration"
_VOTE_STARS = 200
# Asterisms and rough maps bring stars this much less near than fitted ones.
_ROUGH_RADII = (2.0, 1.5, 1.0)
_ROUGH_ROUNDS = 8
_FINE_ROUNDS = 3
_ENOUGH_CLEAN = 12
_ACCEPT_LOG10 = -4.0


def align(
    science: StarList,
    template: StarList,
    science_wcs: Any,
    template_wcs: Any,
    *,
    science_shape: tuple[int, int],
    template_shape: tuple[int, int],
    settings: RegistrationSettings,
) -> Alignment:
    """Find the map from science to template pixels.

    Parameters
    ----------
    science, template : StarList
        Stars of the two frames.
    science_wcs, template_wcs : astropy.wcs.WCS or None
        Their celestial WCS; without both, star patterns are matched in pixels.
    science_shape, template_shape : (int, int)
        Shapes (ny, nx) of the frames.
    settings : RegistrationSettings
        Limits of the search and of the fit.

    Returns
    -------
    Alignment
        The map, and the stars it rests on.

    Raises
    ------
    StageError
        If a frame has too few stars, the frames do not overlap, or no match
        beats chance.
    """
    stars = _Stars.of(science, template, settings)
    predicted = wcs_map(science_wcs, template_wcs, shape=science_shape)
    reach = 0.0
    rough = None
    if predicted is not None:
        ny, nx = template_shape
        scale = pixel_scale_arcsec(template_wcs, 0.5 * nx, 0.5 * ny)
        reach = settings.wcs_error_arcsec / scale
        _require_overlap(predicted, template_shape, reach)
        rough = _by_offset(stars, predicted, template_shape, reach, settings)
        if rough is None:
            rough = _by_asterisms(stars, predicted, template_shape, settings)
    if rough is None:
        # Without a WCS, or with one that is no guide at all: plain pixels.
        pixels = identity_map(science_shape)
        rough = _by_asterisms(stars, pixels, template_shape, settings)
    if rough is None:
        raise StageError(_STAGE, _no_match(stars, reach, settings))
    fit, pairs = _fit(stars, rough, science_shape, settings)
    return _finish(stars, rough, fit, pairs, template_shape)


@dataclass(frozen=True, slots=True)
class _Stars:
    """Unsaturated stars of both frames: rows of the lists, places, errors."""

    science_row: IntArray
    template_row: IntArray
    science: FloatArray
    template: FloatArray
    science_err: FloatArray
    template_err: FloatArray
    science_clean: BoolArray
    template_clean: BoolArray

    @classmethod
    def of(
        cls, science: StarList, template: StarList, settings: RegistrationSettings
    ) -> _Stars:
        rows = []
        for name, stars in (("science", science), ("template", template)):
            usable = ~stars.saturated & np.isfinite(stars.position_err)
            row = np.flatnonzero(usable)[: settings.max_stars]
            if row.size < settings.min_stars:
                msg = (
                    f"the {name} frame has {row.size} usable stars, alignment needs "
                    f"{settings.min_stars}; lower registration.detect_sigma or "
                    "registration.min_stars, or leave the frame out"
                )
                raise StageError(_STAGE, msg)
            rows.append(row)
        one, two = rows
        return cls(
            science_row=one,
            template_row=two,
            science=np.column_stack([science.x, science.y])[one],
            template=np.column_stack([template.x, template.y])[two],
            science_err=science.position_err[one],
            template_err=template.position_err[two],
            science_clean=science.clean[one],
            template_clean=template.clean[two],
        )


@dataclass(frozen=True, slots=True)
class _Rough:
    """A map good to some pixels, and the stars it pairs.

    ``degree`` is the lowest of the polynomial still to be fitted: 0 where the map
    is right up to a shift, 1 where its linear part came from these stars.
    """

    pixel_map: PixelMap
    pairs: tuple[IntArray, IntArray]
    degree: int
    method: Literal["wcs", "asterisms"]


def _require_overlap(
    predicted: PixelMap, template_shape: tuple[int, int], reach: float
) -> None:
    ny, nx = template_shape
    x, y = predicted.map_x, predicted.map_y
    beyond = np.maximum.reduce([-x, x - (nx - 1), -y, y - (ny - 1)])
    if beyond.min() > reach:
        msg = (
            f"the frames do not overlap: by their WCS the nearest corner lies "
            f"{beyond.min():.0f} px off the template, a WCS error of {reach:.0f} px "
            "is allowed for; pair frames of one field, or raise "
            "registration.wcs_error_arcsec"
        )
        raise StageError(_STAGE, msg)


def _by_offset(
    stars: _Stars,
    predicted: PixelMap,
    template_shape: tuple[int, int],
    reach: float,
    settings: RegistrationSettings,
) -> _Rough | None:
    """Trust the WCS up to a shift."""
    places = np.column_stack(evaluate(predicted, *stars.science.T))
    one, two = _common_field(places, stars.template, template_shape, reach)
    shift = vote_offset(
        places[one][:_VOTE_STARS],
        stars.template[two][:_VOTE_STARS],
        max(reach, settings.match_radius_px),
    )
    if shift is None:
        return None
    pairs = _grow(stars, places, Affine(np.eye(2), shift), template_shape, settings)
    return None if pairs is None else _Rough(predicted, pairs[1], 0, "wcs")


def _by_asterisms(
    stars: _Stars,
    base: PixelMap,
    template_shape: tuple[int, int],
    settings: RegistrationSettings,
) -> _Rough | None:
    """Trust the base map up to shift, rotation, scale and mirroring."""
    places = np.column_stack(evaluate(base, *stars.science.T))
    # More stars when the few brightest are not in both frames.
    for count in (settings.asterism_stars, 3 * settings.asterism_stars):
        found = match_asterisms(
            places[:count],
            stars.template[:count],
            radius=_ROUGH_RADII[0] * settings.match_radius_px,
        )
        if found is None:
            continue
        grown = _grow(stars, places, found, template_shape, settings)
        if grown is not None:
            affine, pairs = grown
            linear = affine.matrix - np.eye(2)
            reach = np.abs(linear) @ np.ptp(places, axis=0) / 2.0
            if reach.max() < settings.match_radius_px:
                return _Rough(base, pairs, 0, "asterisms")
            return _Rough(_moved(base, affine), pairs, 1, "asterisms")
    return None


def _common_field(
    places: FloatArray,
    template: FloatArray,
    template_shape: tuple[int, int],
    reach: float,
) -> tuple[IntArray, IntArray]:
    """Rows of the stars that may be on both frames, brightest first."""
    ny, nx = template_shape
    edge = np.array([nx - 1.0, ny - 1.0]) + reach
    one = np.all((places >= -reach) & (places <= edge), axis=1)
    low, high = places.min(axis=0) - reach, places.max(axis=0) + reach
    two = np.all((template >= low) & (template <= high), axis=1)
    return np.flatnonzero(one), np.flatnonzero(two)


def _grow(
    stars: _Stars,
    places: FloatArray,
    affine: Affine,
    template_shape: tuple[int, int],
    settings: RegistrationSettings,
) -> tuple[Affine, tuple[IntArray, IntArray]] | None:
    """Spread a match from the stars that proposed it to the whole frame."""
    n_last = 0
    for turn in range(_ROUGH_ROUNDS):
        factor = _ROUGH_RADII[min(turn, len(_ROUGH_RADII) - 1)]
        radius = factor * settings.match_radius_px
        moved = affine(places)
        one, two = mutual_nearest(moved, stars.template, radius)
        if one.size < settings.min_stars:
            return None
        affine = fit_affine(places[one], stars.template[two])
        if turn >= len(_ROUGH_RADII) and one.size == n_last:
            break
        n_last = one.size
    ny, nx = template_shape
    inside = np.all((moved >= 0.0) & (moved <= [nx - 1.0, ny - 1.0]), axis=1)
    chance = np.pi * radius**2 * stars.template.shape[0] / (nx * ny)
    if chance_log10(one.size, int(inside.sum()), chance) > _ACCEPT_LOG10:
        return None
    return affine, (one, two)


def _fit(
    stars: _Stars,
    rough: _Rough,
    shape: tuple[int, int],
    settings: RegistrationSettings,
) -> tuple[Polynomial, tuple[IntArray, IntArray]]:
    """Fit what the rough map leaves, pairing the stars anew with each fit."""
    places = np.column_stack(evaluate(rough.pixel_map, *stars.science.T))
    scale2 = float(np.mean(jacobian_determinant(rough.pixel_map)))
    pairs = rough.pairs
    for _ in range(_FINE_ROUNDS):
        one, two = _cleanest(stars, pairs, settings)
        error2 = scale2 * stars.science_err[one] ** 2 + stars.template_err[two] ** 2
        fit = fit_displacement(
            stars.science[one],
            stars.template[two] - places[one],
            np.sqrt(error2),
            shape=shape,
            degrees=(rough.degree, settings.max_degree),
            clip_sigma=settings.clip_sigma,
            error_floor=settings.error_floor_px,
        )
        if fit.kept.sum() < settings.min_stars:
            raise StageError(_STAGE, _too_few_agree(int(fit.kept.sum()), settings))
        guess = places + fit.at(stars.science)
        pairs = mutual_nearest(guess, stars.template, settings.match_radius_px)
    return fit, (one, two)


def _cleanest(
    stars: _Stars, pairs: tuple[IntArray, IntArray], settings: RegistrationSettings
) -> tuple[IntArray, IntArray]:
    """Keep the pairs that are clean on both frames, or all where those are few."""
    one, two = pairs
    clean = stars.science_clean[one] & stars.template_clean[two]
    if clean.sum() >= max(_ENOUGH_CLEAN, settings.min_stars):
        return one[clean], two[clean]
    if one.size < settings.min_stars:
        raise StageError(_STAGE, _too_few_agree(one.size, settings))
    return one, two


def _finish(
    stars: _Stars,
    rough: _Rough,
    fit: Polynomial,
    pairs: tuple[IntArray, IntArray],
    template_shape: tuple[int, int],
) -> Alignment:
    base = rough.pixel_map
    x, y = np.meshgrid(base.node_x, base.node_y)
    places = np.stack([x, y], axis=-1)
    step = fit.at(places)
    map_x, map_y = base.map_x + step[..., 0], base.map_y + step[..., 1]
    ny, nx = template_shape
    used = (map_x >= 0) & (map_x <= nx - 1) & (map_y >= 0) & (map_y <= ny - 1)
    used &= (x >= 0) & (x <= fit.shape[1] - 1) & (y >= 0) & (y <= fit.shape[0] - 1)
    error = fit.error_at(places[used])
    one, two = pairs
    return Alignment(
        pixel_map=replace(
            base,
            map_x=map_x,
            map_y=map_y,
            error_px=float(np.sqrt(np.mean(error**2))),
        ),
        science_index=stars.science_row[one[fit.kept]].astype(np.int64),
        template_index=stars.template_row[two[fit.kept]].astype(np.int64),
        rms_px=fit.rms,
        method=rough.method,
    )


def _moved(base: PixelMap, affine: Affine) -> PixelMap:
    points = affine(np.column_stack([base.map_x.ravel(), base.map_y.ravel()]))
    return replace(
        base,
        map_x=points[:, 0].reshape(base.map_x.shape),
        map_y=points[:, 1].reshape(base.map_y.shape),
    )


def _no_match(stars: _Stars, reach: float, settings: RegistrationSettings) -> str:
    searched = (
        f"the WCS tried with offsets up to {reach:.0f} px and in vain, then "
        if reach
        else ""
    )
    return (
        f"no match: {stars.science.shape[0]} science and {stars.template.shape[0]} "
        f"template stars, {searched}asterisms of the {settings.asterism_stars} to "
        f"{3 * settings.asterism_stars} brightest; check that both frames show one "
        "field, raise registration.wcs_error_arcsec or registration.asterism_stars"
    )


def _too_few_agree(count: int, settings: RegistrationSettings) -> str:
    return (
        f"{count} stars agree on one map, alignment needs {settings.min_stars}; lower "
        "registration.detect_sigma or registration.min_stars, or leave the pair out"
    )
