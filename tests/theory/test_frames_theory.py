"""Noise of frames against closed forms."""

import numpy as np
import pytest

from latelight.frames.background import sky_map
from latelight.frames.flags.cosmic_rays import measure_sharpness
from latelight.frames.noise import NoiseModel, noise_model, variance_plane
from latelight.frames.trails._kernels import line_transform

pytestmark = pytest.mark.theory

N = 512


def frame(rng, *, level, gain, read_noise, light=0.0):
    """Counts of a flat sky (and more), and their exact variance."""
    mean = np.full((N, N), float(level)) + light
    electrons = rng.poisson(mean * gain) + rng.normal(0, read_noise, mean.shape)
    return (electrons / gain).astype(np.float32), mean / gain + read_noise**2 / gain**2


def halo(height):
    """A smooth bright halo: photons without structure."""
    yy, xx = np.mgrid[:N, :N] - 0.5 * N
    return height * (1 + (yy**2 + xx**2) / 80.0**2) ** -4


def no_mask():
    return np.zeros((N, N), np.uint16)


CAMERAS = [(200.0, 2.0, 5.0), (20.0, 1.0, 4.0), (3000.0, 0.7, 10.0), (5.0, 4.0, 9.0)]


@pytest.mark.parametrize(("level", "gain", "read_noise"), CAMERAS)
def test_blank_sky_noise_over_prediction_is_one(rng, level, gain, read_noise):
    """Variance of a pixel = level / gain + (read noise / gain)^2.

    512^2 pixels give a ratio of variances to sqrt(2 / 512^2) = 0.3 %; tolerance 4
    sigma and 1 % for the sky map.
    """
    pixels, _ = frame(rng, level=level, gain=gain, read_noise=read_noise)
    sky = sky_map(pixels, no_mask(), cell=64)
    noise = noise_model(pixels, sky, no_mask(), gain=gain, read_noise=read_noise)
    assert noise.notes == ()
    variance = variance_plane(pixels, sky, noise=noise)
    chi2 = np.mean((pixels - level) ** 2 / variance)
    assert chi2 == pytest.approx(1.0, abs=0.022)


def test_weights_do_not_follow_the_noise(rng):
    """The inverse-variance mean of a blank sky is its mean.

    With each pixel's own counts as its variance it would fall short by one
    electron, 1 / gain = 0.5 counts; the mean itself is good to sigma / 512 = 0.01.
    """
    level, gain, read_noise = 30.0, 2.0, 2.0
    pixels, _ = frame(rng, level=level, gain=gain, read_noise=read_noise)
    sky = sky_map(pixels, no_mask(), cell=64)
    noise = noise_model(pixels, sky, no_mask(), gain=gain, read_noise=read_noise)
    weight = 1.0 / variance_plane(pixels, sky, noise=noise).astype(float)
    mean = np.sum(weight * pixels) / np.sum(weight)
    assert abs(mean - level) < 0.05


def test_weights_do_not_follow_the_noise_of_faint_light(rng):
    """The same on faint smooth light, about one sigma of the sky high."""
    level, gain, read_noise, light = 30.0, 2.0, 2.0, 4.0
    pixels, _ = frame(rng, level=level + light, gain=gain, read_noise=read_noise)
    sky = np.full((N, N), level, np.float32)
    noise = NoiseModel(level, level / gain + 1.0, gain, read_noise, ())
    weight = 1.0 / variance_plane(pixels, sky, noise=noise).astype(float)
    mean = np.sum(weight * pixels) / np.sum(weight)
    # Its own counts would cost 0.5; of nine they are a quarter, the 2 sigma cut
    # below which none count adds to it.
    assert abs(mean - level - light) < 0.25


def test_bright_light_has_its_photon_noise(rng):
    """On a halo too the squared residual over the variance averages to one (2 %)."""
    light = halo(5000.0)
    pixels, _ = frame(rng, level=100.0, gain=1.5, read_noise=6.0, light=light)
    sky = np.full((N, N), 100.0, np.float32)
    noise = NoiseModel(100.0, 100.0 / 1.5 + 16.0, 1.5, 6.0, ())
    variance = variance_plane(pixels, sky, noise=noise)
    chi2 = (pixels - 100.0 - light) ** 2 / variance
    for low, high in ((20, 100), (100, 1000), (1000, 5000)):
        part = (light > low) & (light < high)
        # 4 sigma of the mean of part.sum() squares, and 1 % for the smoothing.
        assert abs(chi2[part].mean() - 1.0) < 4 * np.sqrt(2 / part.sum()) + 0.01


