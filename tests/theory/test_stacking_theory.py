"""Closed forms of the stack's noise and of its clip."""

import numpy as np
import pytest

from latelight.matching.layers import smooth
from latelight.records import Plane
from latelight.stacking.combine import combine
from latelight.stacking.settings import StackingSettings

pytestmark = pytest.mark.theory

SHAPE = (256, 256)
LEVEL = np.zeros(SHAPE, np.float32)


def noise(rng, sigma=1.0):
    return Plane(
        rng.normal(0.0, sigma, SHAPE).astype(np.float32),
        np.full(SHAPE, sigma**2, np.float32),
        np.zeros(SHAPE, np.uint16),
    )


def stack(planes, **settings):
    return combine(planes, sky=LEVEL, settings=StackingSettings(**settings))


@pytest.mark.parametrize("sigmas", [(1.0, 2.0), (1.0, 2.0, 3.0), (1.0, 1.0, 1.0, 4.0)])
def test_variance_of_the_best_weighted_mean(rng, sigmas):
    """Weights 1 / v give the variance 1 / sum(1 / v), the least there is."""
    made = stack([noise(rng, sigma) for sigma in sigmas], clip=100.0)
    expected = 1.0 / np.sum(1.0 / np.square(sigmas))
    np.testing.assert_allclose(made.variance, expected, rtol=1e-5)
    # Measured on N = 65536 pixels, to sqrt(2 / N) = 0.55 %.
    assert made.pixels.var() == pytest.approx(expected, rel=4 * 0.0055)


@pytest.mark.parametrize("count", [2, 3, 4, 8])
def test_a_difference_from_n_equal_epochs_has_the_variance_1_plus_1_over_n(rng, count):
    """V = v + v / n: a single template gives 2 v."""
    template = stack([noise(rng) for _ in range(count)])
    science = noise(rng)
    measured = np.var(science.pixels - template.pixels)
    stated = np.mean(science.variance + template.variance)
    assert stated == pytest.approx(1.0 + 1.0 / count, rel=2e-3)
    # The clip of 5 sigma makes three planes 0.2 % noisier, more of them less.
    assert measured == pytest.approx(1.0 + 1.0 / count, rel=4 * 0.0055 + 0.001)


@pytest.mark.parametrize("count", [3, 4, 5, 9])
def test_where_the_clip_lies(count):
    """All values 0 but one, x: left out when x^2 > clip^2 V.

    V = (1 - 2 / n) + (pi / 2) / n for n planes of variance 1.
    """
    limit = 5.0 * np.sqrt(1.0 - 2.0 / count + 0.5 * np.pi / count)
    for x, kept in ((0.99 * limit, True), (1.01 * limit, False)):
        planes = [
            Plane(
                np.full(SHAPE, x if i == 0 else 0.0, np.float32),
                np.ones(SHAPE, np.float32),
                np.zeros(SHAPE, np.uint16),
            )
            for i in range(count)
        ]
        expected = x / count if kept else 0.0
        np.testing.assert_allclose(stack(planes, clip=5.0).pixels, expected, rtol=1e-5)


def test_an_outlier_does_not_hide_a_deep_epoch_among_shallow_ones(rng):
    """One plane of sigma 1 among three of sigma 4 is seldom at odds with them.

    Its deviation from their median has the variance of the median, about
    (pi / 2) 16 / 4, far more than its own.
    """
    planes = [noise(rng), *(noise(rng, 4.0) for _ in range(3))]
    made = stack(planes)
    expected = 1.0 / (1.0 + 3.0 / 16.0)
    assert np.mean(made.variance > 1.01 * expected) < 1e-3


def test_power_of_smoothed_noise(rng):
    """White noise through a Gaussian of sigma s: |K^|^2 = exp(-4 pi^2 s^2 f^2)."""
    made = smooth(noise(rng), 1.3)
    f = np.fft.fftfreq(64)
    f2 = f[:, None] ** 2 + f[None, :] ** 2
    expected = np.exp(-4.0 * np.pi**2 * 1.3**2 * f2)
    # The kernel ends at 4.5 sigma: 1e-4 of its peak.
    np.testing.assert_allclose(
        made.noise_power, expected / expected.mean(), atol=2e-3 * made.noise_power.max()
    )
    inner = made.pixels[16:-16, 16:-16]
    # 1 / (4 pi s^2); some N / (4 pi s^2) = 2400 independent values: 2.9 %.
    assert inner.var() == pytest.approx(1.0 / (4.0 * np.pi * 1.3**2), rel=4 * 0.029)
    np.testing.assert_allclose(
        made.variance[16:-16, 16:-16], 1.0 / (4.0 * np.pi * 1.3**2), rtol=5e-3
    )
