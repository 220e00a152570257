"""The combination of epochs: weights, noise, masks and outliers."""

import numpy as np
import pytest

from latelight.masks import MaskBit
from latelight.records import Plane
from latelight.stacking.combine import combine, plane_weight
from latelight.stacking.settings import StackingSettings
from latelight.threads import n_threads, set_threads

SHAPE = (200, 210)
SKY = 100.0
LEVEL = np.full(SHAPE, SKY, np.float32)


def blank(rng, sigma=3.0):
    return Plane(
        rng.normal(SKY, sigma, SHAPE).astype(np.float32),
        np.full(SHAPE, sigma**2, np.float32),
        np.zeros(SHAPE, np.uint16),
    )


def flat(value, variance=1.0, shape=SHAPE):
    return Plane(
        np.full(shape, value, np.float32),
        np.full(shape, variance, np.float32),
        np.zeros(shape, np.uint16),
    )


def stack(planes, **settings):
    return combine(planes, sky=LEVEL, settings=StackingSettings(**settings))


@pytest.mark.parametrize("sigmas", [(3.0, 5.0), (2.0, 3.0, 4.0), (2.0, 2.0, 6.0, 9.0)])
def test_noise_is_as_stated_and_the_level_unbiased(rng, sigmas):
    made = stack([blank(rng, sigma) for sigma in sigmas])
    stated = float(made.variance.mean())
    # Of N = 42000 pixels: variance to sqrt(2 / N) = 0.7 %, mean to sigma / sqrt(N).
    assert made.pixels.var() == pytest.approx(stated, rel=0.03)
    assert made.pixels.mean() == pytest.approx(SKY, abs=4 * (stated / 42000) ** 0.5)
    assert not made.mask.any()


@pytest.mark.parametrize("count", [3, 4, 5, 7])
def test_even_a_close_clip_does_not_bias_blank_sky(rng, count):
    made = stack([blank(rng) for _ in range(count)], clip=2.0)
    sigma = float(np.sqrt(made.pixels.var() / made.pixels.size))
    assert made.pixels.mean() == pytest.approx(SKY, abs=4 * sigma)


def test_the_usual_clip_costs_next_to_nothing(rng):
    """At 5 sigma fewer than 1 value in 1e4 of normal noise is left out."""
    made = stack([blank(rng) for _ in range(4)])
    assert np.mean(made.variance > 9.0 / 4 * 1.001) < 4e-4


@pytest.mark.parametrize("count", [3, 4, 6])
@pytest.mark.parametrize("height", [20.0, -20.0, 3e4])
def test_what_one_epoch_alone_shows_is_left_out(rng, count, height):
    planes = [blank(rng, 1.0) for _ in range(count)]
    planes[1].pixels[50:60] += height
    made = stack(planes)
    clean = np.mean([p.pixels[50:60] for i, p in enumerate(planes) if i != 1], axis=0)
    same = np.abs(made.pixels[50:60] - clean) < 1e-2
    np.testing.assert_allclose(made.variance[50:60][same], 1 / (count - 1), rtol=1e-5)
    # Beside the outlier, normal noise loses another value in 1e4 at most; what is
    # left is noise: 6 sigma of a mean of one value fewer.
    assert np.mean(~same) < 2e-3
    assert np.abs(made.pixels[50:60] - SKY).max() < 6.0 / np.sqrt(count - 2)


def test_of_two_planes_none_can_be_left_out():
    made = stack([flat(SKY), flat(SKY + 60.0)])
    np.testing.assert_allclose(made.pixels, SKY + 30.0)
    np.testing.assert_allclose(made.variance, 0.5)


def test_without_a_majority_all_are_used():
    made = stack([flat(SKY), flat(SKY), flat(SKY + 60.0), flat(SKY + 60.0)])
    np.testing.assert_allclose(made.pixels, SKY + 30.0)


