"""Impossible echoes are refused by name, rule, value and cure; arrays keep shape."""

import warnings

import numpy as np
import pytest

from latelight.echo import (
    brightness,
    dust,
    geometry,
    inversion,
    lookback,
    paraboloid,
    paraboloid_inversion,
    periodic,
    polarisation,
    profile_width,
    propagation,
    rings,
    tilted_plane,
    viewing,
)
from latelight.echo.paraboloid import ParaboloidWarning

V_BAND = dust.DustOptics(albedo=0.67, asymmetry=0.54, extinction_cm2=4.9e-22)
PLANE = {"depth_pc": 100.0, "tilt_deg": 40.0}
SLOWER_THAN_LIGHT = (
    r"speed_arcsec_yr 10 at theta_deg 1 and distance_pc 3000 \(0.4744 of light's "
    r"21.0804 arcsec/yr\) fits no age: a sheet across the line of sight is never "
    r"slower than light; the sheet must be tilted"
)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (
            lambda: geometry.angle_deg(3000.0, 400.0, 3000.0),
            "depth_pc must be less than distance_pc, got 3000; dust at or behind",
        ),
        (
            lambda: geometry.angle_deg(-200.0, 400.0, 3000.0),
            "depth_pc must be at least -c t / 2, got -200; light from dust farther",
        ),
        (
            lambda: geometry.depth_pc(1.0, 400.0, None),
            r"distance_pc must be positive and finite, got nan \(missing\); give the d",
        ),
        (
            lambda: geometry.depth_pc(1.0, np.ma.masked_all(2), 3000.0),
            r"age_yr must be positive and finite, got nan \(missing\); give the years",
        ),
        (
            lambda: geometry.speed_arcsec_yr(1.0, 400.0, 3000.0, np.nan),
            "slope must be finite, got nan",
        ),
        (
            lambda: geometry.depth_error_pc(1.0, 400.0, 3000.0, age_err_yr=-1.0),
            "age_err_yr must be zero or positive, and finite, got -1",
        ),
        (
            lambda: inversion.age_and_depth(0.0, 2.0, 3000.0),
            r"theta_deg must be in \(0, 90\), got 0; the source must not stand in the",
        ),
        (
            lambda: inversion.age_and_depth(1.0, 0.0, 3000.0),
            "speed_arcsec_yr must be finite and not zero, got 0; leave out arcs",
        ),
        (
            lambda: inversion.age_and_depth(1.0, None, 3000.0),
            "speed_arcsec_yr must be finite and not zero, got nan",
        ),
        (
            lambda: inversion.age_and_depth(1.0, 10.0, 3000.0),
            SLOWER_THAN_LIGHT,
        ),
        (
            lambda: inversion.age_and_depth(1.0, 10.0, 3000.0, slope=0.5),
            "fits no age: no sheet of slope 0.5 moves like that",
        ),
        (
            lambda: paraboloid_inversion.paraboloid_age_and_depth(1.0, 10.0, 3000.0),
            "never slower than light",
        ),
        (
            lambda: inversion.age_and_depth_covariance(1.0, 30.0, 3000.0, np.eye(3)),
            r"covariance must have the shape \(4, 4, ...\).*got \(3, 3\)",
        ),
        (
            lambda: inversion.sheet_slope(1.0, 400.0, 3000.0, speed_arcsec_yr=0.0),
            "speed_arcsec_yr must be finite and not zero, got 0",
        ),
        (
            lambda: inversion.sheet_slope(
                1.0, 400.0, 3000.0, speed_arcsec_yr=9.0, turn_deg=np.nan
            ),
            "turn_deg must be finite",
        ),
        (
            lambda: viewing.viewing_direction(1.0, np.nan, 400.0, 3000.0),
            "position_angle_deg must be finite",
        ),
        (
            lambda: profile_width.profile_width(1.0, 400.0, 3e3, duration_yr=-0.1),
            "duration_yr must be zero or positive, and finite, got -0.1",
        ),
        (
            lambda: tilted_plane.tilted_plane_ellipse(
                400.0, 3000.0, depth_pc=100.0, tilt_deg=90.0
            ),
            "tilt_deg must be between -90 and 90, got 90",
        ),
        (
            lambda: tilted_plane.tilted_plane_ellipse(
                400.0, 3000.0, depth_pc=-70.0, tilt_deg=0.0
            ),
            "depth_pc must be that of a plane the light has reached, got -70",
        ),
        (
            lambda: tilted_plane.tilted_plane_curve(
                0.0, 400.0, 50.0, depth_pc=40.0, tilt_deg=80.0, tilt_pa_deg=0.0
            ),
            "depth_pc must be less than distance_pc",
        ),
        (
            lambda: dust.milky_way_dust(5500.0),
            "wavelength_um must be in the table, 0.22 to 2.2, got 5500; give the wave",
        ),
        (
            lambda: dust.phase_function(181.0, 0.5),
            r"scattering_deg must be in \[0, 180\], got 181",
        ),
        (
            lambda: dust.phase_function(10.0, 1.0),
            "asymmetry must be between -1 and 1, got 1",
        ),
        (
            lambda: brightness.scattering_depth(-1.0, 1.0, V_BAND),
            "density_cm3 must be positive and finite, got -1",
        ),
        (
            lambda: brightness.dust_column(0.0, V_BAND),
            "depth must be positive and finite, got 0",
        ),
        (
            lambda: brightness.scattering_depth_from_brightness(
                1.0, 400.0, 3e3, brightness_mag=None, peak_mag=0.0, asymmetry=0.5
            ),
            "brightness_mag must be finite, got nan",
        ),
        (
            lambda: rings.ring_angle_arcsec(900.0, 1e4, source_distance_pc=900.0),
            "dust_distance_pc must be less than source_distance_pc, got 900; rings",
        ),
        (
            lambda: rings.ring_dust_distance_pc(0.0, 1e4),
            "theta_arcsec must be positive and finite, got 0; a ring of no radius",
        ),
        (
            lambda: rings.ring_dust_distance_pc(10.0, -1.0),
            "delay_s must be positive and finite, got -1; give the seconds",
        ),
        (
            lambda: rings.ring_dust_distance_pc(10.0, 1.0, source_distance_pc=None),
            "source_distance_pc must be positive, got nan",
        ),
        (
            lambda: polarisation.scattering_angles_of_polarisation_deg(
                0.4, maximum=0.3
            ),
            "polarisation must be between 0 and maximum, got 0.4",
        ),
        (
            lambda: polarisation.polarisation_degree(90.0, maximum=1.2),
            "maximum must be above 0 and at most 1, got 1.2",
        ),
        (
            lambda: polarisation.polarisation_distance_pc(0.0, 100.0),
            r"theta_deg must be in \(0, 90\), got 0",
        ),
        (
            lambda: periodic.knot_places(
                0.1, 2e3, phase=1.0, period_yr=0.1, cycles=[1]
            ),
            r"phase must be in \[0, 1\), got 1",
        ),
        (
            lambda: periodic.knot_places(
                0.1, 2e3, phase=0.0, period_yr=0.1, cycles=[1, 0]
            ),
            "cycles must be zero or more, and from 1 on at phase 0, got 0",
        ),
        (
            lambda: lookback.cloud_lookback_yr(0.01, redshift=0.0),
            "redshift must be positive and finite, got 0; give the distance",
        ),
        (
            lambda: lookback.cloud_lookback_yr(
                0.01, redshift=0.1, inclination_deg=180.0
            ),
            r"inclination_deg must be in \(0, 180\), got 180",
        ),
    ],
)
def test_impossible_argument_is_refused(call, message):
    with pytest.raises(ValueError, match=message):
        call()


