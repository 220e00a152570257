"""How noisy a pixel is: gain and read noise from the header or the pixels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.frames._kernels import (
    HISTOGRAM_STEPS_PER_SIGMA,
    difference_histogram,
    variance_rows,
)
from latelight.records import FloatArray, IntArray, MaskArray, PixelArray
from latelight.threads import over_rows

__all__ = ["NoiseModel", "difference_sigma", "noise_model", "variance_plane"]

# Second moments are taken within CLIP sigma; a Gaussian keeps this share of its
# variance there: 1 - 2 c phi(c) / (2 Phi(c) - 1).
CLIP = 2.5
CLIPPED_SHARE = 0.911257
# Heights above the sky, in sigma: blank sky, then ever brighter.
HEIGHTS = np.concatenate([[-1.0, 0.33], np.geomspace(3.0, 3000.0, 13)])
MIN_PIXELS = 100
# A clipped sigma of n pixels is good to about sqrt(3 / n) / 2.
ENOUGH_PIXELS = 150_000
ENOUGH_STEPS = 1_000_000
# Differences up to 24 sigma have bins of their own.
HISTOGRAM_STEPS = int(24 * HISTOGRAM_STEPS_PER_SIGMA)
# Header and pixels disagree beyond this fraction of the variance.
TOLERANCE = 0.1
# Gains from photon transfer worse than this are not used.
MAX_GAIN_ERROR = 0.3
# Electrons; noisier detectors are out of use.
MAX_READ_NOISE = 20.0


@dataclass(frozen=True, slots=True)
class NoiseModel:
    """Variance of a pixel: ``sky_variance + (counts - sky_level) / gain``.

    Attributes
    ----------
    sky_level : float
        Counts of the blank sky.
    sky_variance : float
        Its variance, counts squared.
    gain : float
        Electrons per count.
    read_noise : float
        Electrons.
    notes : tuple of str
        What was estimated, and how well.
    """

    sky_level: float
    sky_variance: float
    gain: float
    read_noise: float
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class _Measured:
    """Noise seen in the pixels: per height bin, and of the wider stencil."""

    sky_variance: float
    wide_variance: float
    heights: FloatArray
    variances: FloatArray
    counts: FloatArray

    @property
    def white(self) -> bool:
        """Whether neighbours are independent, as in raw frames."""
        return abs(self.wide_variance / self.sky_variance - 1.0) < 0.15


def noise_model(
    pixels: PixelArray,
    sky: PixelArray,
    mask: MaskArray,
    *,
    gain: float | None,
    read_noise: float | None,
) -> NoiseModel:
    """Return the noise of a frame.

    The blank sky's noise comes from second differences, which neither gradients
    nor well-sampled stars reach.  The gain, where the header has none, is the
    inverse slope of variance against height (photon transfer: Janesick 2001,
    Scientific Charge-Coupled Devices, chapter 2) on smooth wings of stars and
    haloes.  What the header says is kept unless the blank sky contradicts it by
    more than 10 % of the variance and its noise is white.

    Parameters
    ----------
    pixels, sky : float32 array, shape (ny, nx)
        Counts, and the smooth sky.
    mask : uint16 array, shape (ny, nx)
        Non-zero pixels are left out.
    gain : float or None
        Electrons per count, positive; None to estimate it.
    read_noise : float or None
        Electrons, not negative; None to estimate it.

    Raises
    ------
    ValueError
        If the pixels have no noise at all (a constant frame).
    """
    level = float(np.median(sky[::16, ::16]))
    stride = 1 if gain is None else _stride(pixels.shape)
    measured = _measure(pixels, sky, mask, stride)
    notes: list[str] = []
    if gain is None:
        gain = _transfer_gain(measured, level, notes)
    seen = measured.sky_variance
    if read_noise is None:
        read_noise = _remaining_read_noise(seen, level, gain, notes)
        return NoiseModel(level, seen, gain, read_noise, tuple(notes))
    predicted = read_noise**2 / gain**2 + max(level, 0.0) / gain
    if abs(seen / max(predicted, 1e-30) - 1.0) > TOLERANCE:
        use = measured.white
        notes.append(
            f"noise of the blank sky is {np.sqrt(seen):.4g} counts, gain and read "
            f"noise predict {np.sqrt(predicted):.4g} (sky or bias taken off, frames "
            f"added, or wrong words?): the {'measured' if use else 'predicted'} one "
            f"is used{'' if use else ', as neighbouring pixels are correlated'}"
        )
        predicted = seen if use or predicted <= 0.0 else predicted
    return NoiseModel(level, predicted, gain, read_noise, tuple(notes))


def variance_plane(
    pixels: PixelArray, sky: PixelArray, *, noise: NoiseModel
) -> PixelArray:
    """Return the variance of every pixel, counts squared, finite and positive.

    The photon noise of faint pixels is that of the locally averaged counts, so
    that a pixel's own noise does not change its weight.

    Parameters
    ----------
    pixels, sky : float32 array, shape (ny, nx)
        Counts, bad pixels filled in, and the smooth sky.
    noise : NoiseModel
        Of this frame.
    """
    variance = np.empty_like(pixels)
    # A sky far below the typical one (a vignetted corner) still has read noise.
    floor = max(
        0.05 * noise.sky_variance,
        min(noise.read_noise**2 / noise.gain**2, noise.sky_variance),
    )
    over_rows(
        lambda first, last: variance_rows(
            pixels,
            sky,
            noise.sky_variance,
            noise.sky_level,
            1.0 / noise.gain,
            floor,
            variance,
            first,
            last,
        ),
        pixels.shape[0],
    )
    return variance


def _stride(shape: tuple[int, ...]) -> int:
    """Return a spacing of pixels that leaves enough to know sigma to 0.5 %."""
    return max(1, int(np.sqrt(shape[0] * shape[1] / ENOUGH_PIXELS)))


def _measure(
    pixels: PixelArray, sky: PixelArray, mask: MaskArray, stride: int
) -> _Measured:
    """Measure the variance of second differences in bins of height."""
    guess = difference_sigma(pixels, mask)
    # Twice: the veto on structure needs a slope, and the first one comes without.
    heights, variances, counts = _binned_variances(
        pixels, sky, mask, 2 * stride, guess, 0.0
    )
    bright = np.flatnonzero(counts[1:-1] >= MIN_PIXELS) + 1
    slope = 0.0
    if bright.size and counts[0] >= MIN_PIXELS:
        first = int(bright[0])
        rise = float(variances[first] - variances[0])
        slope = max(rise, 0.0) / float(heights[first])
    heights, variances, counts = _binned_variances(
        pixels, sky, mask, stride, guess, slope
    )
    if counts[0] < MIN_PIXELS or not variances[0] > 0.0:
        msg = "the blank sky has no noise"
        raise ValueError(msg)
    return _Measured(
        sky_variance=float(variances[0]),
        wide_variance=float(variances[-1]) if counts[-1] >= MIN_PIXELS else np.nan,
        heights=heights[1:-1],
        variances=variances[1:-1],
        counts=counts[1:-1],
    )


def _binned_variances(
    pixels: PixelArray,
    sky: PixelArray,
    mask: MaskArray,
    stride: int,
    sigma: float,
    per_count: float,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return mean height, clipped variance and number of pixels of each bin."""
    n_bins = HEIGHTS.size
    counts = np.zeros((n_bins, HISTOGRAM_STEPS), dtype=np.int64)
    squares = np.zeros((n_bins, HISTOGRAM_STEPS))
    heights = np.zeros(n_bins)
    difference_histogram(
        pixels,
        sky,
        mask,
        sigma,
        per_count,
        HEIGHTS,
        stride,
        counts,
        squares,
        heights,
    )
    found = [_clipped_variance(counts[k], squares[k]) for k in range(n_bins)]
    variances = np.array([value for value, _ in found]) * sigma**2
    used = np.array([float(total) for _, total in found])
    return heights / np.maximum(counts.sum(axis=1), 1), variances, used


