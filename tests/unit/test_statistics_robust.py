"""Robust location and scale."""

import numpy as np
import pytest

from latelight.statistics import clipped_mean, robust_sigma


def test_robust_sigma_of_normal_values_ignores_outliers():
    values = np.random.default_rng(1).normal(5.0, 2.0, 20000)
    values[:200] = 1e6
    # The MAD's own scatter is 1.17 / sqrt(2 n); 1 % of outliers adds 1.6 %.
    assert robust_sigma(values) == pytest.approx(2.0, rel=0.016 + 4 * 1.17 / 200)


def test_robust_sigma_of_nothing_is_nan():
    assert np.isnan(robust_sigma([]))


def test_clipped_mean_leaves_outliers_out():
    values = np.random.default_rng(2).normal(10.0, 1.0, 10000)
    values[::100] = 500.0
    mean, sigma, kept = clipped_mean(values, n_sigma=4.0)
    assert mean == pytest.approx(10.0, abs=4 / 100)
    assert sigma == pytest.approx(1.0, rel=0.03)
    assert 9890 <= kept <= 9900


def test_clipped_mean_of_a_constant_and_of_nothing():
    assert clipped_mean(np.full(9, 3.0)) == (3.0, 0.0, 9)
    mean, sigma, kept = clipped_mean([])
    assert np.isnan(mean)
    assert np.isnan(sigma)
    assert kept == 0
