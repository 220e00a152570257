"""Interpretations against the laws they follow from, and errors against chance."""

import math
from dataclasses import astuple, replace

import pytest

from latelight.echo.geometry import (
    depth_pc,
    projected_distance_pc,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.inversion import age_and_depth, sheet_slope
from latelight.origin.interpret import interpret
from latelight.origin.score import score_origins
from latelight.origin.settings import OriginSettings
from latelight.records import Source
from latelight.sky import offset_position, position_angle

pytestmark = pytest.mark.theory

MJD = 60000.0
FRONT = Source("Nova Ficta", 10.0, -60.0, 2000.0, 30.0, 300.0, 6.0, MJD)
BEHIND = Source("Guest Ficta", 200.0, 20.0, 5000.0, 100.0, 900.0, 20.0, MJD)
GEOMETRIES = [(FRONT, 4.0), (BEHIND, 1.5)]


def arc(source, apart, *, towards=110.0, turn=0.0, speed=40.0, **changes):
    ra, dec = offset_position(source.ra, source.dec, towards, apart)
    away = position_angle(ra, dec, source.ra, source.dec) + 180.0
    seen = {
        "ra": float(ra),
        "dec": float(dec),
        "normal_pa": float(away + turn) % 360.0,
        "normal_pa_err": 2.0,
        "speed_arcsec_yr": speed,
        "speed_err_arcsec_yr": 0.03 * speed,
        "mjd": MJD,
    }
    return interpret(source, **(seen | changes))


def ageless(source):
    return replace(source, age_yr=None, age_err_yr=None, age_at_mjd=None)


@pytest.mark.parametrize(("source", "apart"), GEOMETRIES)
def test_dust_closes_its_triangle(source, apart):
    """r^2 = rho^2 + z^2; tan(inclination) = rho / z; the exterior angle is the sum."""
    found = arc(source, apart)
    rho = float(projected_distance_pc(apart, source.age_yr, source.distance_pc))
    assert math.hypot(rho, found.dust_depth) == pytest.approx(found.dust_distance)
    inclination = math.degrees(math.atan2(rho, found.dust_depth))
    assert found.viewing_inclination == pytest.approx(inclination, rel=1e-9)
    assert found.scattering_angle == pytest.approx(inclination + apart, rel=1e-9)


@pytest.mark.parametrize(("source", "apart"), GEOMETRIES)
def test_a_sheet_across_the_view_is_found_flat(source, apart):
    flat = float(speed_arcsec_yr(apart, source.age_yr, source.distance_pc))
    found = arc(source, apart, speed=flat)
    assert found.flat_speed == pytest.approx(flat, rel=1e-9)
    assert found.speed_ratio == pytest.approx(1.0, rel=1e-9)
    assert found.sheet_slope == pytest.approx(0.0, abs=1e-9)
    assert found.sheet_slope_sideways == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("slope", [-0.8, -0.2, 0.1, 0.5])
@pytest.mark.parametrize(("source", "apart"), GEOMETRIES)
def test_the_slope_of_a_sheet_comes_back(source, apart, slope):
    speed = float(speed_arcsec_yr(apart, source.age_yr, source.distance_pc, slope))
    found = arc(source, apart, speed=abs(speed), turn=0.0 if speed > 0.0 else 180.0)
    assert found.sheet_slope == pytest.approx(slope, abs=1e-8)


@pytest.mark.parametrize(("source", "apart"), GEOMETRIES)
def test_the_age_of_a_flat_sheet_comes_back(source, apart):
    flat = float(speed_arcsec_yr(apart, source.age_yr, source.distance_pc))
    depth = float(depth_pc(apart, source.age_yr, source.distance_pc))
    found = arc(ageless(source), apart, speed=flat)
    age = found.implied_age if depth > 0.0 else found.implied_age_behind
    assert age == pytest.approx(source.age_yr, rel=1e-7)
    assert (source is FRONT) == (depth > 0.0)


@pytest.mark.parametrize(("source", "apart"), GEOMETRIES)
def test_errors_are_those_of_chance(source, apart, rng):
    """Spread over 40,000 draws; its own error is 1/sqrt(2 N) = 0.35 %.

    Four of those, and 2 % for the bend of the functions over error bars of 2-3 %.
    """
    n = 40_000
    speed, speed_err, turn, turn_err = 45.0, 1.35, 20.0, 2.0
    if source is BEHIND:
        speed, speed_err = 10.0, 0.3
    age = rng.normal(source.age_yr, source.age_err_yr, n)
    distance = rng.normal(source.distance_pc, source.distance_err_pc, n)
    speeds = rng.normal(speed, speed_err, n)
    turns = rng.normal(turn, turn_err, n)
    radial, sideways = sheet_slope(
        apart, age, distance, speed_arcsec_yr=speeds, turn_deg=turns
    )
    flat = speed_arcsec_yr(apart, age, distance)
    scattering = scattering_angle_deg(apart, age, distance)
    drawn = {
        "dust_depth": depth_pc(apart, age, distance),
        "dust_distance": source_distance_pc(apart, age, distance),
        "scattering_angle": scattering,
        "viewing_inclination": scattering - apart,
        "flat_speed": flat,
        "speed_ratio": speeds / flat,
        "sheet_slope": radial,
        "sheet_slope_sideways": sideways,
    }
    found = arc(
        source,
        apart,
        turn=turn,
        speed=speed,
        speed_err_arcsec_yr=speed_err,
        normal_pa_err=turn_err,
    )
    for name, values in drawn.items():
        err = getattr(found, f"{name}_err")
        assert err == pytest.approx(values.std(), rel=0.035), name


def test_errors_of_implied_ages_are_those_of_chance(rng):
    """As above; at 1.6 times the speed of light both roots are smooth."""
    n, apart, speed, err = 40_000, 4.0, 50.6, 0.5
    speeds = rng.normal(speed, err, n)
    distances = rng.normal(FRONT.distance_pc, FRONT.distance_err_pc, n)
    front, behind = age_and_depth(apart, speeds, distances)
    found = arc(ageless(FRONT), apart, speed=speed, speed_err_arcsec_yr=err)
    assert found.implied_age_err == pytest.approx(front.age_yr.std(), rel=0.035)
    assert found.implied_age_behind_err == pytest.approx(behind.age_yr.std(), rel=0.035)


@pytest.mark.parametrize(("source", "apart"), GEOMETRIES)
def test_the_score_has_the_same_depth(source, apart):
    found = arc(source, apart, turn=9.0)
    ra, dec = offset_position(source.ra, source.dec, 110.0, apart)
    (score,) = score_origins(
        [source],
        ra=float(ra),
        dec=float(dec),
        normal_pa=30.0,
        normal_pa_err=2.0,
        speed_arcsec_yr=40.0,
        speed_err_arcsec_yr=1.0,
        mjd=MJD,
        settings=OriginSettings(),
    )
    assert found.separation == score.separation_deg
    assert found.dust_depth == pytest.approx(score.dust_depth_pc, rel=1e-12)
    # A difference quotient against the derivative: the step is 1e-2 of 2 %.
    assert found.dust_depth_err == pytest.approx(score.dust_depth_err_pc, rel=1e-4)


def assert_same(found, expected):
    assert found.viewing_pa == pytest.approx(expected.viewing_pa, abs=1e-6)
    for one, other in zip(astuple(found)[1:], astuple(expected)[1:], strict=True):
        if isinstance(other, float):
            assert one == pytest.approx(other, rel=1e-6)
        else:
            assert one == other


@pytest.mark.parametrize(
    ("ra", "dec"), [(0.01, 0.0), (359.999, 89.99), (0.0, -89.5), (2.0, 87.0)]
)
def test_nothing_depends_on_where_on_the_sky(ra, dec):
    """The same triangle across RA 0 and over a pole."""
    expected = arc(FRONT, 4.0, turn=-15.0)
    assert_same(arc(replace(FRONT, ra=ra, dec=dec), 4.0, turn=-15.0), expected)


def test_a_source_at_the_pole():
    """From the south pole, all ways lead north, and right ascension is the angle."""
    expected = arc(FRONT, 4.0, turn=-15.0)
    pole = replace(FRONT, ra=123.0, dec=-90.0)
    found = arc(pole, 4.0, ra=123.0 + 110.0, dec=-86.0, normal_pa=360.0 - 15.0)
    assert_same(found, expected)
