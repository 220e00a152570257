"""Registration against closed forms: centroids, noise, errors."""

import numpy as np
import pytest

from latelight.records import PixelMap, Plane
from latelight.registration.alignment import align
from latelight.registration.interpolation import kernel_weights
from latelight.registration.pixel_map import evaluate, identity_map
from latelight.registration.polynomial import fit_displacement, terms
from latelight.registration.resampling import noise_power, resample
from latelight.registration.settings import RegistrationSettings
from latelight.registration.stars import detect_stars

pytestmark = pytest.mark.theory

SETTINGS = RegistrationSettings()


def shift_map(x, y, shape):
    grid = identity_map(shape)
    return PixelMap(grid.node_y, grid.node_x, grid.map_y + y, grid.map_x + x, 0.0)


def star_grid(shape, rng):
    x, y = np.meshgrid(np.arange(25, shape[1], 40.0), np.arange(25, shape[0], 40.0))
    jitter = rng.uniform(-0.5, 0.5, (2, x.size))
    return x.ravel() + jitter[0], y.ravel() + jitter[1]


def test_centroid_scatter_of_gaussian_stars_in_white_noise(star_plane, rng):
    """Every position error is the least possible one.

    For a Gaussian star of flux F and width s in white noise n the Cramer-Rao
    bound of one coordinate is ``sqrt(8 pi) s^2 n / F = sqrt(2) s / SNR_peak *
    ...``; from ``sum (dP/dx)^2 = 1 / (8 pi s^4)``.  The windowed centroid with
    a window of the same width reaches it.
    """
    shape, sigma, noise = (512, 512), 1.6, 5.0
    x, y = star_grid(shape, rng)
    flux = np.full(x.size, 8e3)
    stars = detect_stars(
        star_plane(x, y, flux, shape=shape, sigma=sigma, noise=noise, rng=rng),
        settings=SETTINGS,
    )
    bound = np.sqrt(8.0 * np.pi) * sigma**2 * noise / 8e3
    offset = np.hypot(stars.x[:, None] - x, stars.y[:, None] - y)
    true = offset.argmin(axis=1)
    error = np.concatenate([stars.x - x[true], stars.y - y[true]])
    # The rms of n normal values scatters by 1 / sqrt(2 n).
    assert np.sqrt(np.mean(error**2)) == pytest.approx(
        bound, rel=4.0 / np.sqrt(2.0 * error.size)
    )
    assert np.median(stars.position_err) == pytest.approx(bound, rel=0.03)


def interpolation_error(name, fwhm):
    """Largest error in one axis for a Gaussian star, over phases and places."""
    sigma = fwhm / (2.0 * np.sqrt(2.0 * np.log(2.0)))
    pixel = np.arange(-3, 5)
    star = np.linspace(-6.0, 6.0, 97)[:, None]
    weights = kernel_weights(name).astype(float)[::128]
    phase = np.arange(0, 4097, 128) / 4096
    sampled = np.exp(-0.5 * ((pixel - star) / sigma) ** 2)
    true = np.exp(-0.5 * ((phase - star) / sigma) ** 2)
    return np.abs(sampled @ weights.T - true).max()


@pytest.mark.parametrize("fwhm", [2.5, 3.0, 4.0, 6.0])
def test_least_squares_weights_beat_windowed_sincs(fwhm):
    """By the definition of least squares near the widths they are made for."""
    optimal = interpolation_error("least-squares", fwhm)
    assert optimal < 0.7 * interpolation_error("lanczos4", fwhm)
    assert optimal < {2.5: 5e-3, 3.0: 2e-3, 4.0: 1e-3, 6.0: 1e-3}[fwhm]


