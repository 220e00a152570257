"""Rings, polarisation, periodic sources and lookback from their definitions."""

import numpy as np
import pytest

from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import delay_yr, depth_pc, scattering_angle_deg
from latelight.echo.lookback import angular_diameter_distance_pc, cloud_lookback_yr
from latelight.echo.periodic import knot_distances_pc, knot_phase, knot_places
from latelight.echo.polarisation import (
    polarisation_degree,
    polarisation_distance_error_pc,
    polarisation_distance_pc,
    scattering_angles_of_polarisation_deg,
)
from latelight.echo.propagation import independent, propagate
from latelight.echo.rings import (
    ring_angle_arcsec,
    ring_apparent_speed,
    ring_delay_s,
    ring_dust_distance_error_pc,
    ring_dust_distance_pc,
    ring_growth_arcsec_s,
)

pytestmark = pytest.mark.theory


@pytest.mark.parametrize("source", [np.inf, 9000.0, 1200.0])
def test_ring_distance_and_delay_undo_the_angle(source, rng):
    dust, delay = rng.uniform(50.0, 1199.0, 100), 10.0 ** rng.uniform(2, 7, 100)
    theta = ring_angle_arcsec(dust, delay, source_distance_pc=source)
    back = ring_dust_distance_pc(theta, delay, source_distance_pc=source)
    np.testing.assert_allclose(back, dust, rtol=1e-9)
    again = ring_delay_s(theta, dust, source_distance_pc=source)
    np.testing.assert_allclose(again, delay, rtol=1e-9)


def test_growth_is_the_derivative_of_the_angle():
    delay, step = 5e4, 1.0
    theta = ring_angle_arcsec(500.0, delay)
    rise = ring_angle_arcsec(500.0, delay + step) - ring_angle_arcsec(
        500.0, delay - step
    )
    growth = ring_growth_arcsec_s(theta, delay)
    assert growth == pytest.approx(rise / (2.0 * step), rel=1e-6)
    # Times the distance, in units of light's speed.
    light_pc_per_s = LIGHT_PC_PER_YEAR / (365.25 * 86_400.0)
    beta = growth / 206_264.80625 * 500.0 / light_pc_per_s
    assert ring_apparent_speed(500.0, delay) == pytest.approx(beta, rel=1e-9)


@pytest.mark.parametrize("source", [8000.0, 1500.0])
def test_ring_errors_are_the_numeric_ones(source):
    values = np.array([300.0, 3e4, source])
    errors = np.array([2.0, 300.0, 100.0])
    _, spread = propagate(
        lambda v: (ring_dust_distance_pc(v[0], v[1], source_distance_pc=v[2]),),
        values,
        independent(*errors),
    )
    found = ring_dust_distance_error_pc(
        values[0],
        values[1],
        source_distance_pc=source,
        theta_err_arcsec=errors[0],
        delay_err_s=errors[1],
        source_distance_err_pc=errors[2],
    )
    assert found == pytest.approx(np.sqrt(spread[0, 0]), rel=1e-5)


def test_source_far_behind_has_no_distance_error():
    error = ring_dust_distance_error_pc(300.0, 3e4, source_distance_err_pc=500.0)
    assert error == 0.0


def test_polarisation_angles_undo_the_degree():
    angle = np.linspace(0.0, 90.0, 91)
    forward, backward = scattering_angles_of_polarisation_deg(
        polarisation_degree(angle, maximum=0.7), maximum=0.7
    )
    np.testing.assert_allclose(forward, angle, atol=1e-6)
    np.testing.assert_allclose(backward, 180.0 - angle, atol=1e-6)


@pytest.mark.parametrize("theta", [1e-5, 0.3, 20.0, 70.0])
def test_polarisation_distance_is_where_light_turns_square(theta):
    distance = polarisation_distance_pc(theta, 150.0)
    assert scattering_angle_deg(theta, 150.0, distance) == pytest.approx(90.0, abs=1e-6)


def test_polarisation_distance_error_is_the_numeric_one():
    _, spread = propagate(
        lambda v: (polarisation_distance_pc(v[0], v[1]),),
        [2.0, 150.0],
        independent(0.1, 4.0),
    )
    found = polarisation_distance_error_pc(
        2.0, 150.0, theta_err_deg=0.1, age_err_yr=4.0
    )
    assert found == pytest.approx(np.sqrt(spread[0, 0]), rel=1e-5)


def test_knots_have_the_phase_they_were_made_from():
    """Each depth listed lags by n + phase periods."""
    period, phase = 0.11, 0.37
    knots = knot_places(
        0.02, 1900.0, phase=phase, period_yr=period, cycles=np.arange(8)
    )
    lag = delay_yr(0.02, knots.depth_pc, 1900.0)
    np.testing.assert_allclose(lag, (knots.cycles + phase) * period, rtol=1e-9)
    np.testing.assert_allclose(
        knot_phase(0.02, knots.depth_pc, 1900.0, period_yr=period), phase, rtol=1e-8
    )
    assert np.all(np.diff(knots.depth_pc) < 0.0)


def test_distances_put_the_knot_beside_the_source():
    distance = knot_distances_pc(0.5, phase=0.2, period_yr=0.4, cycles=[1, 5, 9])
    for cycles, found in zip((1, 5, 9), distance, strict=True):
        assert depth_pc(0.5, (cycles + 0.2) * 0.4, found) == pytest.approx(
            0.0, abs=1e-9 * found
        )


def test_lookback_is_the_extra_path():
    """r - z in parallel light, from the triangle of separation and depth."""
    distance, theta = angular_diameter_distance_pc(0.05), 20.0 / 3600.0
    rho = distance * np.radians(theta)
    for inclination in (20.0, 90.0, 150.0):
        z = rho / np.tan(np.radians(inclination))
        expected = (np.hypot(rho, z) - z) / LIGHT_PC_PER_YEAR
        found = cloud_lookback_yr(theta, redshift=0.05, inclination_deg=inclination)
        assert found == pytest.approx(expected, rel=1e-9)


def test_cosmology_is_a_parameter():
    """Empty space that does not bend: D_A = c z (1 + z/2) / (H0 (1 + z)**2), Milne."""
    from astropy.cosmology import LambdaCDM

    empty = LambdaCDM(H0=70.0, Om0=0.0, Ode0=0.0, Tcmb0=0.0)
    z = 0.3
    hubble_pc = 299_792.458 / 70.0 * 1e6
    expected = hubble_pc * z * (1.0 + z / 2.0) / (1.0 + z) ** 2
    assert angular_diameter_distance_pc(z, cosmology=empty) == pytest.approx(
        expected, rel=1e-6
    )
