"""Propagated errors against analytic ones."""

import numpy as np
import pytest

from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import (
    depth_error_pc,
    depth_partials,
    depth_pc,
    observer_distance_pc,
    scattering_angle_deg,
    source_distance_pc,
)
from latelight.echo.place import echo_place
from latelight.echo.propagation import independent, propagate

pytestmark = pytest.mark.theory


def random_covariance(rng, n):
    root = rng.normal(size=(n, n))
    return root @ root.T


def test_linear_functions_are_exact(rng):
    """y = A x has the covariance A C A^T."""
    matrix, covariance = rng.normal(size=(2, 3)), random_covariance(rng, 3)
    values, spread = propagate(lambda x: matrix @ x, [1.0, -2.0, 3.0], covariance)
    np.testing.assert_allclose(values, matrix @ [1.0, -2.0, 3.0])
    np.testing.assert_allclose(spread, matrix @ covariance @ matrix.T, rtol=1e-10)


def test_product_and_ratio(rng):
    """d(xy) = y dx + x dy, d(x / y) = dx / y - x dy / y**2."""
    covariance = 1e-4 * random_covariance(rng, 2)
    x, y = 3.0, 5.0
    _, spread = propagate(lambda v: (v[0] * v[1], v[0] / v[1]), [x, y], covariance)
    jacobian = np.array([[y, x], [1.0 / y, -x / y**2]])
    np.testing.assert_allclose(spread, jacobian @ covariance @ jacobian.T, rtol=1e-6)


def test_wide_errors_cost_little():
    """sqrt(x) with 30 % errors: the step is 0.3 % of x, its cube root's bend 1e-6."""
    _, spread = propagate(lambda v: (np.sqrt(v[0]),), [4.0], [[1.2**2]])
    assert np.sqrt(spread[0, 0]) == pytest.approx(1.2 / 4.0, rel=1e-5)


def test_tiny_errors_of_large_numbers():
    """A right ascension known to 1e-7 degrees: the step stays above rounding."""
    _, spread = propagate(lambda v: (v[0] - 180.0,), [180.3], [[1e-14]])
    assert np.sqrt(spread[0, 0]) == pytest.approx(1e-7, rel=1e-3)


def test_exact_numbers_are_not_varied():
    """A number at the edge of its domain passes if it has no error."""
    values, spread = propagate(
        lambda v: (depth_pc(v[0], v[1], 3000.0),), [0.0, 400.0], independent(0.0, 10.0)
    )
    assert values[0] < 0.0
    slope = depth_partials(0.0, 400.0, 3000.0)[1]
    assert spread[0, 0] == pytest.approx((10.0 * slope) ** 2, rel=1e-6)


def test_many_places_at_once(rng):
    """Each column as if alone."""
    values = rng.uniform(1.0, 2.0, (2, 7))
    covariance = np.stack([random_covariance(rng, 2) * 1e-4 for _ in range(7)], axis=-1)

    def function(v):
        return v[0] * v[1], v[0] ** 2, np.sin(v[1])

    together = propagate(function, values, covariance)
    assert together[0].shape == (3, 7)
    assert together[1].shape == (3, 3, 7)
    for i in range(7):
        alone = propagate(function, values[:, i], covariance[:, :, i])
        np.testing.assert_allclose(together[1][..., i], alone[1], rtol=1e-9)


def test_depth_partials_are_the_numeric_ones(rng):
    """All three, over angles, ages and distances."""
    place = np.array(
        [
            10.0 ** rng.uniform(-3, 1.5, 300),
            10.0 ** rng.uniform(1, 3, 300),
            10.0 ** rng.uniform(2.5, 5, 300),
        ]
    )
    slopes = depth_partials(*place)
    for i, slope in enumerate(slopes):
        step = 1e-5 * place[i]
        low, high = place.copy(), place.copy()
        low[i] -= step
        high[i] += step
        numeric = (depth_pc(*high) - depth_pc(*low)) / (high[i] - low[i])
        # The depth's own rounding, over the step.
        rounding = 1e-14 * np.abs(depth_pc(*place)).max() / step
        assert np.all(np.abs(numeric - slope) <= 1e-6 * np.abs(slope) + rounding)


def test_place_is_that_of_the_geometry():
    at = (3.0, 400.0, 3000.0)
    place = echo_place(*at, np.zeros((3, 3)))
    assert place.depth_pc == depth_pc(*at)
    assert place.source_distance_pc == source_distance_pc(*at)
    assert place.observer_distance_pc == observer_distance_pc(*at)
    assert place.scattering_deg == scattering_angle_deg(*at)


def test_place_has_the_covariance_of_its_parts():
    """The depth's variance is analytic, and r + l = D + ct binds the others."""
    covariance = independent(0.02, 15.0, 120.0)
    place = echo_place(3.0, 400.0, 3000.0, covariance)
    expected = depth_error_pc(
        3.0,
        400.0,
        3000.0,
        theta_err_deg=0.02,
        age_err_yr=15.0,
        distance_err_pc=120.0,
    )
    assert np.sqrt(place.covariance[0, 0]) == pytest.approx(expected, rel=1e-5)
    total = np.array([0.0, 1.0, 1.0, 0.0])
    of_sum = 120.0**2 + (15.0 * LIGHT_PC_PER_YEAR) ** 2
    assert total @ place.covariance @ total == pytest.approx(of_sum, rel=1e-6)
    # In front, more depth is more distance from the source and a smaller turn.
    assert place.covariance[0, 1] > 0.0
    assert place.covariance[0, 3] < 0.0


def test_covariance_agrees_with_random_draws(rng):
    """Small errors, 40000 draws: each element within 5 of its own sigmas."""
    values = np.array([2.0, 300.0, 4000.0])
    covariance = independent(0.01, 3.0, 40.0)
    covariance[0, 1] = covariance[1, 0] = 0.5 * 0.01 * 3.0
    n = 40_000
    drawn = rng.multivariate_normal(values, covariance, n).T
    place = echo_place(*values, covariance)
    random = echo_place(*drawn, np.zeros((3, 3)))
    rows = np.array(
        [
            random.depth_pc,
            random.source_distance_pc,
            random.observer_distance_pc,
            random.scattering_deg,
        ]
    )
    found, expected = np.cov(rows), place.covariance
    scale = np.sqrt(np.outer(np.diag(expected), np.diag(expected)))
    assert np.all(np.abs(found - expected) < 5.0 * np.sqrt(2.0 / n) * scale)
