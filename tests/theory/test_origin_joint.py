"""The joint origin of many arcs against closed forms and against invariance."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.origin.joint import find_origins
from latelight.origin.joint_arcs import moving_arcs, sky_of, unit_vectors
from latelight.origin.joint_chance import chance_of_score
from latelight.origin.joint_laws import direction_laws, law_widths, pseudo_angle, turns
from latelight.origin.joint_likelihood import REACH_DEG, SHARES, origin_likelihood
from latelight.origin.joint_region import Ellipse, Ridge
from latelight.origin.joint_search import best_origin, choose_pairs
from latelight.origin.joint_speeds import fit_speeds, speed_ratios
from latelight.origin.score import direction_density
from latelight.origin.settings import OriginSettings
from latelight.sky import offset_position, position_angle, separation_deg, wrap_180

pytestmark = pytest.mark.theory

SETTINGS = OriginSettings()


def lit_arcs(rng, ra, dec, *, n=24, turn=8.0, err=2.0, distance=(0.5, 3.0)):
    """Places all round an event and directions away from it, turned at random."""
    places = offset_position(
        ra, dec, np.arange(n) * 360.0 / n, rng.uniform(*distance, n)
    )
    away = position_angle(*places, ra, dec) + 180.0
    pa = away + rng.normal(0.0, np.hypot(turn, err), n)
    return *places, pa % 360.0, np.full(n, err)


def likelihood_of(ra, dec, pa, err, **extra):
    arcs = moving_arcs(ra, dec, pa, pa_err=err, **extra)
    return origin_likelihood(arcs, direction_laws(arcs, scatter_deg=15.0))


@pytest.mark.parametrize(
    ("ra", "dec"), [(0.1, 0.0), (359.95, 40.0), (10.0, 89.7), (200.0, -89.9)]
)
def test_turns_are_motion_minus_away(rng, ra, dec):
    lon, lat = offset_position(ra, dec, rng.uniform(0, 360, 50), rng.uniform(0.1, 5))
    pa = rng.uniform(0.0, 360.0, 50)
    arcs = moving_arcs(lon, lat, pa, pa_err=2.0)
    away = position_angle(lon, lat, ra, dec) + 180.0
    got = turns(arcs, unit_vectors(ra, dec))
    assert np.abs(wrap_180(got - (pa - away))).max() < 1e-6


@pytest.mark.parametrize("error", [1.0, 7.5, 38.0])
@pytest.mark.parametrize("odds", [np.inf, 0.0])
def test_ratios_average_to_one_over_random_directions(error, odds):
    """Density over even density: the mean over the circle is 1 for every law.

    The table is read by straight lines between nodes half a degree apart: 0.5 %.
    """
    arcs = moving_arcs([0.0], [0.0], [0.0], pa_err=[error], sense_odds=odds)
    laws = direction_laws(arcs, scatter_deg=15.0)
    circle = (np.arange(7200) + 0.5) * 0.05
    mean = np.mean([laws.ratios(np.array([angle]))[0] for angle in circle], axis=0)
    assert mean == pytest.approx(np.ones(8), rel=5e-3)


def test_half_of_every_law_lies_within_its_width():
    arcs = moving_arcs([0.0], [0.0], [0.0], pa_err=[0.1])
    laws = direction_laws(arcs, scatter_deg=20.0)
    angle = (np.arange(18000) + 0.5) * 0.01
    ratio = np.array([laws.ratios(np.array([a]))[0] for a in angle])
    for law, width in enumerate(law_widths(20.0)):
        within = ratio[angle < width, law].sum() / ratio[:, law].sum()
        # Errors of the first class, 0.5 deg, widen the narrowest law, 5 deg.
        assert within == pytest.approx(0.5, abs=0.015)


def test_cauchy_laws_are_those_of_the_single_score():
    """With across = 1 / tan(half-width) and tilt 1, by direction_density."""
    arcs = moving_arcs([0.0], [0.0], [0.0], pa_err=[0.1])
    laws = direction_laws(arcs, scatter_deg=30.0)
    half = law_widths(30.0)[2]
    for turn in (0.0, 10.0, 40.0, 120.0, 180.0):
        exact = (
            2
            * np.pi
            * direction_density(turn, across=1 / np.tan(np.radians(half)), tilt=1.0)
        )
        got = laws.ratios(np.array([turn]))[0, 2]
        assert got == pytest.approx(float(exact), rel=5e-3)


def test_pseudo_angle_grows_with_the_turn():
    turn = np.linspace(0.0, 180.0, 1000)
    got = pseudo_angle(turn)
    assert (np.diff(got) > 0.0).all()
    assert (got[0], got[-1]) == pytest.approx((0.0, 2.0), abs=1e-12)
    assert pseudo_angle(-turn) == pytest.approx(got)


def test_kernel_is_the_sum_written_out(rng):
    """log of the mean over reaches, shares and laws of products over arcs."""
    ra, dec, pa, err = lit_arcs(rng, 30.0, 10.0, distance=(0.5, 40.0))
    found = likelihood_of(ra, dec, pa, err, correlation_arcmin=90.0)
    arcs, laws = found.arcs, found.laws
    assert (arcs.weight < 1.0).any()
    base = rng.uniform(0.5, 3.0, len(arcs))
    for place in (offset_position(30.0, 10.0, 77.0, 1.3), (210.0, -40.0)):
        point = unit_vectors(*place)
        ratio = laws.ratios(turns(arcs, point))
        gap = separation_deg(ra, dec, *place)
        values = []
        for reach in REACH_DEG:
            near = gap <= reach
            for share in SHARES:
                factor = 1.0 + share * (ratio[near] / base[near, None] - 1.0)
                values.append(arcs.weight[near] @ np.log(factor))
        values = np.array(values)
        exact = np.log(np.mean(np.exp(values) @ laws.prior))
        got = found.beside(base).marginal(point[None])[0]
        assert got == pytest.approx(exact, abs=1e-9)


def test_mean_likelihood_ratio_of_random_directions_is_one(rng):
    """So a listed source exceeds n / level with at most the probability level.

    2500 skies of three arcs; 4 standard errors of that very mean.
    """
    ra, dec, _, err = lit_arcs(rng, 30.0, 10.0, n=3, err=10.0)
    point = unit_vectors([30.0], [10.0])
    ratios = np.array(
        [
            np.exp(
                likelihood_of(ra, dec, rng.uniform(0, 360, 3), err).marginal(point)[0]
            )
            for _ in range(2500)
        ]
    )
    error = ratios.std() / np.sqrt(ratios.size)
    assert abs(ratios.mean() - 1.0) < 4.0 * error
    assert error < 0.1


def test_sky_may_be_turned(rng):
    """Scores, errors and distances do not depend on where on the sky it happens."""
    ra, dec, pa, err = lit_arcs(rng, 0.0, 0.0)
    results = []
    for pole in ((0.0, 0.0), (123.0, 89.9), (359.99, -45.0)):
        # Carry places and directions along by bearings from the event.
        gap = separation_deg(0.0, 0.0, ra, dec)
        bearing = position_angle(0.0, 0.0, ra, dec) + 33.0
        lon, lat = offset_position(*pole, bearing, gap)
        turn = pa - position_angle(ra, dec, 0.0, 0.0)
        new = position_angle(lon, lat, *pole) + turn
        (origin,) = find_origins(
            moving_arcs(lon, lat, new, pa_err=err), settings=SETTINGS
        ).origins
        region = origin.region
        away = float(separation_deg(*pole, region.ra, region.dec))
        results.append((origin.score, away, region.major, region.minor))
    for other in results[1:]:
        # The search ends on a grid of its own: 1 % of an error.
        assert other[0] == pytest.approx(results[0][0], abs=0.02)
        assert other[1] == pytest.approx(results[0][1], abs=0.02 * results[0][2])
        assert other[2:] == pytest.approx(results[0][2:], rel=0.03)


def test_ellipses_cover_the_event(rng):
    """16 skies of 24 arcs: 95 % ellipses hold the event, less 3 sigma of a binomial."""
    inside = 0
    for _ in range(16):
        ra, dec = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-1, 1)))
        found = find_origins(
            moving_arcs(*lit_arcs(rng, ra, dec)[:3], pa_err=2.0), settings=SETTINGS
        )
        # One in twenty may claim another beside it.
        inside += found.origins[0].region.chi2(ra, dec) < 5.991
    assert inside / 16 > 0.95 - 3 * np.sqrt(0.95 * 0.05 / 16)


def test_error_of_the_place_is_that_of_least_squares(rng):
    """Sharp arcs all round at one distance d: sigma = turn d sqrt(2 / n) each way.

    Each arc gives the place across its line, d * turn, and its direction averages
    cos**2 to one half.  Marginal tilt laws are wider: at most twice that.
    """
    ra, dec, pa, err = lit_arcs(rng, 50.0, 5.0, n=60, turn=6.0, distance=(2.0, 2.0001))
    (origin,) = find_origins(
        moving_arcs(ra, dec, pa, pa_err=err), settings=SETTINGS
    ).origins
    exact = 2.0 * np.radians(np.hypot(6.0, 2.0)) * np.sqrt(2.0 / 60)
    assert exact * 0.8 < origin.region.minor <= origin.region.major < 2.0 * exact


def test_random_directions_claim_nothing(rng):
    """12 skies of 20 arcs at levels of 1 and 0.5 %: more than one would be 1 in 70."""
    claims = 0
    for _ in range(12):
        ra, dec, _, err = lit_arcs(rng, 80.0, 60.0, n=20)
        pa = rng.uniform(0.0, 360.0, 20)
        arcs = moving_arcs(ra, dec, pa, pa_err=err)
        claims += bool(find_origins(arcs, settings=SETTINGS).origins)
    assert claims <= 1


def test_chance_is_never_understated(rng):
    """Of 80 random skies no more have a stated chance below 10 % than are due."""
    ra, dec, _, err = lit_arcs(rng, 80.0, 60.0, n=12)
    low = 0
    for _ in range(80):
        sky = likelihood_of(ra, dec, rng.uniform(0.0, 360.0, 12), err)
        score = best_origin(sky, choose_pairs(sky.arcs, rng))[1] / np.log(10.0)
        chance = chance_of_score(sky, [], score, rng=rng, skies=16, level=0.1)
        low += chance < 0.1
    assert low <= 8 + 3 * np.sqrt(80 * 0.1 * 0.9)


def test_parallel_arcs_give_a_ridge(rng):
    """One field, all arcs moving alike: the great circle, and no point on it."""
    n = 14
    ra, dec = 50.0 + rng.uniform(0, 0.4, n), 20.0 + rng.uniform(0, 0.4, n)
    pa = 100.0 + rng.normal(0.0, 4.0, n)
    (origin,) = find_origins(
        moving_arcs(ra, dec, pa, pa_err=2.0), settings=SETTINGS
    ).origins
    ridge = origin.region
    assert isinstance(ridge, Ridge)
    # Along the mean motion, back: 5 deg is three errors of the mean, and the grid.
    assert abs(wrap_180(ridge.pa - (100.0 + 180.0))) < 5.0
    gap = separation_deg(ridge.ra, ridge.dec, ridge.from_ra, ridge.from_dec)
    assert ridge.near < gap < ridge.far


def test_two_events_part(rng):
    """Two rings of arcs 8 degrees apart, each within 2 degrees of its event."""
    parts = [lit_arcs(rng, ra, 10.0, n=18, distance=(0.5, 2.0)) for ra in (40.0, 48.0)]
    ra, dec, pa, err = (np.concatenate(column) for column in zip(*parts, strict=True))
    found = find_origins(moving_arcs(ra, dec, pa, pa_err=err), settings=SETTINGS)
    assert len(found.origins) == 2
    for event in (40.0, 48.0):
        best = min(o.region.chi2(event, 10.0) for o in found.origins)
        assert best < 13.8  # 99.9 %
    shares = [o.membership for o in found.origins]
    first = np.argmax(shares, axis=0)
    assert len(set(first[:18])) == 1
    assert first[0] != first[18]


def test_unsure_senses_leave_both_sides_open(rng):
    """With odds of 1 to 1 an arc points to both ends of its great circle alike."""
    ra, dec, pa, err = lit_arcs(rng, 20.0, 30.0, n=6)
    sure = likelihood_of(ra, dec, pa, err)
    unsure = likelihood_of(ra, dec, pa, err, sense_odds=0.0)
    turned = likelihood_of(ra, dec, (pa + 180.0) % 360.0, err, sense_odds=0.0)
    event = unit_vectors([20.0], [30.0])
    assert unsure.marginal(event) == pytest.approx(turned.marginal(event), abs=1e-9)
    assert sure.marginal(event)[0] > unsure.marginal(event)[0] > 0.0


def test_arcs_in_one_place_count_as_one():
    ra, dec = [10.0, 10.0, 10.0, 50.0], [0.0, 0.0, 0.0, 0.0]
    arcs = moving_arcs(ra, dec, [0.0] * 4, pa_err=2.0, correlation_arcmin=1.0)
    # In steps of 1/16.
    assert arcs.weight[:3] == pytest.approx(np.full(3, 1 / 3), abs=1 / 32)
    assert arcs.weight[3] == 1.0
    assert len(set(arcs.filament[:3])) == 1
    assert arcs.filament[3] != arcs.filament[0]


def test_ellipse_measures_in_its_axes():
    ellipse = Ellipse(ra=10.0, dec=0.0, major=2.0, minor=0.5, pa=90.0)
    assert ellipse.chi2(12.0, 0.0) == pytest.approx(1.0)
    assert ellipse.chi2(10.0, 0.5) == pytest.approx(1.0)


def test_best_place_is_where_circles_cross(rng):
    """Error-free arcs: the best origin is the event, to the last step of the climb."""
    ra, dec, _, err = lit_arcs(rng, 15.0, -70.0, n=10)
    pa = position_angle(ra, dec, 15.0, -70.0) + 180.0
    sky = likelihood_of(ra, dec, pa, err)
    place, value = best_origin(sky, choose_pairs(sky.arcs, rng))
    assert separation_deg(*sky_of(place), 15.0, -70.0) < 1e-3
    assert value >= sky.marginal(unit_vectors([15.0], [-70.0]))[0] - 1e-9


def test_speeds_are_those_of_flat_sheets():
    """(c / 2 D) (x + 1 / x) with x = theta D / (c t): the small-angle law.

    With rho = D theta and z from the paraboloid, r / rho = (x + 1 / x) / 2 and the
    speed is c r / (rho D).
    """
    theta = np.radians(np.linspace(0.2, 4.0, 30))
    turning, scale = np.radians(1.4), np.log(21.0)
    speed = np.exp(scale) * 0.5 * (theta / turning + turning / theta)
    arcs = moving_arcs(
        np.degrees(theta), 0.0, 90.0, pa_err=2.0, speed=speed, speed_err=0.01 * speed
    )
    law = fit_speeds(arcs, np.array([1.0, 0.0, 0.0]), np.ones(30))
    ratio = speed_ratios(arcs, np.array([1.0, 0.0, 0.0]), law)
    assert (ratio > 1.0).all()
    best = np.argmax(law.weight)
    # Turning angles are tried a third apart.
    assert law.scale[best] == pytest.approx(scale, abs=0.05)
    # Another origin's speeds, twice as fast, fit worse.
    far = theta > 0.05
    other = replace(arcs, log_speed=arcs.log_speed + np.log(2.0) * far)
    assert (speed_ratios(other, np.array([1.0, 0.0, 0.0]), law)[far] < 1.0).all()


def test_unknown_speeds_say_nothing():
    arcs = moving_arcs([1.0, 2.0, 3.0], 0.0, 90.0, pa_err=2.0)
    direction = np.array([1.0, 0.0, 0.0])
    assert fit_speeds(arcs, direction, np.ones(3)) is None
    assert speed_ratios(arcs, direction, None) == pytest.approx(np.ones(3))
