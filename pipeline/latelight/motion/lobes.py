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

from latelight.motion.shapes import standard_shape
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

    def log_ratio(
        self, ratio: FloatArray, distance_in_widths: FloatArray
    ) -> FloatArray:
        """Return ln p of ln(early / late): the nearer the lobes, the more alike.

        Dust is smooth over a fraction of a lobe, so the scatter grows with the
        distance until the lobes are well apart.
        """
        apart = 1.0 - np.exp(-0.5 * distance_in_widths**2)
        sigma = self.ratio_scatter * np.sqrt(0.05 + 0.95 * apart)
        return -0.5 * (np.log(ratio) / sigma) ** 2 - np.log(sigma)

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
    front = _white_lobes(profile, late, shapes, sense)
    back = _white_lobes(profile, early, shapes, sense)
    data = profile.white
    r_late, r_early = front @ data, back @ data
    g_late = np.einsum("sum,sum->su", front, front)
    g_early = np.einsum("sum,sum->su", back, back)
    g_both = front @ back.transpose(0, 2, 1)

    q = ratios[None, None, None, :]
    response = r_late[:, :, None, None] - q * r_early[:, None, :, None]
    norm = (
        g_late[:, :, None, None]
        - 2.0 * q * g_both[..., None]
        + q**2 * g_early[:, None, :, None]
    )
    norm = np.maximum(norm, 1e-12)
    amplitude = response / norm
    snr = response / np.sqrt(norm)
    distance = sense * (late[:, None] - early[None, :])
    widths = np.array([width for width, _ in shapes])
    apart = distance[None, :, :, None] / widths[:, None, None, None]
    # Flat in ln(amplitude): the integral over it leaves 1 / snr.
    log_p = np.where(
        (snr > 0.0) & (distance > 0.0)[None, :, :, None],
        0.5 * snr**2 - np.log(np.maximum(snr, 1.0)),
        -np.inf,
    )
    log_p = log_p + prior.log_ratio(ratios, np.maximum(apart, 0.0))
    tails = np.array([tail for _, tail in shapes])
    return LobeTable(
        log_p, amplitude, late, early, widths, tails, np.asarray(ratios), sense
    )


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
    lobes = _white_lobes(profile, places, shapes, sense)
    norm = np.maximum(np.einsum("sum,sum->su", lobes, lobes), 1e-12)
    response = sign * (lobes @ profile.white)
    snr = response / np.sqrt(norm)
    allowed = np.array([prior.allows(*shape) for shape in shapes])[:, None]
    log_p = np.where(
        allowed & (snr > 0.0), 0.5 * snr**2 - np.log(np.maximum(snr, 1.0)), -np.inf
    )
    return log_p, response / norm


def _white_lobes(
    profile: Profile,
    places: FloatArray,
    shapes: Sequence[tuple[float, float]],
    sense: int,
) -> FloatArray:
    """Return whitened unit lobes, shape (n_shapes, n_places, n_offsets)."""
    offset = profile.offsets[None, :] - places[:, None]
    lobes = np.empty((len(shapes), *offset.shape))
    for i, (width, tail) in enumerate(shapes):
        lobes[i] = standard_shape(tail).at(offset, width, sense)
    return lobes @ profile.whiten.T