@pytest.mark.parametrize(("level", "gain", "read_noise"), CAMERAS[:3])
def test_gain_and_read_noise_from_the_pixels(rng, level, gain, read_noise):
    """Photon transfer: the slope of variance against height is 1 / gain.

    The sky's variance is measured to 2 % (stated), the gain to 15 % (stated).
    """
    light = halo(60.0 * np.sqrt(level / gain + read_noise**2 / gain**2))
    pixels, _ = frame(rng, level=level, gain=gain, read_noise=read_noise, light=light)
    sky = np.full((N, N), level, np.float32)
    noise = noise_model(pixels, sky, no_mask(), gain=None, read_noise=None)
    truth = level / gain + read_noise**2 / gain**2
    assert noise.sky_variance == pytest.approx(truth, rel=0.02)
    assert noise.gain == pytest.approx(gain, rel=0.15)
    assert len(noise.notes) == 2
    assert "gain estimated" in noise.notes[0]


def test_read_noise_alone_from_the_blank_sky(rng):
    """read noise^2 = gain^2 variance - gain level; 2 % of the variance is 0.13 e-."""
    pixels, _ = frame(rng, level=50.0, gain=2.0, read_noise=8.0)
    sky = sky_map(pixels, no_mask(), cell=64)
    noise = noise_model(pixels, sky, no_mask(), gain=2.0, read_noise=None)
    assert noise.read_noise == pytest.approx(8.0, abs=0.25)


def test_sky_taken_off_is_noticed(rng):
    """A frame less its sky keeps the sky's noise, which the words cannot know."""
    pixels, _ = frame(rng, level=1000.0, gain=2.0, read_noise=5.0)
    pixels -= np.float32(1000.0)
    sky = sky_map(pixels, no_mask(), cell=64)
    noise = noise_model(pixels, sky, no_mask(), gain=2.0, read_noise=5.0)
    assert noise.sky_variance == pytest.approx(506.25, rel=0.02)
    assert "measured" in noise.notes[0]


def test_smoothed_noise_is_not_believed(rng):
    """Correlated pixels look too quiet to differences: the words are kept."""
    from scipy import ndimage

    pixels, _ = frame(rng, level=1000.0, gain=2.0, read_noise=5.0)
    pixels = ndimage.gaussian_filter(pixels, 0.8)
    sky = sky_map(pixels, no_mask(), cell=64)
    noise = noise_model(pixels, sky, no_mask(), gain=2.0, read_noise=5.0)
    assert noise.sky_variance == pytest.approx(506.25, rel=0.005)
    assert "correlated" in noise.notes[0]


@pytest.mark.parametrize("sigma", [0.85, 1.2, 2.0])
def test_sharpness_of_gaussian_stars(rng, star_plane, sigma):
    """A Gaussian centred on a pixel drops by 1 - exp(-1 / 2 s^2) to the next pixel.

    And by 1 - exp(-1 / s^2) along the diagonal; off-centre stars drop less, so the
    95th percentile lies a few per cent below; noise adds a few to the widest.
    """
    x, y = rng.uniform(10, 500, (2, 250))
    plane = star_plane(
        x, y, np.full(250, 3e4), shape=(N, N), sigma=sigma, noise=5.0, rng=rng
    )
    sky = np.full((N, N), 200.0, np.float32)
    noise = NoiseModel(200.0, 25.0, 8.0, 0.0, ())
    found = measure_sharpness(plane.pixels, sky, plane.mask, noise=noise)
    assert found.n_stars > 100
    assert 0.9 < found.axis / (1 - np.exp(-0.5 / sigma**2)) < 1.1
    assert 0.9 < found.diagonal / (1 - np.exp(-1.0 / sigma**2)) < 1.1
    assert found.fwhm_px == pytest.approx(2.3548 * sigma, rel=0.06)


def test_sky_map_follows_a_plane(rng):
    """Clipped medians of cells lie on a plane; 256 of 4096 pixels give sigma / 13."""
    yy, xx = np.mgrid[:N, :N]
    truth = 300.0 + 0.05 * xx - 0.03 * yy
    pixels = (truth + rng.normal(0, 5, truth.shape)).astype(np.float32)
    sky = sky_map(pixels, no_mask(), cell=64)
    inside = np.s_[64:-64, 64:-64]
    assert np.abs(sky - truth)[inside].max() < 4 * 5 / 13


def test_line_transform_sums_every_line_once():
    """Along a slope s every column offset covers the image once: sums are equal.

    And a vertical line of ones adds up to its length at slope 0.
    """
    image = np.random.default_rng(1).random((64, 40)).astype(np.float32)
    buffers = (np.empty((64, 104), np.float32) for _ in range(2))
    sums = line_transform(image, 64, *buffers)
    assert np.allclose(sums.sum(axis=1), image.sum(), rtol=1e-4)
    image[:] = 0
    image[:, 17] = 1
    buffers = (np.empty((64, 104), np.float32) for _ in range(2))
    sums = line_transform(image, 64, *buffers)
    assert sums[0, 64 + 17] == 64
    # A 45-degree line of ones: from column 0 to column 39, at slope 63.
    image[:] = 0
    np.fill_diagonal(image, 1)
    buffers = (np.empty((64, 104), np.float32) for _ in range(2))
    assert line_transform(image, 64, *buffers)[63, 64] == 40
