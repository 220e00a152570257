"""The probability of two moving lobes given a profile.

A profile is ``A [h(u - late) - q h(u - early)]`` with one shape ``h`` for both
epochs, A > 0.  Overlapping lobes cancel: then amplitude, width and distance trade
off against each other, and no best fit with its covariance says how far.  So the
whole probability is tabulated over both places, width, tail and brightness ratio;
the amplitude is integrated out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from latelight.motion._kernels import lobe_products, pair_log_p
from latelight.motion.shapes import TABLE_START, TABLE_STEP, standard_shape, tables
from latelight.motion.strip import Profile
from latelight.records import FloatArray

__all__ = ["LobePrior", "LobeTable", "one_lobe_table", "two_lobe_table"]


@dataclass(frozen=True, slots=True)
class LobePrior:
    """What is known of a pair of lobes before it is seen.

    Attributes
    ----------
    psf_fwhm : float
        Full width of the PSF, pixels: no lobe is narrower.
    ratio_scatter : float
        1 sigma of ln(early / late brightness) of lobes far apart.
    """

    psf_fwhm: float
    ratio_scatter: float

    def log_pair(
        self, ratio: FloatArray, distance: FloatArray, width: FloatArray
    ) -> FloatArray:
        """Return ln p of ln(early / late), and of the distance, but for a constant.

        The nearer the lobes, the more alike: dust is smooth over a fraction of a
        lobe, so the scatter of the ratio grows until the lobes are well apart.
        Lobes that nearly cancel are seldom found, so the chance of a distance rises
        with it up to a width; beyond some widths, large distances are the rarer.
        """
        widths = distance / width
        apart = 1.0 - np.exp(-0.5 * widths**2)
        sigma = self.ratio_scatter * np.sqrt(0.05 + 0.95 * apart)
        like = -0.5 * (np.log(ratio) / sigma) ** 2 - np.log(sigma)
        near = np.log(np.maximum(widths, 1e-9) / (1.0 + widths))
        return like + near - 1.5 * np.log1p(widths / 4.0)

    def allows(self, width: float, tail: float) -> bool:
        """Return whether a lobe's Gaussian is as wide as the PSF or wider."""
        # A tenth below it for the error of the PSF's width.
        return 2.3548 * standard_shape(tail).sigma * width >= 0.9 * self.psf_fwhm


@dataclass(frozen=True, slots=True)
class LobeTable:
    """ln probability on a grid, with the amplitude at each of its points.

    Attributes
    ----------
    log_p : float64 array, shape (n_shapes, n_late, n_early, n_ratios)
        ln of the probability times the prior, without a constant.
    amplitude : float64 array, same shape
        Peak height of the late lobe that fits best there, counts.
    late, early : float64 array, shape (n_late,), (n_early,)
        Places of the peaks, pixels along the normal.
    widths, tails : float64 array, shape (n_shapes,)
        Full width, pixels, and ratio of tail to sigma, of each shape.
    ratios : float64 array, shape (n_ratios,)
        Early over late brightness.
    sense : {1, -1}
        Motion along the normal or against it.
    """

    log_p: FloatArray
    amplitude: FloatArray
    late: FloatArray
    early: FloatArray
    widths: FloatArray
    tails: FloatArray
    ratios: FloatArray
    sense: int


def two_lobe_table(
    profile: Profile,
    prior: LobePrior,
    *,
    late: FloatArray,
    early: FloatArray,
    shapes: Sequence[tuple[float, float]],
    ratios: FloatArray,
    sense: int,
) -> LobeTable:
    """Tabulate the probability of a pair of lobes.

    Parameters
    ----------
    profile : Profile
        Later minus earlier epoch.
    prior : LobePrior
        What is known beforehand.
    late, early : float64 array
        Places to try, pixels along the normal.
    shapes : sequence of (float, float)
        Full width, pixels, and tail over sigma of the shapes to try.
    ratios : float64 array
        Early over late brightness to try.
    sense : {1, -1}
        Which way the arc moves; other pairs of places get no probability.
    """
    shapes = [shape for shape in shapes if prior.allows(*shape)] or [
        (1.05 * prior.psf_fwhm, 0.0)
    ]
    if late.size <= early.size:
        products = _products(profile, shapes, late, early, sense)
    else:  # the kernel is quicker with the longer list second
        r_early, r_late, g_early, g_late, both = _products(
            profile, shapes, early, late, sense
        )
        products = r_late, r_early, g_late, g_early, both.transpose(0, 2, 1).copy()
    widths = np.array([width for width, _ in shapes])
    distance = sense * (late[:, None] - early[None, :])
    log_prior = prior.log_pair(
        ratios, np.maximum(distance, 0.0)[None, :, :, None], widths[:, None, None, None]
    )
    log_prior[:, distance <= 0.0] = -np.inf
    log_p, amplitude = pair_log_p(*products, ratios, log_prior)
    tails = np.array([tail for _, tail in shapes])
    return LobeTable(log_p, amplitude, late, early, widths, tails, ratios, sense)


def one_lobe_table(
    profile: Profile,
    prior: LobePrior,
    *,
    places: FloatArray,
    shapes: Sequence[tuple[float, float]],
    sign: int,
    sense: int,
) -> tuple[FloatArray, FloatArray]:
    """Tabulate the probability of a single lobe.

    Parameters
    ----------
    places : float64 array, shape (n,)
        Places to try, pixels along the normal.
    sign : {1, -1}
        Whether the lobe is of the later epoch or of the earlier one.
    profile, prior, shapes, sense
        As for :func:`two_lobe_table`.

    Returns
    -------
    log_p, amplitude : float64 array, shape (n_shapes, n)
        ln of the probability, and the height that fits best; shapes narrower
        than the PSF get no probability.
    """
    nowhere = np.empty(0)
    _, response, _, norm, _ = _products(profile, shapes, nowhere, places, sense)
    response, norm = sign * response, np.maximum(norm, 1e-12)
    snr, amplitude = response / np.sqrt(norm), response / norm
    allowed = np.array([prior.allows(*shape) for shape in shapes])[:, None]
    log_p = np.where(
        allowed & (snr > 0.0),
        0.5 * snr**2 - np.log(np.maximum(snr, 1.0) * np.maximum(amplitude, 1e-30)),
        -np.inf,
    )
    return log_p, amplitude


def _products(
    profile: Profile,
    shapes: Sequence[tuple[float, float]],
    late: FloatArray,
    early: FloatArray,
    sense: int,
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return the products of unit lobes with the profile and with each other."""
    tails = tuple(sorted({tail for _, tail in shapes}))
    return lobe_products(
        profile.offsets,
        profile.precision,
        profile.precision @ profile.values,
        tables(tails),
        TABLE_START,
        TABLE_STEP,
        np.array([width for width, _ in shapes]),
        np.array([tails.index(tail) for _, tail in shapes]),
        late,
        early,
        sense,
    )