def test_variance_of_resampled_white_noise(rng):
    """White noise of variance v becomes ``v sum w_x^2 sum w_y^2``.

    The mean over the frame of the measured scatter equals the variance plane:
    both follow from the same independent pixels.
    """
    shape = (400, 400)
    pixels = rng.normal(0.0, 2.0, shape).astype(np.float32)
    plane = Plane(pixels, np.full(shape, 4.0, np.float32), np.zeros(shape, np.uint16))
    got = resample(plane, shift_map(0.5, 0.25, shape), shape=shape, settings=SETTINGS)
    weights = kernel_weights("least-squares").astype(float)
    expected = 4.0 * np.sum(weights[2048] ** 2) * np.sum(weights[1024] ** 2)
    inner = (slice(8, -8), slice(8, -8))
    assert got.variance[inner] == pytest.approx(expected, rel=1e-5)
    # Correlation leaves at least a quarter of the pixels independent.
    tolerance = 4.0 * np.sqrt(2.0 / (got.pixels[inner].size / 4))
    assert np.var(got.pixels[inner]) == pytest.approx(expected, rel=tolerance)


def test_noise_power_of_a_shift_is_the_transfer_function():
    """``P(k) ~ |sum_j w_j exp(-i k j)|^2`` in each axis, mean 1."""
    shape = (128, 160)
    power = noise_power(
        shift_map(7.3, -2.6, shape), shape=shape, interpolation="least-squares"
    )
    weights = kernel_weights("least-squares").astype(float)
    along_x = np.abs(np.fft.fft(weights[round(0.3 * 4096)], 64)) ** 2
    along_y = np.abs(np.fft.fft(weights[round(0.4 * 4096)], 64)) ** 2
    expected = np.outer(along_y, along_x)
    assert power == pytest.approx(expected / expected.mean(), abs=2e-3)
    assert power.mean() == pytest.approx(1.0)


@pytest.mark.parametrize("angle", [0.0, 0.3, 30.0])
@pytest.mark.parametrize("name", ["least-squares", "lanczos4"])
def test_noise_power_matches_resampled_noise(rng, angle, name):
    """Measured lag correlations of resampled white noise are those predicted."""
    shape = (512, 512)
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    grid = identity_map(shape)
    x, y = grid.map_x - 256, grid.map_y - 256
    pixel_map = PixelMap(
        grid.node_y, grid.node_x, s * x + c * y + 256.4, c * x - s * y + 256.3, 0.0
    )
    plane = Plane(
        rng.normal(0.0, 1.0, shape).astype(np.float32),
        np.ones(shape, np.float32),
        np.zeros(shape, np.uint16),
    )
    settings = RegistrationSettings(interpolation=name)
    got = resample(plane, pixel_map, shape=shape, settings=settings)
    # The whole frame but its corners, where a large rotation leaves it.
    margin = 120 if angle > 1.0 else 10
    box = got.pixels[margin:-margin, margin:-margin].astype(float)
    predicted = np.fft.ifft2(got.noise_power).real
    # A lag correlation of N pixels scatters by about sqrt(1.5 / N).
    tolerance = 4.0 * np.sqrt(1.5 / box.size)
    for dy, dx in ((0, 1), (1, 0), (1, 1), (0, 2), (3, 0)):
        rows, cols = box.shape
        product = box[: rows - dy, : cols - dx] * box[dy:, dx:]
        measured = product.mean() / np.mean(box**2)
        assert measured == pytest.approx(predicted[dy, dx], abs=tolerance), (dy, dx)


def polynomial_misses(rng, *, degree, astray, n_fields):
    """Squared misses over the frame and squared errors stated, a row a field.

    80 stars of unequal errors in a field, some of them astray by up to 3 px.
    """
    shape = (500, 500)
    x, y = np.meshgrid(np.linspace(0, 499, 12), np.linspace(0, 499, 12))
    grid = np.column_stack([x.ravel(), y.ravel()])
    rows = []
    for _ in range(n_fields):
        places = rng.uniform(0, 499, (80, 2))
        design = terms(places, shape, degree)
        truth = rng.normal(0.0, 0.5, (design.shape[1], 2))
        error = np.exp(rng.uniform(np.log(0.01), np.log(0.2), 80))
        seen = design @ truth + rng.normal(size=(80, 2)) * error[:, None]
        wild = rng.random(80) < astray
        seen[wild] += rng.uniform(-3.0, 3.0, (int(wild.sum()), 2))
        fit = fit_displacement(
            places,
            seen,
            error,
            shape=shape,
            degrees=(0, 3),
            clip_sigma=4.0,
            error_floor=0.003,
        )
        miss = fit.at(grid) - terms(grid, shape, degree) @ truth
        rows.append((np.mean(miss**2), np.mean(fit.error_at(grid) ** 2)))
    return np.array(rows)


