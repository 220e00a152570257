"""The search along trial velocities against closed forms."""

import numpy as np
import pytest

from latelight.motion.velocity_stack.levels import Level, Moving, build_levels
from latelight.motion.velocity_stack.moving import MovingRidge, follow
from latelight.motion.velocity_stack.trials import Passage, search_level
from latelight.motion.velocity_stack.verdicts import significance, without

pytestmark = pytest.mark.theory

SIZE, SIGMA, NOISE = 160, 2.0, 5.0
PHASE = np.array([-0.5, -0.21, 0.02, 0.3, 0.5])


def moving_of(pixels, variance):
    """Project the static sky out, written with plain arrays."""
    weight = 1.0 / variance
    total = weight.sum(axis=0)
    rest = pixels - (weight * pixels).sum(axis=0) / total
    return Moving(
        pixels.astype(np.float32),
        weight.astype(np.float32),
        (weight * rest).astype(np.float32),
        total.astype(np.float32),
    )


def passage_of(n=5):
    return Passage(phase=PHASE[:n], share=np.full(n, 1.0 / n), cap=1e9)


def ridge_of(shift, angle=0.6):
    return MovingRidge(80.0, 80.0, angle, 0.0, shift, SIGMA)


def images(ridge, height, phase):
    """Return a long ridge at every epoch, without noise."""
    y, x = np.mgrid[:SIZE, :SIZE].astype(float)
    across = (x - ridge.x) * np.cos(ridge.angle) + (y - ridge.y) * np.sin(ridge.angle)
    apart = across - ridge.shift_px * phase[:, None, None]
    return height * np.exp(-0.5 * (apart / SIGMA) ** 2)


def totals(match, blocks=slice(None)):
    return match.matched[blocks].sum(axis=0), match.power[blocks].sum(axis=0)


@pytest.mark.parametrize("shift", [30.0, 6.0])
def test_significance_of_a_known_ridge(shift):
    """Noise-free, n epochs of equal weight, static sky free in every pixel.

    For a Gaussian ridge of length L the products of two epochs d apart are
    ``E_ij = L A^2 / V * sqrt(pi) sigma exp(-d^2 / (4 sigma^2))`` and the squared
    significance is ``sum_i E_ii - (1 / n) sum_ij E_ij``.  Ends at 3 sigma and whole
    pixels cost below 0.5 %.
    """
    height, n = 1.5, PHASE.size
    ridge = ridge_of(shift)
    variance = np.full((n, SIZE, SIZE), NOISE**2)
    moving = moving_of(images(ridge, height, PHASE), variance)
    match = follow(moving, passage_of(), ridge, 40.0)
    apart = shift * np.subtract.outer(PHASE, PHASE)
    energy = np.exp(-0.25 * (apart / SIGMA) ** 2) * np.sqrt(np.pi) * SIGMA
    energy *= 80.0 * height**2 / NOISE**2
    expected = np.sqrt(np.trace(energy) - energy.sum() / n)
    assert significance(*totals(match)) == pytest.approx(expected, rel=5e-3)


def test_five_epochs_gain_a_factor_of_two_over_a_pair():
    """Well separated, n epochs reach sqrt(n - 1) times the S/N of a pair.

    A pair: ``A^2 E (1 - 1/2) 2 = A^2 E``; n epochs: ``n A^2 E (1 - 1/n)``.
    """
    ridge = ridge_of(60.0)
    variance = np.full((5, SIZE, SIZE), NOISE**2)
    pixels = images(ridge, 1.0, PHASE)
    every = follow(moving_of(pixels, variance), passage_of(), ridge, 24.0)
    two = [0, 4]
    pair = follow(
        moving_of(pixels[two], variance[two]),
        Passage(phase=PHASE[two], share=np.full(2, 0.5), cap=1e9),
        ridge,
        24.0,
    )
    gain = significance(*totals(every)) / significance(*totals(pair))
    assert gain == pytest.approx(2.0, rel=1e-2)