@pytest.mark.parametrize(
    ("values", "covariance", "message"),
    [
        ([1.0, 2.0], np.eye(3), r"shape \(2, 2, ...\) of 2 values, got \(3, 3\)"),
        (1.0, 1.0, r"shape \(0, 0, ...\)"),
        ([1.0], [[-1.0]], "covariance must be zero or positive on its diagonal"),
        ([1.0], [[np.nan]], "covariance must be zero or positive on its diagonal"),
    ],
)
def test_unfit_covariance_is_refused(values, covariance, message):
    with pytest.raises(ValueError, match=message):
        propagation.propagate(lambda v: (v[0],), values, covariance)


def test_results_must_fit_and_be_finite():
    with pytest.raises(ValueError, match="return a tuple of m results"):
        propagation.propagate(lambda v: v[0], [1.0], [[1.0]])
    with pytest.raises(ValueError, match="results of function must be finite"):
        propagation.propagate(lambda v: (v[0] * np.inf,), [1.0], [[1.0]])
    with pytest.raises(ValueError, match="errors must be zero or positive, finite"):
        propagation.independent(1.0, -2.0)


def test_array_places_without_an_age_are_marked():
    """Slower than light in the middle; nothing is NaN."""
    front, behind = inversion.age_and_depth(1.0, [30.0, 5.0, 60.0], 3000.0)
    np.testing.assert_array_equal(front.possible, [True, False, True])
    np.testing.assert_array_equal(behind.possible, [True, False, True])
    for root in (front, behind):
        assert np.isfinite(root.age_yr).all()
        assert np.isfinite(root.depth_pc).all()
        assert root.age_yr[1] == root.depth_pc[1] == 0.0
    none, _ = inversion.age_and_depth([1.0], [5.0], 3000.0)
    assert not none.possible[0]


