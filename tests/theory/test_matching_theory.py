"""The matching stage against closed forms."""

import numpy as np
import pytest

from latelight.matching.convolution import (
    convolve,
    convolve_variance,
    gaussian_kernel,
    noise_gain,
)
from latelight.matching.match import match_pair
from latelight.matching.settings import MatchingSettings
from latelight.records import SpatialKernel

pytestmark = pytest.mark.theory


def match(pair, **settings):
    return match_pair(
        pair.science,
        pair.template,
        science_stars=pair.science_stars,
        template_stars=pair.template_stars,
        alignment=pair.alignment,
        settings=MatchingSettings(**settings),
    )


def centroid(image):
    """Sum and centroid offset (x, y) of an image."""
    half = image.shape[0] // 2
    step = np.arange(-half, half + 1)
    total = image.sum()
    return total, tuple(image.sum(axis=a) @ step / total for a in (0, 1))


def mean_sigma(image):
    """Root mean second moment per axis about the middle."""
    half = image.shape[0] // 2
    step = np.arange(-half, half + 1)
    return np.sqrt(np.sum(image * (step[:, None] ** 2 + step**2)) / image.sum() / 2)


@pytest.mark.parametrize(("template", "science"), [(1.2, 1.7), (1.5, 3.2), (1.0, 2.0)])
def test_a_gaussian_kernel_takes_one_gaussian_to_another(star_pair, template, science):
    """Variances of Gaussians add in a convolution: sigma^2 = s2^2 - s1^2.

    Stars of sigma 1 sampled at pixel centres are already Gaussian to 1e-8; 1 % is
    the error of the truncated basis on noise-free stars.
    """
    pair = star_pair(science_sigma=science, template_sigma=template, noise=0.1)

    matched = match(pair)

    kernel = matched.kernel.at(160, 160)
    assert matched.convolved == "template"
    assert kernel.sum() == pytest.approx(1.0, abs=1e-3)
    assert mean_sigma(kernel) == pytest.approx(
        np.sqrt(science**2 - template**2), rel=0.01
    )


def test_identical_frames_give_a_delta_and_nothing_left(star_pair):
    """K = delta, D = 0: float32 rounding of the brightest pixel is 2e-3 counts."""
    pair = star_pair(science_sigma=1.5, template_sigma=1.5, noise=0.05)

    matched = match(pair)

    kernel = matched.kernel.at(100, 200)
    half = kernel.shape[0] // 2
    assert kernel[half, half] == pytest.approx(1.0, abs=1e-6)
    kernel[half, half] = 0.0
    assert np.abs(kernel).max() < 1e-6
    assert np.abs(matched.science.pixels - matched.template.pixels).max() < 0.05


def test_scale_and_offset_are_returned(star_pair):
    """I = 1.7 R + 40 gives a kernel sum of 1.7 and a level of 40."""
    pair = star_pair(
        science_sigma=1.5, template_sigma=1.5, scale=1.7, offset=40.0, noise=0.05
    )

    matched = match(pair)

    assert matched.scale == pytest.approx(1.7, abs=1e-5)
    level = np.median(matched.science.pixels - matched.template.pixels)
    assert level == pytest.approx(40.0, abs=0.01)


def test_exchanging_the_frames_exchanges_roles_and_inverts_the_scale(star_pair):
    """Whichever frame is sharper is convolved; fluxes stay the science frame's."""
    there = match(star_pair(scale=1.3, noise=0.1))
    back = match(
        star_pair(science_sigma=1.4, template_sigma=1.8, scale=1 / 1.3, noise=0.1)
    )

    assert (there.convolved, back.convolved) == ("template", "science")
    assert there.scale * back.scale == pytest.approx(1.0, abs=2e-3)
    for matched in (there, back):
        left = matched.science.pixels - matched.template.pixels
        assert np.abs(left).max() < 0.005 * matched.model.max()


def test_a_small_shift_is_taken_up_by_the_kernel(star_pair):
    """Unmatched, a star of sigma 1.5 shifted by 0.1 px leaves 0.60653 * 0.1 / 1.5 of
    its peak (4 %); the kernel leaves less than a twentieth of that."""
    pair = star_pair(science_sigma=1.5, template_sigma=1.5, shift=0.1, noise=1.0)

    matched = match(pair)

    _, (dx, dy) = centroid(matched.kernel.at(160, 160))
    left = np.abs(matched.science.pixels - matched.template.pixels).max()
    assert (dx, dy) == pytest.approx((0.1, 0.0), abs=0.005)
    assert left < 0.002 * matched.model.max()


@pytest.mark.parametrize("n_stars", [20, 60])
def test_the_scale_is_right_within_its_error(star_pair, rng, n_stars):
    """Noise 20 counts on stars of 2e4-2e5: the pull of the scale is N(0, 1), and the
    held-out stars subtract to their photon noise.

    Four sigma for the pull; chi-square over some 180 pixels has a scatter of 0.1.
    """
    pair = star_pair(n_stars, scale=0.8, noise=20.0, rng=rng)

    matched = match(pair)

    assert abs(matched.scale - 0.8) < 4 * matched.scale_err
    assert matched.scale_err < 0.02
    if n_stars == 60:
        assert 0.85 < matched.held_out_chi2 < 1.15


def test_noise_of_resampled_frames_is_followed_through_the_kernel(rng):
    """White noise moved by half a pixel with linear weights has the spectrum
    cos^2(pi f) per axis (over its mean, 1/2); sigma is right to 1 % on 512^2."""
    white = rng.normal(0.0, 10.0, (512, 512))
    moved = 0.25 * sum(np.roll(white, (a, b), (0, 1)) for a in (0, 1) for b in (0, 1))
    axis = np.cos(np.pi * np.fft.fftfreq(64)) ** 2 / 0.5
    kernel = gaussian_kernel(1.1, shape=(512, 512))
    variance = np.full((512, 512), 25.0, np.float32)  # 100 / 4
    mask = np.zeros((512, 512), np.uint16)

    out = convolve(moved.astype(np.float32), kernel)
    predicted = convolve_variance(
        variance, mask, kernel, noise_power=np.outer(axis, axis)
    )

    inner = np.s_[20:-20, 20:-20]
    measured = out[inner].std()
    assert measured / np.sqrt(predicted[inner].mean()) == pytest.approx(1.0, abs=0.02)
    assert predicted[inner].mean() > 1.5 * 25.0 * noise_gain(kernel.at(0, 0), None)


def test_a_varying_kernel_is_the_sum_over_the_pixels_it_says(rng):
    """Against the definition, out(x) = sum_d K(x; d) image(x - d), pixel by pixel."""
    shape = (41, 57)
    planes = rng.normal(size=(3, 5, 5))
    kernel = SpatialKernel(planes, ((0, 0), (1, 0), (1, 1)), shape)
    image = rng.normal(size=shape).astype(np.float32)

    out = convolve(image, kernel)

    for y, x in ((0, 0), (40, 56), (20, 30), (1, 55)):
        here = kernel.at(x, y)
        total = sum(
            here[dy + 2, dx + 2] * image[y - dy, x - dx]
            for dy in range(-2, 3)
            for dx in range(-2, 3)
            if 0 <= y - dy < shape[0] and 0 <= x - dx < shape[1]
        )
        assert out[y, x] == pytest.approx(total, abs=2e-5)