def test_noise_has_unit_significance(rng):
    """Of white noise, known ridges have significances with mean 0 and variance 1.

    200 values: the variance is good to sqrt(2/200) = 0.1, the mean to 0.07; 4 sigma.
    """
    variance = NOISE**2 * rng.uniform(0.5, 2.0, (5, SIZE, SIZE))
    values = []
    for _ in range(20):
        pixels = rng.normal(0.0, 1.0, variance.shape) * np.sqrt(variance)
        moving = moving_of(pixels, variance)
        for offset in np.arange(-5, 5) * 8.0:
            ridge = ridge_of(24.0).moved(0.0, offset)
            match = follow(moving, passage_of(), ridge, 16.0)
            values.append(significance(*totals(match)))
    assert np.mean(values) == pytest.approx(0.0, abs=0.29)
    assert np.var(values) == pytest.approx(1.0, abs=0.4)


def test_normal_equations_are_those_of_plain_least_squares(rng):
    """Brightness of each epoch with a constant free in every pixel, solved in full.

    The design has a column an epoch and a column a pixel; eliminating the pixels
    must leave ``power`` and ``matched``.  Models as the code tabulates them: 0.1 %.
    """
    ridge, n, side = MovingRidge(9.0, 9.0, 0.3, 0.0, 6.0, SIGMA), 3, 19
    phase = np.array([-0.5, 0.1, 0.5])
    y, x = np.mgrid[:side, :side].astype(float)
    across = (x - 9.0) * np.cos(0.3) + (y - 9.0) * np.sin(0.3)
    along = (y - 9.0) * np.cos(0.3) - (x - 9.0) * np.sin(0.3)
    apart = (across - 6.0 * phase[:, None, None]) / SIGMA
    inside = (np.abs(along) < 8.0) & (np.abs(apart) < 3.0)
    model = np.where(inside, np.exp(-0.5 * apart**2), 0.0).reshape(n, -1)
    pixels = rng.normal(0.0, 1.0, (n, side, side))
    variance = rng.uniform(0.5, 2.0, pixels.shape)
    weight = (1.0 / variance).reshape(n, -1)
    n_pixels = side * side
    design = np.zeros((n, n_pixels, n + n_pixels))
    for i in range(n):
        design[i, :, i] = model[i]
        design[i, np.arange(n_pixels), n + np.arange(n_pixels)] = 1.0
    rows = design.reshape(n * n_pixels, -1) * np.sqrt(weight).reshape(-1, 1)
    data = pixels.reshape(-1) * np.sqrt(weight).ravel()
    best = np.linalg.lstsq(rows, data, rcond=None)[0][:n]
    match = follow(
        moving_of(pixels, variance), Passage(phase, np.full(n, 1 / 3), 1e9), ridge, 8.0
    )
    matched, power = totals(match)
    assert np.linalg.solve(power, matched) == pytest.approx(best, rel=5e-3, abs=5e-3)


def test_leaving_an_epoch_out_leaves_what_its_own_brightness_cannot_explain():
    """With epoch 0 alone lit, nothing is left once its brightness is free."""
    ridge = ridge_of(40.0)
    pixels = images(ridge, 1.0, PHASE)
    pixels[1:] = 0.0
    match = follow(
        moving_of(pixels, np.full(pixels.shape, NOISE**2)), passage_of(), ridge, 24.0
    )
    every = significance(*totals(match))
    assert significance(*without(*totals(match), 0)) == pytest.approx(
        0.0, abs=0.01 * every
    )
    assert significance(*without(*totals(match), 1)) > 0.8 * every


def test_gains_are_the_projection_of_equal_epochs():
    """``(1 - 1/n sum_j rho_ij) / (1 - 1/n)``, the noise formula of the module."""
    n, shift = 5, 4.0
    apart = shift * np.subtract.outer(PHASE, PHASE)
    rho = np.exp(-0.25 * apart**2)
    expected = (1.0 - rho.sum(axis=1) / n) / (1.0 - 1.0 / n)
    assert passage_of().gains(shift) == pytest.approx(expected, rel=1e-12)


def test_white_noise_calibrates_to_one(rng):
    """The empirical widths of all trials on white noise: 1, each good to 2 %.

    Their median over correlated trials is taken to be good to 4 %.
    """
    size = 256
    variance = np.full((5, size, size), NOISE**2)
    pixels = rng.normal(0.0, NOISE, variance.shape)
    (level,) = build_levels(moving_of(pixels, variance), fwhm_px=3.3, widest_px=6.0)
    assert isinstance(level, Level)
    _, (sigma_px, width) = search_level(
        level, passage_of(), largest_px=40.0, threshold=20.0
    )
    assert sigma_px == 2.0
    assert width == pytest.approx(1.0, abs=0.05)
