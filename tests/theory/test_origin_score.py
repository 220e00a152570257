"""Probabilities of motion against integrals and simulated sheets."""

import numpy as np
import pytest

from latelight.echo.geometry import (
    delay_gradient,
    depth_error_pc,
    depth_pc,
    light_speed_arcsec_yr,
    observer_distance_pc,
)
from latelight.origin.score import direction_density, motion_density, score_origins
from latelight.origin.settings import OriginSettings
from latelight.records import Source
from latelight.sky import offset_position

pytestmark = pytest.mark.theory

ANGLES = (np.arange(3600) + 0.5) * 0.1
STEP = np.radians(0.1)


@pytest.mark.parametrize(("across", "tilt"), [(0.0, 1.0), (1.0, 0.3), (0.4, 2.0)])
def test_direction_density_sums_to_one(across, tilt):
    density = direction_density(ANGLES, across=across, tilt=tilt)
    assert density.sum() * STEP == pytest.approx(1.0, abs=1e-6)


@pytest.mark.parametrize("away", [0.0, 20.0, 90.0, 180.0])
def test_direction_density_is_motion_density_over_all_speeds(away):
    log_q = np.linspace(-14.0, 14.0, 28_001)
    joint = motion_density(away, np.exp(log_q), across=0.9, tilt=0.4)
    assert np.trapezoid(joint, log_q) == pytest.approx(
        float(direction_density(away, across=0.9, tilt=0.4)), rel=1e-5
    )


@pytest.mark.parametrize("scatter", [5.0, 15.0, 60.0])
def test_half_of_the_arcs_move_within_the_scatter(scatter):
    """tan(scatter) = tilt / across halves the wrapped Cauchy law."""
    turns = np.abs((ANGLES + 180.0) % 360.0 - 180.0)
    density = direction_density(ANGLES, across=1 / np.tan(np.radians(scatter)), tilt=1)
    within = density[turns < scatter].sum() * STEP
    assert within == pytest.approx(0.5, abs=2 * density.max() * STEP)


def random_motions(rng, n, tilt_scale, place):
    """Directions and speeds of echoes on sheets of random slopes.

    The slopes' law, h / (2 pi) (h**2 + s**2)**-1.5, has the cumulative 1 - h /
    sqrt(h**2 + s**2); for h = 1 it is that of planes oriented evenly in space.
    """
    slope = tilt_scale * np.sqrt(1.0 / rng.uniform(size=n) ** 2 - 1.0)
    way = rng.uniform(0.0, 2.0 * np.pi, n)
    across, per_tilt = delay_gradient(*place)
    gradient_away = across - per_tilt * slope * np.cos(way)
    gradient_side = -per_tilt * slope * np.sin(way)
    light = light_speed_arcsec_yr(observer_distance_pc(*place))
    speed = light / np.hypot(gradient_away, gradient_side)
    return np.degrees(np.arctan2(gradient_side, gradient_away)), speed


def test_planes_of_even_orientation_have_the_slopes_assumed(rng):
    """tan of the angle between a random direction and the line of sight."""
    normals = rng.normal(size=(200_000, 3))
    slope = np.hypot(normals[:, 0], normals[:, 1]) / np.abs(normals[:, 2])
    for limit in (0.3, 1.0, 3.0):
        share = np.mean(slope < limit)
        exact = 1.0 - 1.0 / np.hypot(1.0, limit)
        assert share == pytest.approx(exact, abs=4 * np.sqrt(0.25 / slope.size))


