"""Light-echo geometry against its definition and its limits."""

import numpy as np
import pytest

from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import (
    delay_gradient,
    delay_yr,
    depth_error_pc,
    depth_pc,
    light_speed_arcsec_yr,
    observer_distance_pc,
    projected_distance_pc,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.paraboloid import (
    paraboloid_delay_yr,
    paraboloid_depth_pc,
    paraboloid_speed_arcsec_yr,
)

pytestmark = pytest.mark.theory


@pytest.fixture
def places():
    """Angles, ages and distances from a nearby giant echo to another galaxy."""
    rng = np.random.default_rng(11)
    theta = 10.0 ** rng.uniform(-4, 1.9, 2000)
    age = 10.0 ** rng.uniform(-1, 3.3, 2000)
    distance = 10.0 ** rng.uniform(2, 7, 2000)
    return theta[theta < 85], age[theta < 85], distance[theta < 85]


def test_paths_sum_to_the_ellipsoid(places):
    """r + l = D + ct, the definition, to rounding."""
    _, age, distance = places
    total = source_distance_pc(*places) + observer_distance_pc(*places)
    expected = distance + LIGHT_PC_PER_YEAR * age
    np.testing.assert_allclose(total, expected, rtol=1e-12)


def test_lengths_fit_the_triangle(places):
    """r**2 = rho**2 + z**2 and l**2 = rho**2 + (D - z)**2 (Pythagoras)."""
    rho, z = projected_distance_pc(*places), depth_pc(*places)
    np.testing.assert_allclose(
        np.hypot(rho, z), source_distance_pc(*places), rtol=1e-12
    )
    l_pc = observer_distance_pc(*places)
    # D - z of dust near the observer loses the digits of D.
    rounding = 1e-12 * l_pc + 4e-16 * places[2]
    assert np.all(np.abs(np.hypot(rho, places[2] - z) - l_pc) <= rounding)


def test_delay_undoes_depth(places):
    """Position to depth to delay is the identity."""
    theta, age, distance = places
    back = delay_yr(theta, depth_pc(*places), distance)
    # The depth is a double: one of its last digits is this much delay.
    rounding = 4e-16 * distance / LIGHT_PC_PER_YEAR
    assert np.all(np.abs(back - age) <= 1e-12 * age + rounding)


def test_paraboloid_is_the_limit_of_a_distant_source():
    """The exact forms tend to the paraboloid as 1 / D at fixed rho and ct."""
    rho, age = 240.0, 400.0
    previous = np.inf
    for distance in (1e5, 1e6, 1e7):
        theta = np.degrees(rho / distance)
        exact = np.array(
            [
                depth_pc(theta, age, distance),
                delay_yr(theta, 180.0, distance),
                speed_arcsec_yr(theta, age, distance, 0.3) * distance,
            ]
        )
        limit = np.array(
            [
                paraboloid_depth_pc(theta, age, distance),
                paraboloid_delay_yr(theta, 180.0, distance),
                paraboloid_speed_arcsec_yr(theta, age, distance, 0.3) * distance,
            ]
        )
        worst = np.abs(exact / limit - 1.0).max()
        assert worst < 3.0 * rho / distance
        assert worst < previous / 9.0
        previous = worst


def test_speed_is_the_derivative_along_the_sheet():
    """speed = d(theta)/dt while the delay grows along a straight sheet."""
    distance, age, theta = 3000.0, 400.0, 3.0
    z0 = depth_pc(theta, age, distance)
    rho0 = projected_distance_pc(theta, age, distance)
    for slope in (-2.0, -0.5, 0.0, 0.4, 3.0):
        step = 1e-4
        rho = rho0 + np.array([-step, step])
        z = z0 + slope * (rho - rho0)
        angle = np.degrees(np.arctan2(rho, distance - z))
        rate = np.diff(angle)[0] / np.diff(delay_yr(angle, z, distance))[0]
        expected = speed_arcsec_yr(theta, age, distance, slope)
        assert rate * 3600.0 == pytest.approx(expected, rel=1e-6)


def test_delay_gradient_is_the_slope_of_the_delay_over_the_sky():
    """Walk over a tilted sheet seen from the observer, delay by finite steps.

    Sideways steps leave the plane of source and observer, so theta itself comes
    from the sphere: cos(theta') = cos(theta) cos(step).
    """
    distance, age, theta = 2000.0, 300.0, 12.0
    away, sideways = 0.35, -0.8
    across, per_tilt = delay_gradient(theta, age, distance)
    reach = observer_distance_pc(theta, age, distance)
    step = 1e-6
    slopes = []
    for tilt, along in ((away, True), (sideways, False)):
        paths = []
        for sign in (-1.0, 1.0):
            angle = np.radians(theta)
            if along:
                angle = angle + sign * step
            else:
                angle = np.arccos(np.cos(angle) * np.cos(step))
            length = reach * (1.0 - tilt * sign * step)
            z = distance - length * np.cos(angle)
            delay = delay_yr(np.degrees(angle), z, distance)
            paths.append(delay * LIGHT_PC_PER_YEAR)
        slopes.append((paths[1] - paths[0]) / (2.0 * step * reach))
    assert slopes[0] == pytest.approx(across - per_tilt * away, rel=1e-6)
    assert slopes[1] == pytest.approx(-per_tilt * sideways, rel=1e-6)


def test_depth_error_is_the_numeric_derivative():
    """Each partial derivative against a central difference."""
    place = np.array([4.0, 350.0, 2500.0])
    names = ("theta_err_deg", "age_err_yr", "distance_err_pc")
    for i, name in enumerate(names):
        step = 1e-4 * place[i]
        low, high = place.copy(), place.copy()
        low[i] -= step
        high[i] += step
        slope = abs(depth_pc(*high) - depth_pc(*low)) / (2.0 * step)
        error = depth_error_pc(*place, **{name: 0.01 * place[i]})
        assert error == pytest.approx(slope * 0.01 * place[i], rel=1e-6)


def test_errors_add_in_quadrature():
    """Three independent errors."""
    place = (4.0, 350.0, 2500.0)
    parts = {"theta_err_deg": 0.1, "age_err_yr": 9.0, "distance_err_pc": 200.0}
    single = [float(depth_error_pc(*place, **{k: v})) for k, v in parts.items()]
    assert depth_error_pc(*place, **parts) == pytest.approx(np.hypot.reduce(single))


def test_sheet_across_the_view_is_never_slower_than_light():
    """s = 0: beta = r / rho >= 1, equal to 1 only beside the source (z = 0)."""
    distance, age = 1e6, 400.0
    theta = np.degrees(np.linspace(20.0, 900.0, 500) / distance)
    beta = paraboloid_speed_arcsec_yr(theta, age, distance) / light_speed_arcsec_yr(
        distance
    )
    assert beta.min() >= 1.0
    beside = np.degrees(LIGHT_PC_PER_YEAR * age / distance)
    assert paraboloid_speed_arcsec_yr(beside, age, distance) == pytest.approx(
        light_speed_arcsec_yr(distance), rel=1e-12
    )


def test_dust_beside_the_source_turns_light_by_a_right_angle():
    """theta + phi = 90 degrees where z = rho tan(theta): the polar angle rules."""
    distance, age = 1e7, 400.0
    beside = np.degrees(LIGHT_PC_PER_YEAR * age / distance)
    assert scattering_angle_deg(beside, age, distance) == pytest.approx(90.0, abs=1e-3)


def test_dust_straight_behind_is_half_the_light_path_away():
    """theta = 0: out and back, z = -ct / 2, turned by 180 degrees."""
    z = depth_pc(0.0, 400.0, 3000.0)
    assert z == pytest.approx(-LIGHT_PC_PER_YEAR * 200.0, rel=1e-14)
    assert scattering_angle_deg(0.0, 400.0, 3000.0) == pytest.approx(180.0)