@pytest.mark.parametrize(("part", "kept"), [(0.04, True), (0.06, False)])
def test_bright_light_may_differ_by_the_tolerance(part, kept):
    """Half of one epoch's star is 1e6 sigma: only the tolerance, 5 %, saves it."""
    star = 1e6
    planes = [flat(SKY + star) for _ in range(4)] + [flat(SKY + star * (1 + part))]
    made = stack(planes)
    expected = SKY + star * (1 + part / 5 if kept else 1.0)
    np.testing.assert_allclose(made.pixels, expected, rtol=1e-6)


def test_masked_pixels_are_not_used():
    planes = [flat(SKY), flat(SKY + 1.0), flat(SKY + 2.0)]
    planes[0].mask[:, 0] = MaskBit.COSMIC_RAY
    planes[1].mask[:, 0] = MaskBit.TRAIL
    made = stack(planes)
    np.testing.assert_allclose(made.pixels[:, 0], SKY + 2.0)
    np.testing.assert_allclose(made.variance[:, 0], 1.0)
    np.testing.assert_allclose(made.variance[:, 1], 1.0 / 3.0)
    assert not made.mask.any()


def test_a_pixel_masked_everywhere_keeps_all_bits_and_is_finite():
    planes = [flat(SKY), flat(SKY + 2.0)]
    planes[0].mask[3, 4] = MaskBit.COSMIC_RAY
    planes[1].mask[3, 4] = MaskBit.TRAIL
    made = stack(planes)
    assert made.mask[3, 4] == MaskBit.COSMIC_RAY | MaskBit.TRAIL
    assert np.count_nonzero(made.mask) == 1
    assert made.pixels[3, 4] == pytest.approx(SKY + 1.0)
    assert made.variance[3, 4] > 0


def test_weights_follow_the_sky_and_not_the_stars():
    quiet, noisy = flat(SKY, 1.0), flat(SKY + 6.0, 4.0)
    noisy.variance[:30, :30] = 1e6
    quiet.variance[:30, :30] = 1e6
    made = stack([quiet, noisy])
    np.testing.assert_allclose(made.pixels, SKY + 1.2, rtol=1e-6)
    assert plane_weight(noisy) == pytest.approx(0.25)


def test_weights_are_of_the_good_pixels():
    plane = flat(SKY, 4.0)
    plane.variance[:150], plane.mask[:150] = 1e6, MaskBit.NO_DATA
    assert plane_weight(plane) == pytest.approx(0.25)
    plane.mask[:] = MaskBit.NO_DATA
    assert plane_weight(plane) > 0


def test_noise_power_is_the_mean_by_share_of_the_variance():
    power = np.ones((64, 64))
    power[0] = 65.0
    power /= power.mean()
    smooth = Plane(*_arrays(flat(SKY, 1.0)), noise_power=power)
    white = flat(SKY, 3.0)
    made = stack([smooth, white])
    # Shares w^2 v with w = 1 / v: 1 and 1/3.
    np.testing.assert_allclose(made.noise_power, 0.75 * power + 0.25)
    assert stack([white, white]).noise_power is None


def _arrays(plane):
    return plane.pixels, plane.variance, plane.mask


def test_inputs_stay_and_threads_do_not_matter(rng):
    planes = [blank(rng) for _ in range(3)]
    before = [array.copy() for plane in planes for array in _arrays(plane)]
    one = stack(planes)
    count = n_threads()
    try:
        set_threads(3)
        three = stack(planes)
    finally:
        set_threads(count)
    for a, b in zip(_arrays(one), _arrays(three), strict=True):
        np.testing.assert_array_equal(a, b)
    after = [array for plane in planes for array in _arrays(plane)]
    for a, b in zip(before, after, strict=True):
        np.testing.assert_array_equal(a, b)


def test_no_planes_or_unlike_shapes_are_refused():
    with pytest.raises(ValueError, match="planes must not be empty"):
        stack([])
    with pytest.raises(ValueError, match="must have one shape"):
        stack([flat(SKY), flat(SKY, shape=(10, 10))])
