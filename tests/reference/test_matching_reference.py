"""The matching stage against tabulated numbers and other libraries."""

import numpy as np
import pytest
from photutils.psf_matching import make_kernel

from latelight.matching.convolution import (
    convolve,
    convolve_variance,
    gaussian_kernel,
    noise_gain,
)
from latelight.matching.match import match_pair
from latelight.matching.psf import measure_psf
from latelight.matching.settings import MatchingSettings
from latelight.widths import FWHM_PER_SIGMA, fwhm_of

pytestmark = pytest.mark.reference


@pytest.mark.parametrize(
    ("sigma", "root_sum_square"),
    # sum K^2 of a discrete unit-sum Gaussian, 1 / (4 pi sigma^2) (elementary; checked
    # by direct summation).
    [(1.0, 0.28212), (1.5, 0.188063), (2.0, 0.141047), (3.0, 0.0940316)],
)
def test_noise_gain_of_gaussian_kernels(sigma, root_sum_square):
    kernel = gaussian_kernel(sigma, shape=(64, 64)).at(0, 0)

    assert np.sqrt(noise_gain(kernel, None)) == pytest.approx(root_sum_square, rel=1e-4)


def test_difference_noise_of_the_worked_example(rng):
    """sigma_n = sigma_r = 10, FWHM 3 -> 4 px: kernel FWHM 2.64575 px, noise 10.3104.

    Closed form sigma_n^2 + sigma_r^2 / (4 pi sigma_K^2); the measured noise of 512^2
    pixels has an error of 0.14 %, 0.5 % is 3.6 of them.
    """
    shape = (512, 512)
    kernel = gaussian_kernel(2.64575 / FWHM_PER_SIGMA, shape=shape)
    new, reference = rng.normal(0.0, 10.0, (2, *shape)).astype(np.float32)
    variance = np.full(shape, 100.0, np.float32)

    predicted = variance + convolve_variance(
        variance, np.zeros(shape, np.uint16), kernel, noise_power=None
    )
    difference = new - convolve(reference, kernel)

    assert np.sqrt(predicted.mean()) == pytest.approx(10.3104, rel=1e-3)
    assert difference[16:-16, 16:-16].std() == pytest.approx(10.3104, rel=5e-3)


def test_the_kernel_agrees_with_a_fourier_ratio(star_pair):
    """photutils' make_kernel divides the transforms of the two PSFs; the
    fitted kernel must be the same Gaussian, sqrt(1.8^2 - 1.3^2) = 1.245 px wide."""
    pair = star_pair(science_sigma=1.8, template_sigma=1.3, noise=0.1)
    matched = match_pair(
        pair.science,
        pair.template,
        science_stars=pair.science_stars,
        template_stars=pair.template_stars,
        alignment=pair.alignment,
        settings=MatchingSettings(),
    )
    step = np.arange(-25, 26)
    narrow, broad = (
        np.exp(-0.5 * (step[:, None] ** 2 + step**2) / s**2) for s in (1.3, 1.8)
    )

    other = make_kernel(
        narrow / narrow.sum(), broad / broad.sum(), window=_cosine_window
    )

    kernel = matched.kernel.at(160, 160)
    half = kernel.shape[0] // 2
    theirs = other[25 - half : 26 + half, 25 - half : 26 + half]
    assert np.abs(kernel - theirs).max() < 0.03 * theirs.max()


def _cosine_window(shape):
    """Pass low frequencies, fall to zero where the narrow PSF has no power."""
    y, x = (np.arange(n) - (n - 1) / 2 for n in shape)
    radius = np.hypot(y[:, None], x) / (shape[0] / 2)
    return np.cos(0.5 * np.pi * np.clip((radius - 0.55) / 0.3, 0, 1)) ** 2


def test_the_stacked_psf_is_the_stars(star_pair, rng):
    """Gaussian stars of sigma 1.6: FWHM 3.7677 px = 2 sqrt(2 ln 2) sigma.  The stack of
    60 stars of S/N over 300 is good to a few tenths of a per cent."""
    pair = star_pair(science_sigma=1.6, noise=3.0, rng=rng)

    psf = measure_psf(pair.science, x=pair.x, y=pair.y, settings=MatchingSettings())

    assert psf.fwhm_px == pytest.approx(3.7677, rel=0.01)
    for place in ((10.0, 10.0), (160.0, 160.0), (300.0, 40.0)):
        assert psf.kernel.at(*place).sum() == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize("sigma", [0.85, 1.5, 3.4])
def test_the_width_of_a_gaussian(sigma):
    """2 sqrt(2 ln 2) = 2.354820 (elementary)."""
    step = np.arange(-20, 21)
    image = np.exp(-0.5 * (step[:, None] ** 2 + step**2) / sigma**2)

    assert fwhm_of(image) == pytest.approx(2.354820 * sigma, rel=0.015)
