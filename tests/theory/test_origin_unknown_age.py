"""Sources of unknown age; sources in the arc itself or behind the observer."""

import numpy as np
import pytest

from latelight.echo.geometry import (
    delay_gradient,
    depth_pc,
    light_speed_arcsec_yr,
    observer_distance_pc,
)
from latelight.origin.joint_age import estimate_age
from latelight.origin.score import AGE_RANGE_YR, score_origins
from latelight.origin.settings import OriginSettings
from latelight.records import Source
from latelight.sky import offset_position, position_angle

pytestmark = pytest.mark.theory

SETTINGS = OriginSettings()


def score(source, **changes):
    motion = {
        "ra": 100.0,
        "dec": 0.0,
        "normal_pa": 90.0,
        "normal_pa_err": 3.0,
        "speed_arcsec_yr": 21.0,
        "speed_err_arcsec_yr": 2.0,
        "mjd": 60000.0,
    }
    (one,) = score_origins([source], settings=SETTINGS, **{**motion, **changes})
    return one


def test_unknown_age_is_the_mean_over_ages():
    """The ratio without an age is that of all ages, weighted evenly in the logarithm.

    The mixture with outliers is linear in the ratio, so the mean may be taken of
    10**score.  Midpoints of 24 intervals against 240: second order in the step.
    """
    low, high = np.log(AGE_RANGE_YR)
    ages = np.exp(low + (high - low) * (np.arange(240) + 0.5) / 240)
    known = [
        Source("a", 97.7, 0.0, distance_pc=3000.0, age_yr=age, age_at_mjd=60000.0)
        for age in ages
    ]
    mean = np.mean([10.0 ** score(source).score for source in known])
    free = 10.0 ** score(Source("a", 97.7, 0.0, distance_pc=3000.0)).score
    assert free == pytest.approx(mean, rel=0.02)


def test_speed_tells_distances_apart_without_an_age():
    """A sheet across the view is never slower than light: 1.26 arcsec/yr at 50 kpc.

    So 0.2 arcsec/yr hardly comes from there, but may from 500 kpc.
    """
    slow = {"speed_arcsec_yr": 0.2, "speed_err_arcsec_yr": 0.02}
    near = score(Source("near", 99.0, 0.0, distance_pc=5e4), **slow)
    far = score(Source("far", 99.0, 0.0, distance_pc=5e5), **slow)
    assert far.score > near.score + 0.5


def test_source_in_the_arc_says_nothing():
    for gap_arcsec in (0.0, 0.3):
        one = score(Source("here", 100.0, gap_arcsec / 3600.0))
        assert one.score == pytest.approx(0.0, abs=1e-9)
        assert np.isnan(one.away_angle)
        assert one.separation_deg == pytest.approx(gap_arcsec / 3600.0, abs=1e-12)


def test_near_sources_say_less():
    """The place of the arc, an arcsec, turns the direction from 3 arcsec by 18 deg."""
    near = score(Source("a", 100.0 - 3.0 / 3600.0, 0.0))
    farther = score(Source("a", 100.0 - 300.0 / 3600.0, 0.0))
    assert 0.0 < near.score < farther.score


def test_dust_behind_the_observer_is_no_echo():
    one = score(Source("far side", 195.0, 0.0, distance_pc=3000.0), normal_pa=270.0)
    assert one.score == pytest.approx(np.log10(SETTINGS.outlier_fraction))


def flat_arcs(n, *, age, distance):
    """Arcs of sheets across the view around a source, at 1 to 4 degrees."""
    pa = np.arange(n) * 360.0 / n
    theta = np.linspace(1.0, 4.0, n)
    ra, dec = offset_position(10.0, 80.0, pa, theta)
    away = position_angle(ra, dec, 10.0, 80.0) + 180.0
    across, _ = delay_gradient(theta, age, distance)
    light = light_speed_arcsec_yr(observer_distance_pc(theta, age, distance))
    return ra, dec, away, light / across


def test_flat_sheets_give_their_age():
    """Eight flat arcs at different angles share one age alone.

    The prior of tilts is narrowed to 2 %, so that it moves the age by about as much,
    and the interval must hold the truth.
    """
    ra, dec, pa, speed = flat_arcs(8, age=400.0, distance=3000.0)
    found = estimate_age(
        Source("a", 10.0, 80.0, distance_pc=3000.0),
        ra=ra,
        dec=dec,
        pa=pa,
        speed=speed,
        speed_err=0.02 * speed,
        years=np.zeros(8),
        weight=np.ones(8),
        settings=SETTINGS.model_copy(update={"tilt_scale": 0.02}),
    )
    assert found.age_yr == pytest.approx(400.0, rel=0.03)
    assert found.low_yr < 400.0 < found.high_yr
    assert found.n_arcs == 8


def test_ages_cover_the_truth_when_sheets_are_tilted(rng):
    """68 % intervals of 60 sources with 10 arcs on sheets of the assumed slopes.

    Binomial: 0.68 +- 0.06; four sigma.
    """
    inside = 0
    for _ in range(60):
        age = 10.0 ** rng.uniform(2.0, 3.0)
        ra, dec, away, _ = flat_arcs(10, age=age, distance=3000.0)
        theta = np.linspace(1.0, 4.0, 10)
        across, per_tilt = delay_gradient(theta, age, 3000.0)
        slope = SETTINGS.tilt_scale * np.sqrt(1.0 / rng.uniform(size=10) ** 2 - 1.0)
        way = rng.uniform(0.0, 2.0 * np.pi, 10)
        ahead = across - per_tilt * slope * np.cos(way)
        side = -per_tilt * slope * np.sin(way)
        light = light_speed_arcsec_yr(observer_distance_pc(theta, age, 3000.0))
        speed = light / np.hypot(ahead, side)
        found = estimate_age(
            Source("a", 10.0, 80.0, distance_pc=3000.0),
            ra=ra,
            dec=dec,
            pa=away + np.degrees(np.arctan2(side, ahead)),
            speed=speed * (1.0 + 0.05 * rng.normal(size=10)),
            speed_err=0.05 * speed,
            years=np.zeros(10),
            weight=np.ones(10),
            settings=SETTINGS,
        )
        inside += found.low_yr < age < found.high_yr
    assert abs(inside / 60 - 0.68) < 4 * np.sqrt(0.68 * 0.32 / 60)


def test_masked_speeds_and_distances_give_no_age():
    ra, dec, pa, speed = flat_arcs(3, age=400.0, distance=3000.0)
    common = {
        "ra": ra, "dec": dec, "pa": pa, "speed_err": 0.1 * speed,
        "years": np.zeros(3), "weight": np.ones(3), "settings": SETTINGS,
    }  # fmt: skip
    known = Source("a", 10.0, 80.0, distance_pc=3000.0)
    assert estimate_age(known, speed=np.full(3, np.nan), **common) is None
    assert estimate_age(Source("a", 10.0, 80.0), speed=speed, **common) is None
    some = estimate_age(known, speed=np.where([1, 0, 0], speed, np.nan), **common)
    assert some.n_arcs == 1
    assert np.isfinite(depth_pc(2.0, some.age_yr, 3000.0))