def test_numbers_broadcast():
    front, _ = inversion.age_and_depth([[1.0], [2.0]], [30.0, 40.0, 50.0], 3000.0)
    assert front.age_yr.shape == (2, 3)
    alone, _ = inversion.age_and_depth(2.0, 40.0, 3000.0)
    assert front.age_yr[1, 1] == pytest.approx(alone.age_yr, rel=1e-14)
    view = viewing.viewing_direction([1.0, 2.0], 30.0, 400.0, 3000.0)
    assert view.east.shape == view.position_angle_deg.shape == (2,)
    width = profile_width.profile_width(1.0, [400.0, 500.0], 3000.0, duration_yr=0.1)
    assert width.psf.shape == width.total.shape == (2,)
    theta, angle = tilted_plane.tilted_plane_curve(
        np.zeros(3), 400.0, 3000.0, **PLANE, tilt_pa_deg=10.0
    )
    assert theta.shape == angle.shape == (3,)


def test_tangent_sheet_is_infinitely_wide_and_has_no_brightness():
    """Straight behind the source a sheet across the view touches the ellipsoid."""
    place = (0.0, 400.0, 3000.0)
    width = profile_width.profile_width(*place, duration_yr=0.1)
    assert width.burst == width.total == np.inf
    assert width.dust == 0.0
    assert profile_width.profile_width(*place, duration_yr=0.0).total == 0.0
    with pytest.raises(ValueError, match="slope must be other than that of the ellip"):
        brightness.sheet_brightness_mag(
            *place,
            peak_mag=0.0,
            duration_yr=0.1,
            thickness_pc=1.0,
            density_cm3=10.0,
            dust=V_BAND,
        )


def test_paraboloid_warns_beyond_a_hundredth():
    place = (3.0, 400.0, 3000.0)
    with pytest.warns(ParaboloidWarning, match="depth, pc: 39.2745 where the ellips"):
        paraboloid.paraboloid_depth_pc(*place)
    with pytest.warns(ParaboloidWarning, match="delay, years"):
        paraboloid.paraboloid_delay_yr(10.0, 100.0, 3000.0)
    with pytest.warns(ParaboloidWarning, match="speed, arcsec/yr"):
        paraboloid.paraboloid_speed_arcsec_yr(*place, 0.5)
    with pytest.warns(ParaboloidWarning, match="age, years"):
        paraboloid_inversion.paraboloid_age_and_depth(3.0, 30.0, 3000.0)
    with pytest.warns(ParaboloidWarning, match="edge of the circle, pc"):
        tilted_plane.paraboloid_circle(400.0, 3000.0, **PLANE)


def test_paraboloid_warns_beyond_the_stated_error():
    place = (3.0, 400.0, 3000.0)  # 2.76 pc apart
    with pytest.warns(ParaboloidWarning):
        paraboloid.paraboloid_depth_pc(*place, error_pc=2.7)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        paraboloid.paraboloid_depth_pc(*place, error_pc=2.8)
        paraboloid.paraboloid_depth_pc(0.1, 400.0, 50_000.0)
        tilted_plane.paraboloid_circle(400.0, 3000.0, **PLANE, error_pc=50.0)
    with pytest.raises(ValueError, match="the stated error must be zero or positive"):
        paraboloid.paraboloid_depth_pc(*place, error_pc=np.nan)


def test_warning_counts_places_and_points_at_its_caller():
    with pytest.warns(ParaboloidWarning, match="at 1 of 2 places") as caught:
        paraboloid.paraboloid_depth_pc([0.1, 10.0], [40.0, 400.0], 3000.0)
    assert caught[0].filename == __file__


def test_paraboloid_that_misses_an_exact_age_warns():
    """Just slower than light: the ellipsoid has a solution, the paraboloid none."""
    speed = 0.999 * geometry.light_speed_arcsec_yr(3000.0)
    exact, _ = inversion.age_and_depth([3.0], [speed], 3000.0)
    assert exact.possible[0]
    with pytest.warns(ParaboloidWarning, match="age, years: 0 where"):
        limit, _ = paraboloid_inversion.paraboloid_age_and_depth([3.0], [speed], 3000.0)
    assert not limit.possible[0]


def test_cosmology_defaults():
    default = lookback.angular_diameter_distance_pc(0.05)
    from astropy.cosmology import Planck18

    given = lookback.angular_diameter_distance_pc(0.05, cosmology=Planck18)
    assert default == given