def difference_sigma(pixels: PixelArray, mask: MaskArray) -> float:
    """Return a rough sigma from differences of neighbours in some of the rows.

    Good to some per cent in sparse fields, and somewhat high in crowded ones.

    Raises
    ------
    ValueError
        If neighbours do not differ, or none are good.
    """
    # Enough rows to know it to a few thousandths, and in small frames every third.
    rows = slice(None, None, max(3, pixels.size // ENOUGH_STEPS))
    left, right = pixels[rows, :-1], pixels[rows, 1:]
    good = (mask[rows, :-1] | mask[rows, 1:]) == 0
    steps = np.abs(right - left)[good]
    if steps.size == 0:
        msg = "no two neighbouring pixels are good"
        raise ValueError(msg)
    # 1.4826 turns a median deviation into sigma; two pixels share the noise.
    guess = 1.4826 / np.sqrt(2.0) * float(np.median(steps))
    if guess <= 0.0:
        # Coarsely quantised pixels: most steps are zero, their mean is not.
        guess = float(np.mean(np.minimum(steps, np.quantile(steps, 0.99))))
    if guess <= 0.0:
        msg = "neighbouring pixels do not differ"
        raise ValueError(msg)
    return guess


def _clipped_variance(counts: IntArray, squares: FloatArray) -> tuple[float, int]:
    """Return the variance within CLIP sigma, corrected, and the pixels used."""
    total = int(counts.sum())
    if total == 0:
        return 0.0, 0
    edges = np.arange(1, counts.size + 1) / HISTOGRAM_STEPS_PER_SIGMA
    cumulated, summed = np.cumsum(counts), np.cumsum(squares)
    # From the median outwards; a handful of rounds settles it.
    limit = CLIP * 1.4826 * float(edges[np.searchsorted(cumulated, 0.5 * total)])
    variance, used = 0.0, total
    for _ in range(20):
        last = min(int(np.searchsorted(edges, limit)), counts.size - 1)
        used = int(cumulated[last])
        variance = float(summed[last]) / max(used, 1) / CLIPPED_SHARE
        limit = CLIP * float(np.sqrt(variance))
    return variance, used


def _transfer_gain(measured: _Measured, level: float, notes: list[str]) -> float:
    """Return the gain from the slope of variance against height."""
    enough = measured.counts >= MIN_PIXELS
    height = measured.heights[enough]
    variance = measured.variances[enough]
    slope, error = 0.0, np.inf
    if height.size >= 3:
        # A clipped variance of n pixels has a relative error of about sqrt(3 / n).
        # Photons grow with the height, structure that leaks in with its square.
        scatter = variance * np.sqrt(3.0 / measured.counts[enough] + 0.03**2)
        design = np.column_stack([height, height**2]) / scatter[:, None]
        norm = np.linalg.norm(design, axis=0)
        covariance = np.linalg.inv((design / norm).T @ (design / norm))
        rise = (variance - measured.sky_variance) / scatter
        slope, square = covariance @ ((design / norm).T @ rise) / norm
        error = float(np.sqrt(covariance[0, 0])) / norm[0]
        if square < 0.0:
            slope = float(design[:, 0] @ rise) / norm[0] ** 2
            error = 1.0 / norm[0]
    if slope > 0.0 and error < MAX_GAIN_ERROR * slope:
        gain = _plausible_gain(float(1.0 / slope), level, measured.sky_variance)
        notes.append(
            f"gain estimated from the pixels: {gain:.3g} e-/count, good to about "
            f"{100.0 * max(2.0 * error / slope, 0.15):.0f} %"
        )
        return gain
    # No bright smooth pixels: the sky alone gives an upper limit of the noise.
    gain = level / measured.sky_variance if level > 0.0 else 1.0
    reason = "sky noise taken as photon noise" if level > 0.0 else "no sky level either"
    notes.append(
        f"gain unknown and too few smooth bright pixels to measure it: {gain:.3g} "
        f"e-/count assumed ({reason}), good to a factor of 2"
    )
    return gain


def _plausible_gain(gain: float, level: float, sky_variance: float) -> float:
    """Lower a gain that would leave more read noise than detectors have.

    Only where the counts still hold the sky, whose photons make most of its noise.
    """
    if level < 5.0 * np.sqrt(sky_variance) or gain < level / sky_variance:
        return gain
    # Read noise squared = gain^2 variance - gain level, solved for the gain.
    root = np.sqrt(level**2 + 4.0 * sky_variance * MAX_READ_NOISE**2)
    return min(gain, float(level + root) / (2.0 * sky_variance))


def _remaining_read_noise(
    seen: float, level: float, gain: float, notes: list[str]
) -> float:
    """Return the read noise that the sky's photons leave over."""
    squared = gain**2 * seen - gain * max(level, 0.0)
    if squared > 0.0:
        read_noise = float(np.sqrt(squared))
        notes.append(
            f"read noise estimated from the blank sky: {read_noise:.3g} e-; the sky's "
            "variance is measured, good to about 2 %"
        )
        return read_noise
    notes.append(
        "read noise unknown and taken as 0: the sky is less noisy than its photons "
        "(bias left in, or gain too low); its variance is measured, good to about 2 %"
    )
    return 0.0
