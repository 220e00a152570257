"""Circles, polar sums and lobe profiles of the search for arcs."""

import numpy as np
import pytest

from latelight.arcs import _kernels
from latelight.arcs.fit import sum_along
from latelight.arcs.geometry import Circle
from latelight.arcs.profiles import coarse_shapes, lobe_profile, lobe_width

CIRCLES = [
    Circle(100.0, 80.0, 0.4, 0.0),
    Circle(100.0, 80.0, 2.5, 1 / 150),
    Circle(100.0, 80.0, -1.0, -1 / 90),
]


@pytest.mark.parametrize("circle", CIRCLES)
def test_coordinates_invert_point(circle, rng):
    s, u = rng.uniform(-90, 90, 50), rng.uniform(-40, 40, 50)

    back_s, back_u = circle.coordinates(*circle.point(s, u))

    np.testing.assert_allclose(back_s, s, atol=1e-9)
    np.testing.assert_allclose(back_u, u, atol=1e-9)


@pytest.mark.parametrize("circle", CIRCLES)
def test_moved_and_flipped_circles_are_concentric(circle):
    moved = circle.moved(30.0, 7.0)
    x, y = moved.point(np.linspace(-20, 20, 9), np.zeros(9))

    np.testing.assert_allclose(circle.coordinates(x, y)[1], 7.0, atol=1e-9)
    x, y = circle.point(np.array([12.0]), np.array([3.0]))
    s, u = circle.flipped().coordinates(x, y)
    np.testing.assert_allclose([s[0], u[0]], [-12.0, -3.0], atol=1e-9)


def test_positive_curvature_puts_the_centre_on_the_normals_side():
    circle = Circle(0.0, 0.0, 0.0, 1 / 50)

    x, y = circle.point(np.array([25.0 * np.pi]), np.array([0.0]))

    # A quarter of the way round the centre (50, 0).
    np.testing.assert_allclose([x[0], y[0]], [50.0, 50.0], atol=1e-9)


@pytest.mark.parametrize("circle", CIRCLES)
def test_polar_sums_agree_with_a_slow_count(circle, rng, make_arc_difference):
    difference = make_arc_difference(rng, shape=(160, 200))
    difference.mask[60:70, 90:120] = 1
    y, x = np.mgrid[0:160, 0:200]
    s, u = circle.coordinates(x, y)
    block = np.floor(s / 8.0 + 4).astype(int)
    across = np.floor(u + 20.5).astype(int)
    inside = (block >= 0) & (block < 8) & (across >= 0) & (across < 41)
    good = inside & (difference.mask == 0)
    expected = np.zeros((8, 41))
    np.add.at(
        expected,
        (block[good], across[good]),
        (difference.pixels / difference.variance)[good],
    )

    sums = sum_along(difference, circle, 32.0, 20)

    # A pixel within rounding of a bin's edge may fall on either side.
    assert sums.count.sum() == good.sum()
    assert np.mean(np.abs(sums.signal - expected) > 1e-6) < 0.01


def test_compiled_sums_equal_the_plain_function(rng, make_arc_difference):
    d = make_arc_difference(rng, shape=(90, 90))
    results = []
    for function in (_kernels.polar_sums, _kernels.polar_sums.py_func):
        out = [np.zeros((4, 21)) for _ in range(3)]
        function(
            d.pixels, d.variance, d.mask, 45.0, 44.0, 0.6, 0.8, 0.004, 8.0, *out
        )  # fmt: skip
        results.append(out)

    np.testing.assert_allclose(results[0], results[1], rtol=1e-6, atol=1e-12)


@pytest.mark.parametrize("tail", [-9.0, -2.0, 0.0, 1.5, 12.0])
def test_lobes_peak_at_zero_with_height_one(tail):
    offset = np.linspace(-30, 30, 6001)

    profile = lobe_profile(offset, 2.0, tail)

    assert abs(offset[profile.argmax()]) < 0.02
    assert profile.max() == pytest.approx(1.0, abs=1e-4)
    # The tail points where its sign says.
    assert np.sign(np.sum(offset * profile)) == np.sign(tail) or tail == 0.0


def test_width_of_a_gaussian_lobe():
    assert lobe_width(3.0, 0.0) == pytest.approx(2.3548 * 3.0, rel=2e-3)


def test_bank_spans_from_the_psf_to_the_widest_lobe():
    shapes = coarse_shapes(fwhm_px=3.5, widest_px=30.0, n_shifts=41)

    assert shapes.sigma_px.min() == pytest.approx(1.1 * 3.5 / 2.3548)
    assert 2.3548 * shapes.sigma_px.max() > 30.0 / 1.6
    np.testing.assert_allclose(shapes.overlap[:, 0], 1.0)