@pytest.mark.parametrize("degree", [0, 1, 3])
def test_polynomial_error_is_honest(rng, degree):
    """The rms miss over many fields is the rms error stated.

    A field's mean square miss has about k = 2 (degree + 1)(degree + 2) / 2 degrees
    of freedom, so that of 60 fields scatters by sqrt(2 / (60 k)).  Averaging over
    the degrees and a floor under the errors make it too careful by up to a third
    in the square.
    """
    miss, error = polynomial_misses(rng, degree=degree, astray=0.0, n_fields=60).T
    scatter = 4.0 * np.sqrt(2.0 / (60 * (degree + 1) * (degree + 2)))
    assert 0.66 - scatter < miss.sum() / error.sum() < 1.0 + scatter


def test_stars_astray_do_not_move_the_polynomial(rng):
    """One star in ten up to 3 px off: the median field is as good as stated."""
    miss, error = polynomial_misses(rng, degree=1, astray=0.1, n_fields=40).T
    assert np.median(miss / error) < 1.2


def test_extra_scatter_is_found_from_the_stars(rng):
    """Errors understated by a common scatter s are widened to it.

    200 stars of claimed error 0.01 and true error hypot(0.01, 0.05): a shift
    alone is then known to 0.051 / sqrt(200).
    """
    places = rng.uniform(0, 499, (200, 2))
    seen = rng.normal(0.0, np.hypot(0.01, 0.05), (200, 2))
    fit = fit_displacement(
        places,
        seen,
        np.full(200, 0.01),
        shape=(500, 500),
        degrees=(0, 0),
        clip_sigma=4.0,
        error_floor=0.003,
    )
    expected = np.hypot(0.01, 0.05) / np.sqrt(200)
    # The scatter of 400 values is known to 1 / sqrt(800).
    assert fit.error_at(places[:1])[0] == pytest.approx(expected, rel=4 / np.sqrt(800))
    assert fit.rms == pytest.approx(np.hypot(0.01, 0.05), rel=4 / np.sqrt(800))


def test_a_known_shift_of_a_scene_is_recovered(star_plane, rng):
    """Images to map: the error is what the fit says it is."""
    shape = (512, 512)
    x, y = rng.uniform(5, 507, (2, 120))
    flux = 2e3 * (1.0 + rng.pareto(1.0, 120))
    shift = np.array([3.37, -1.82])
    science = star_plane(x, y, flux, shape=shape, sigma=1.7, rng=rng)
    template = star_plane(x + shift[0], y + shift[1], flux, shape=shape, rng=rng)
    lists = [detect_stars(p, settings=SETTINGS) for p in (science, template)]
    alignment = align(
        *lists, None, None, science_shape=shape, template_shape=shape, settings=SETTINGS
    )
    gx, gy = np.meshgrid(np.linspace(0, 511, 20), np.linspace(0, 511, 20))
    mx, my = evaluate(alignment.pixel_map, gx, gy)
    miss = np.sqrt(np.mean((mx - gx - shift[0]) ** 2 + (my - gy - shift[1]) ** 2) / 2)
    assert alignment.pixel_map.error_px < 0.02
    # Ten terms or fewer: the mean square scatters by some sqrt(1 / 3).
    assert miss < 2.0 * alignment.pixel_map.error_px


def test_error_of_the_map_falls_with_the_root_of_the_stars(rng):
    """Four times the stars, half the error of a shift."""
    stated = []
    for count in (100, 400):
        fit = fit_displacement(
            rng.uniform(0, 499, (count, 2)),
            rng.normal(0.0, 0.05, (count, 2)),
            np.full(count, 0.05),
            shape=(500, 500),
            degrees=(0, 0),
            clip_sigma=4.0,
            error_floor=0.003,
        )
        stated.append(float(fit.error_at(np.array([250.0, 250.0]))))
    # The reduced chi-square of 200 values is known to 10 % and used if above 1.
    assert stated[0] / stated[1] == pytest.approx(2.0, rel=4 * 0.05)
