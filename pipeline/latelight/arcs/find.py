"""Find the arcs of one difference: search, fit, merge, judge."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from latelight.arcs.bright import BrightStars, bright_stars
from latelight.arcs.evidence import Evidence, gather
from latelight.arcs.fit import Fit, Reach, fit_seed, refine_fit
from latelight.arcs.lobes import Lobes
from latelight.arcs.merging import explained, mask_explained
from latelight.arcs.profiles import LobeShapes, coarse_shapes, lobe_width
from latelight.arcs.pyramid import build_pyramid
from latelight.arcs.search import Seed, search_level
from latelight.arcs.settings import ArcSettings
from latelight.arcs.tracing import extend
from latelight.arcs.verdicts import judge
from latelight.records import Arc, Difference, FloatArray, StarList
from latelight.threads import n_threads, on_each

__all__ = ["find_arcs"]

_FITS_A_PLACE = 3
"""Seeds fitted on one ridge: a second start often finds the better optimum."""


@dataclass(frozen=True, slots=True)
class _Noise:
    """Noise of ridges over the noise their variance states, by sigma across."""

    sigma_px: FloatArray
    ratio: FloatArray

    def snr(self, lobes: Lobes) -> float:
        """Return the calibrated significance of fitted lobes."""
        across = np.hypot(lobes.sigma_px, 0.5 * lobes.tail_px)
        return float(np.sqrt(lobes.gain) / self.at(float(across)))

    def at(self, sigma_px: float) -> float:
        """Return the ratio for one sigma."""
        return float(np.interp(sigma_px, self.sigma_px, self.ratio))


@dataclass(frozen=True, slots=True)
class _Fits:
    """Fits at seeds as long as the mask stays, each made once."""

    difference: Difference
    shapes: LobeShapes
    reach: Reach
    made: dict[Seed, Fit | None] = field(default_factory=dict)

    def at(self, seeds: list[Seed]) -> list[Fit | None]:
        """Return the fits at some seeds, made side by side."""

        def make(seed: Seed) -> Fit | None:
            return fit_seed(self.difference, seed, self.shapes, self.reach)

        new = [seed for seed in seeds if seed not in self.made]
        self.made.update(zip(new, on_each(make, new), strict=True))
        return [self.made[seed] for seed in seeds]

    def first(self, seeds: list[Seed]) -> Fit | None:
        """Return the fit at the first seed.

        Most seeds come to nothing, so the next ones are fitted meanwhile.
        """
        if seeds[0] not in self.made:
            self.at(seeds[: n_threads()])
        return self.made[seeds[0]]


def find_arcs(
    difference: Difference, *, stars: StarList, settings: ArcSettings
) -> tuple[Arc, ...]:
    """Find the ridges of a difference and say which are worth a look.

    Parameters
    ----------
    difference : Difference
        Science minus template.
    stars : StarList
        Stars of the science frame, on the difference's grid.
    settings : ArcSettings
        Thresholds.

    Returns
    -------
    tuple of Arc
        Every ridge above the threshold, most significant first; its verdict is
        ``"arc"`` or the reason it was set aside.
    """
    seeds, noise = _search(difference, settings)
    reach = Reach(
        int(settings.largest_shift_px + settings.widest_px),
        0.5 * settings.longest_px,
        1.0 / settings.least_radius_px,
    )
    shapes = coarse_shapes(
        fwhm_px=difference.fwhm_px,
        widest_px=settings.widest_px,
        n_shifts=int(settings.largest_shift_px) + 1,
    )
    bright = bright_stars(difference, stars, least_snr=settings.bright_star_snr)
    # What one ridge explains is masked before the next is fitted.
    left = replace(difference, mask=difference.mask.copy())
    fits = _Fits(left, shapes, reach)
    arcs: list[Arc] = []
    spoiled = True
    while seeds and spoiled:
        spoiled = False
        while seeds:
            fit, seeds = _next_fit(fits, seeds, noise)
            if fit is None or noise.snr(fit.pair) < settings.threshold:
                continue
            evidence = _evidence(left, fit, shapes, reach, noise, bright, settings)
            if evidence.pair_snr < settings.threshold:
                continue
            verdict, extent = judge(evidence)
            arcs.append(_arc(evidence, verdict))
            mask_explained(left.mask, evidence, extent=extent)
            fits.made.clear()
            seeds = [seed for seed in seeds if not _masked(left, seed)]
            spoiled = spoiled or extent != ""
        # A trail or ghost outshines what lies beside it: look once more without.
        if spoiled:
            seeds, _ = _search(left, settings)
    return tuple(sorted(arcs, key=lambda arc: (-arc.snr, arc.y, arc.x)))


def _evidence(
    difference: Difference,
    fit: Fit,
    shapes: LobeShapes,
    reach: Reach,
    noise: _Noise,
    stars: BrightStars,
    settings: ArcSettings,
) -> Evidence:
    refined = refine_fit(difference, fit, shapes, reach)
    ratio = noise.at(refined.pair.sigma_px)
    return gather(
        difference,
        extend(difference, refined, reach, ratio),
        settings,
        pair_snr=noise.snr(refined.pair),
        single_snr=noise.snr(refined.single),
        noise_ratio=ratio,
        stars=stars,
    )


def _next_fit(
    fits: _Fits, seeds: list[Seed], noise: _Noise
) -> tuple[Fit | None, list[Seed]]:
    """Fit the first seed and a few more on the same ridge; return the best fit.

    A second start often finds the better optimum.
    """
    best = fits.first(seeds)
    rest = seeds[1:]
    if best is None:
        return None, rest
    more = explained(best, rest)[: _FITS_A_PLACE - 1]
    for fit in fits.at(more):
        if fit is not None and noise.snr(fit.pair) > noise.snr(best.pair):
            best = fit
    return best, [seed for seed in rest if seed not in more]


def _masked(difference: Difference, seed: Seed) -> bool:
    ny, nx = difference.mask.shape
    row, col = min(round(seed.y), ny - 1), min(round(seed.x), nx - 1)
    return bool(difference.mask[row, col] != 0)


def _search(difference: Difference, settings: ArcSettings) -> tuple[list[Seed], _Noise]:
    seeds: list[Seed] = []
    calibration = []
    for level in build_pyramid(difference, widest_px=settings.widest_px):
        found, point = search_level(level, threshold=settings.seed_threshold)
        seeds += found
        calibration.append(point)
    seeds.sort(key=lambda seed: (-seed.snr, seed.y, seed.x))
    sigma, ratio = np.array(calibration).T
    return seeds, _Noise(sigma, ratio)


def _arc(evidence: Evidence, verdict: str) -> Arc:
    """Put a fitted ridge into the record, its normal between 0 and 180 degrees."""
    fit = evidence.fit
    half = 0.5 * (fit.last - fit.first)
    circle, pair = fit.circle.moved(0.5 * (fit.first + fit.last), 0.0), fit.pair
    if not 0.0 <= np.degrees(circle.angle) % 360.0 < 180.0:
        circle, pair = circle.flipped(), pair.mirrored()
    circle = circle.normalised()
    width = lobe_width(pair.sigma_px, pair.tail_px)
    beyond = width**2 - evidence.fwhm_px**2
    return Arc(
        trace=circle.trace(-half, half),
        sign=1 if pair.sign > 0 else -1,
        snr=evidence.snr,
        x=circle.x,
        y=circle.y,
        normal_angle=float(np.degrees(circle.angle)),
        normal_angle_err=float(np.degrees(fit.slope_err) * evidence.noise_ratio),
        curvature=circle.curvature,
        length_px=2.0 * half,
        width_px=float(np.sqrt(max(beyond, 0.0))),
        surface_brightness_counts=max(pair.positive_height, -pair.negative_height),
        shift_px=pair.positive - pair.negative if evidence.two_lobed else np.nan,
        verdict=verdict,
    )
