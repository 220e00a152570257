"""Position to depth and back, motion to age and back, tilt from motion."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latelight.echo.constants import ARCSEC_PER_RADIAN, LIGHT_PC_PER_YEAR
from latelight.echo.geometry import (
    angle_deg,
    depth_pc,
    front_speed,
    light_speed_arcsec_yr,
    observer_distance_pc,
    projected_distance_pc,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.inversion import (
    age_and_depth,
    age_and_depth_covariance,
    sheet_slope,
)
from latelight.echo.paraboloid_inversion import paraboloid_age_and_depth
from latelight.echo.propagation import independent, propagate

pytestmark = pytest.mark.theory

ANGLES = st.floats(1e-5, 60.0)
SHARES = st.floats(-3.5, -0.2)  # log10 of the light path over the distance
DISTANCES = st.floats(50.0, 2e7)


@given(theta=ANGLES, share=SHARES, distance=DISTANCES)
@settings(max_examples=200, deadline=None)
def test_paths_sum_to_the_ellipsoid(theta, share, distance):
    """r + l = D + ct to 1e-12."""
    age = 10.0**share * distance / LIGHT_PC_PER_YEAR
    total = source_distance_pc(theta, age, distance) + observer_distance_pc(
        theta, age, distance
    )
    assert total == pytest.approx(distance + LIGHT_PC_PER_YEAR * age, rel=1e-12)


@given(theta=ANGLES, share=SHARES, distance=DISTANCES)
@settings(max_examples=200, deadline=None)
def test_depth_and_angle_undo_each_other(theta, share, distance):
    """Both identities, as far as the rounded number in the middle allows."""
    age = 10.0**share * distance / LIGHT_PC_PER_YEAR
    depth = depth_pc(theta, age, distance)
    back = angle_deg(depth, age, distance)
    np.testing.assert_allclose(depth_pc(back, age, distance), depth, rtol=0, atol=(
        1e-12 * source_distance_pc(theta, age, distance) + 1e-15 * distance
    ))  # fmt: skip
    # rho**2 carries the rounding of 2 z + ct, and of D - z near the observer; z itself
    # comes from some ten rounded steps of 1e-16 each, twice that to be safe.
    path = LIGHT_PC_PER_YEAR * age
    lost = 2e-15 * (abs(depth) / (2.0 * depth + path) + distance / (distance - depth))
    assert back == pytest.approx(theta, rel=1e-13 + lost)


def test_straight_behind_the_source():
    """z = -ct / 2 is seen at the source itself."""
    path = 400.0 * LIGHT_PC_PER_YEAR
    assert angle_deg(-path / 2.0, 400.0, 3000.0) == 0.0


def test_angle_of_dust_beside_the_source():
    """z = 0: r = D tan(theta), l = D / cos(theta), so the angle solves
    D (tan + 1 / cos - 1) = ct."""
    theta = np.radians(angle_deg(0.0, 400.0, 3000.0))
    excess = np.tan(theta) + 1.0 / np.cos(theta) - 1.0
    assert 3000.0 * excess == pytest.approx(400.0 * LIGHT_PC_PER_YEAR, rel=1e-12)


def test_front_recedes_along_the_line_of_sight():
    """front_speed = dl / d(ct) at a fixed angle."""
    theta, distance, step = np.array([0.0, 0.5, 6.0, 40.0]), 3000.0, 1e-3
    ages = 400.0 + np.array([[-step], [step]])
    rise = np.diff(observer_distance_pc(theta, ages, distance), axis=0)[0]
    expected = rise / (2.0 * step * LIGHT_PC_PER_YEAR)
    np.testing.assert_allclose(front_speed(theta, 400.0, distance), expected, rtol=1e-6)
    assert front_speed(0.0, 400.0, distance) == pytest.approx(0.5)


@pytest.fixture
def echoes(rng):
    """Angles, ages, distances in front of and behind the source; small angles."""
    n = 4000
    theta = 10.0 ** rng.uniform(-5, 0.7, n)
    distance = 10.0 ** rng.uniform(2, 7, n)
    rho_years = np.radians(theta) * distance / LIGHT_PC_PER_YEAR
    age = rho_years * 10.0 ** rng.uniform(-1.5, 1.0, n)
    inside = age * LIGHT_PC_PER_YEAR < 0.5 * distance
    return theta[inside], age[inside], distance[inside]


def test_one_of_both_ages_is_the_true_one(echoes):
    """Speed of a sheet across the view, and back.

    Near the slowest age both meet, where half of all digits are lost: an age off by e
    is off in speed by e**2.
    """
    theta, age, distance = echoes
    front, behind = age_and_depth(theta, speed_arcsec_yr(*echoes), distance)
    assert front.possible.all()
    off = np.minimum(
        np.abs(front.age_yr / age - 1.0),
        np.where(behind.possible, np.abs(behind.age_yr / age - 1.0), np.inf),
    )
    assert np.quantile(off, 0.99) < 1e-12
    assert off.max() < 1e-6
    for root in (front, behind):
        fit = root.possible
        np.testing.assert_allclose(
            speed_arcsec_yr(theta[fit], root.age_yr[fit], distance[fit]),
            speed_arcsec_yr(*echoes)[fit],
            rtol=1e-9,
        )
        np.testing.assert_array_equal(
            root.depth_pc[fit], depth_pc(theta[fit], root.age_yr[fit], distance[fit])
        )


@pytest.mark.parametrize("slope", [-0.3, 0.0, 0.4, 3.0])
def test_paraboloid_ages_are_those_of_its_speed(slope):
    """beta = r / (rho - s ct) with r = rho**2 / (2 ct) + ct / 2, at no parallax."""
    rho, path, distance = 100.0, 50.0, 1e9
    beta = (rho**2 / (2.0 * path) + path / 2.0) / (rho - slope * path)
    speed = beta * light_speed_arcsec_yr(distance)
    front, behind = paraboloid_age_and_depth(
        np.degrees(rho / distance), speed, distance, slope=slope
    )
    assert front.age_yr * LIGHT_PC_PER_YEAR == pytest.approx(path, rel=1e-9)
    assert front.depth_pc == pytest.approx(75.0, rel=1e-9)
    # The other root of (1 + 2 beta s) (ct)**2 - 2 beta rho ct + rho**2 = 0.
    other = rho**2 / (1.0 + 2.0 * beta * slope) / path
    assert behind.possible == (other > 0.0)
    if behind.possible:
        assert behind.age_yr * LIGHT_PC_PER_YEAR == pytest.approx(other, rel=1e-9)


def test_front_is_younger_and_nearer(echoes):
    theta, _, distance = echoes
    front, behind = age_and_depth(theta, speed_arcsec_yr(*echoes), distance)
    both = behind.possible
    assert both.mean() > 0.5
    assert np.all(front.age_yr[both] <= behind.age_yr[both])
    assert np.all(front.depth_pc[both] >= behind.depth_pc[both])


def test_tilted_sheets_too(echoes, rng):
    """Any slope, outward and inward: every age found moves as asked."""
    theta, age, distance = echoes
    slope = rng.normal(0.0, 1.5, theta.size)
    speed = speed_arcsec_yr(*echoes, slope)
    front, behind = age_and_depth(theta, speed, distance, slope=slope)
    off = np.minimum(
        np.where(front.possible, np.abs(front.age_yr / age - 1.0), np.inf),
        np.where(behind.possible, np.abs(behind.age_yr / age - 1.0), np.inf),
    )
    # Sheets sloping back so far that a third, still older age is the true one.
    steep = np.count_nonzero(off > 1e-6)
    assert steep < 0.02 * theta.size
    assert np.all(slope[off > 1e-6] < 0.0)
    for root in (front, behind):
        fit = root.possible
        again = speed_arcsec_yr(theta[fit], root.age_yr[fit], distance[fit], slope[fit])
        # Where the speed hardly changes with age, or diverges, digits are lost.
        assert np.quantile(np.abs(again / speed[fit] - 1.0), 0.99) < 1e-11


def test_slowest_sheet_across_the_view():
    """Just above the least speed at an angle there are two ages, below none."""
    theta, distance = 2.0, 5000.0
    age = np.geomspace(50.0, 5000.0, 20_001)
    least = speed_arcsec_yr(theta, age, distance).min()
    front, behind = age_and_depth(
        theta, least * np.array([1.0 - 1e-6, 1.0 + 1e-6]), distance
    )
    np.testing.assert_array_equal(front.possible, [False, True])
    np.testing.assert_array_equal(behind.possible, [False, True])
    np.testing.assert_array_equal(front.age_yr[0], 0.0)
    # Slower than light by the exact form's parallax only.
    assert least / light_speed_arcsec_yr(distance) == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize(
    ("theta", "speed", "distance", "slope"),
    [
        (1.0, 40.0, 3000.0, 0.1),
        (0.3, 1.9, 50_000.0, 0.0),
        (5.0, 60.0, 1500.0, -0.4),
        (1e-4, 0.03, 5e6, 0.3),
    ],
)
def test_covariance_is_the_numeric_one(theta, speed, distance, slope):
    """Implicit derivatives of the cubic against central differences, correlated."""
    values = np.array([theta, speed, distance, slope])
    sigma = np.array([1e-4 * theta, 1e-3 * speed, 1e-3 * distance, 1e-3])
    correlation = np.eye(4)
    correlation[0, 1] = correlation[1, 0] = 0.4
    correlation[1, 3] = correlation[3, 1] = -0.3
    covariance = correlation * np.outer(sigma, sigma)

    def roots(v):
        front, behind = age_and_depth(v[0], v[1], v[2], slope=v[3])
        return front.age_yr, front.depth_pc, behind.age_yr, behind.depth_pc

    _, expected = propagate(roots, values, covariance)
    front, behind = age_and_depth_covariance(
        theta, speed, distance, covariance, slope=slope
    )
    np.testing.assert_allclose(front, expected[:2, :2], rtol=1e-5)
    np.testing.assert_allclose(behind, expected[2:, 2:], rtol=1e-5)


def test_covariance_of_many_places_at_once():
    theta = np.array([1.0, 2.0, 1.0])
    speed = np.array([40.0, 35.0, 5.0])  # the last is slower than light
    covariance = independent(1e-3, 0.5, 30.0, 0.05)
    front, behind = age_and_depth_covariance(theta, speed, 3000.0, covariance)
    assert front.shape == behind.shape == (2, 2, 3)
    single, _ = age_and_depth_covariance(1.0, 40.0, 3000.0, covariance)
    np.testing.assert_allclose(front[:, :, 0], single, rtol=1e-12)
    np.testing.assert_array_equal(front[:, :, 2], 0.0)


@given(
    theta=st.floats(1e-3, 40.0),
    share=st.floats(-3.0, -0.3),
    slope=st.floats(-3.0, 3.0),
    distance=DISTANCES,
)
@settings(max_examples=200, deadline=None)
def test_slope_undoes_speed(theta, share, slope, distance):
    """speed_arcsec_yr along the radius, and its sheet back."""
    age = 10.0**share * distance / LIGHT_PC_PER_YEAR
    speed = speed_arcsec_yr(theta, age, distance, slope)
    radial, sideways = sheet_slope(theta, age, distance, speed_arcsec_yr=speed)
    # Digits go where the sheet's delay hardly changes with its tilt (much in front).
    across = distance * np.sin(np.radians(theta))
    lost = 1e-14 * (1.0 + across / (LIGHT_PC_PER_YEAR * age)) * (1.0 + slope**2) ** 2
    assert radial == pytest.approx(slope, abs=1e-12 + 100.0 * lost)
    assert sideways == 0.0
    towards = sheet_slope(theta, age, distance, speed_arcsec_yr=-speed, turn_deg=180.0)
    assert towards[0] == pytest.approx(slope, abs=1e-9 + 100.0 * lost)


@pytest.mark.parametrize(("radial", "sideways"), [(0.3, -0.8), (-0.7, 0.4), (1.2, 0.1)])
def test_slope_of_a_plane_walked_over(radial, sideways):
    """The motion of an echo on a tilted plane, from delays at neighbouring sight lines.

    The observer is at the origin, the source at distance D along -z; the echo moves
    along the gradient of the delay over the sky at 1 / |gradient|.
    """
    theta, age, distance = 7.0, 350.0, 2500.0
    source = np.array([0.0, 0.0, distance])
    # Axes: rho, sideways, and away from the observer; the depth is D - third.
    reach = observer_distance_pc(theta, age, distance)
    angle = np.radians(theta)
    dust = reach * np.array([np.sin(angle), 0.0, np.cos(angle)])
    normal = np.array([radial, sideways, 1.0])  # z rises by radial, sideways

    def delay(away, aside):
        sight = np.array(
            [
                np.sin(angle + away) * np.cos(aside),
                np.sin(aside),
                np.cos(angle + away) * np.cos(aside),
            ]
        )
        point = sight * (normal @ dust) / (normal @ sight)
        path = np.linalg.norm(point - source) + np.linalg.norm(point) - distance
        return path / LIGHT_PC_PER_YEAR

    assert delay(0.0, 0.0) == pytest.approx(age, rel=1e-9)
    step = 1e-5
    gradient = np.array(
        [
            (delay(step, 0.0) - delay(-step, 0.0)) / (2.0 * step),
            (delay(0.0, step) - delay(0.0, -step)) / (2.0 * step),
        ]
    )
    velocity = gradient / (gradient @ gradient) * ARCSEC_PER_RADIAN
    found = sheet_slope(
        theta,
        age,
        distance,
        speed_arcsec_yr=np.hypot(*velocity),
        turn_deg=np.degrees(np.arctan2(velocity[1], velocity[0])),
    )
    np.testing.assert_allclose(found, (radial, sideways), rtol=1e-6)


def test_projected_distance_of_a_depth():
    """rho**2 + z**2 = r**2 after the detour over the angle."""
    depth = np.array([-40.0, 0.0, 10.0, 700.0])
    theta = angle_deg(depth, 300.0, 2000.0)
    rho = projected_distance_pc(theta, 300.0, 2000.0)
    r = source_distance_pc(theta, 300.0, 2000.0)
    np.testing.assert_allclose(np.hypot(rho, depth), r, rtol=1e-12)