def test_densities_are_those_of_random_sheets(rng):
    """Counts of 200 000 sheets in boxes of direction and speed, 4.5 sigma."""
    place, n, h = (2.3, 400.0, 3000.0), 200_000, 0.5
    away, speed = random_motions(rng, n, h, place)
    across, per_tilt = delay_gradient(*place)
    light = light_speed_arcsec_yr(observer_distance_pc(*place))
    for low, high in ((-10, 10), (20, 50), (150, 210)):
        for slow, fast in ((1.0, 10.0), (15.0, 25.0), (40.0, 200.0)):
            inside = (
                ((away - low) % 360.0 < high - low) & (speed > slow) & (speed < fast)
            )
            angle = np.linspace(low, high, 201)
            log_v = np.linspace(np.log(slow), np.log(fast), 201)
            density = motion_density(
                angle[:, None], light / np.exp(log_v), across=across, tilt=h * per_tilt
            )
            share = np.trapezoid(
                np.trapezoid(density, log_v, axis=1), np.radians(angle)
            )
            error = np.sqrt(n * share) + 1.0
            assert abs(inside.sum() - n * share) < 4.5 * error


def test_mean_ratio_over_random_directions_is_one():
    """A likelihood ratio against random directions averages to 1 over them."""
    settings = OriginSettings()
    ratios = [
        10.0
        ** score_origins(
            [Source("a", 97.0, 0.0)],
            ra=100.0,
            dec=0.0,
            normal_pa=pa,
            normal_pa_err=3.0,
            speed_arcsec_yr=np.nan,
            speed_err_arcsec_yr=np.nan,
            mjd=60000.0,
            settings=settings,
        )[0].score
        for pa in np.arange(0.0, 360.0, 1.0)
    ]
    assert np.mean(ratios) == pytest.approx(1.0, abs=1e-3)


def test_depth_is_that_of_the_ellipsoid():
    source = Source(
        "a",
        97.0,
        0.0,
        distance_pc=3000.0,
        distance_err_pc=200.0,
        age_yr=350.0,
        age_err_yr=10.0,
        age_at_mjd=60000.0 - 50 * 365.25,
    )
    (one,) = score_origins(
        [source],
        ra=100.0,
        dec=0.0,
        normal_pa=90.0,
        normal_pa_err=3.0,
        speed_arcsec_yr=20.0,
        speed_err_arcsec_yr=2.0,
        mjd=60000.0,
        settings=OriginSettings(),
    )
    assert one.dust_depth_pc == pytest.approx(float(depth_pc(3.0, 400.0, 3000.0)))
    assert one.dust_depth_err_pc == pytest.approx(
        float(depth_error_pc(3.0, 400.0, 3000.0, age_err_yr=10, distance_err_pc=200))
    )


def test_right_source_first_among_decoys(rng):
    """200 echoes on random sheets, six decoys 30 degrees apart and more.

    Drawn from the law that is assumed, directions within 15 degrees alone would
    come first in P(turn < 15 deg); the speed and the decoys' wider gaps help.  At
    least that share, less 3 sigma of the binomial.
    """
    settings = OriginSettings()
    place, right, n = (2.3, 400.0, 3000.0), 0, 200
    away, speed = random_motions(rng, n, settings.tilt_scale, place)
    known = {"distance_pc": 3000.0, "age_yr": 400.0, "age_at_mjd": 60000.0}
    for turn, rate in zip(away, speed, strict=True):
        pas = (rng.uniform(0, 360) + 50.0 * np.arange(7)) % 360.0
        sources = []
        for i, pa in enumerate(pas):
            ra, dec = offset_position(100.0, 30.0, pa, place[0])
            sources.append(Source(f"{i}", float(ra), float(dec), **known))
        rate = rate * (1 + 0.08 * rng.normal())
        scores = score_origins(
            sources,
            ra=100.0,
            dec=30.0,
            normal_pa=(pas[0] + 180.0 + turn + 2.0 * rng.normal()) % 360.0,
            normal_pa_err=2.0,
            speed_arcsec_yr=max(rate, 0.01),
            speed_err_arcsec_yr=0.08 * abs(rate),
            mjd=60000.0,
            settings=settings,
        )
        right += scores[0].source == "0"
    near = np.mean(np.abs(away) < 15.0)
    assert right / n >= near - 3 * np.sqrt(near * (1 - near) / n)
