"""Scores of origins: order, angles on the sphere, what is unknown."""

import numpy as np
import pytest

from latelight.origin.score import best_origin, score_origins
from latelight.origin.settings import OriginSettings
from latelight.records import Source
from latelight.sky import offset_position

SETTINGS = OriginSettings()
KNOWN = {"distance_pc": 3000.0, "distance_err_pc": 300.0}
AGED = {"age_yr": 400.0, "age_err_yr": 5.0, "age_at_mjd": 60000.0}


def score(sources, **changes):
    motion = {
        "ra": 100.0,
        "dec": 0.0,
        "normal_pa": 90.0,
        "normal_pa_err": 3.0,
        "speed_arcsec_yr": np.nan,
        "speed_err_arcsec_yr": np.nan,
        "mjd": 60000.0,
    }
    return score_origins(sources, settings=SETTINGS, **{**motion, **changes})


def ring(ra=100.0, dec=0.0, distance=3.0, **extra):
    """Sources every 30 degrees of position angle around a place."""
    out = []
    for pa in range(0, 360, 30):
        place = offset_position(ra, dec, pa, distance)
        out.append(Source(f"at {pa}", float(place[0]), float(place[1]), **extra))
    return out


def test_only_a_source_that_explains_the_arc_is_named():
    scores = score(ring())
    settings = OriginSettings(min_score=scores[0].score - 0.01)
    assert best_origin(scores, settings=settings) is scores[0]
    settings = OriginSettings(min_score=scores[0].score + 0.01)
    assert best_origin(scores, settings=settings) is None
    assert best_origin((), settings=settings) is None


def test_the_source_behind_the_motion_comes_first():
    scores = score(ring())
    assert scores[0].source == "at 270"
    assert scores[0].away_angle == pytest.approx(0.0, abs=1e-9)
    assert scores[0].separation_deg == pytest.approx(3.0)
    assert scores[-1].source == "at 90"
    assert abs(scores[-1].away_angle) == pytest.approx(180.0)
    assert [s.score for s in scores] == sorted((s.score for s in scores), reverse=True)


def test_away_angle_is_motion_minus_away():
    (one,) = score([Source("west", 97.0, 0.0)], normal_pa=100.0)
    assert one.away_angle == pytest.approx(10.0)
    (one,) = score([Source("west", 97.0, 0.0)], normal_pa=80.0)
    assert one.away_angle == pytest.approx(-10.0)


@pytest.mark.parametrize(
    ("ra", "dec"), [(0.2, 10.0), (359.9, -40.0), (77.0, 89.5), (12.0, -89.9)]
)
def test_directions_hold_across_zero_and_near_the_poles(ra, dec):
    for source in ring(ra, dec, distance=2.0):
        pa = float(source.name.split()[1])
        (one,) = score([source], ra=ra, dec=dec, normal_pa=(pa + 180.0) % 360.0)
        assert one.away_angle == pytest.approx(0.0, abs=1e-6)
        assert one.separation_deg == pytest.approx(2.0)


def test_equal_scores_are_ordered_by_separation_then_name():
    sources = [
        Source("0", 90.0, 0.0),
        Source("b", 97.0, 0.0),
        Source("a", 97.0, 0.0),
    ]
    for order in (sources, sources[::-1]):
        assert [s.source for s in score(order)] == ["a", "b", "0"]


def test_no_source_no_score():
    assert score([]) == ()


def test_place_unknown_no_score():
    assert score(ring(), ra=np.nan, dec=np.nan) == ()


def test_direction_unknown_scores_nothing():
    for one in score(ring(), normal_pa=np.nan, normal_pa_err=np.nan):
        assert one.score == pytest.approx(0.0)
        assert np.isnan(one.away_angle)


def test_sense_unknown_makes_both_ways_equal():
    scores = {s.source: s.score for s in score(ring(), sense_odds=0.0)}
    assert scores["at 270"] == pytest.approx(scores["at 90"])
    certain = {s.source: s.score for s in score(ring())}
    # Half of the probability: log10(2) less, but for the share of outliers.
    assert certain["at 270"] - scores["at 270"] == pytest.approx(np.log10(2), abs=0.03)


def test_uncertain_direction_lowers_the_best_and_raises_the_worst():
    sharp, vague = score(ring()), score(ring(), normal_pa_err=40.0)
    assert sharp[0].score > vague[0].score
    assert sharp[-1].score < vague[-1].score


def test_score_never_falls_below_the_share_of_outliers():
    sources = ring(**KNOWN, **AGED)
    for speed in (0.01, 20.0, 1e5):
        scores = score(sources, speed_arcsec_yr=speed, speed_err_arcsec_yr=0.01 * speed)
        assert min(s.score for s in scores) >= np.log10(SETTINGS.outlier_fraction)


def test_source_not_yet_seen_cannot_be_the_origin():
    future = Source("later", 97.0, 0.0, age_yr=10.0, age_at_mjd=70000.0, **KNOWN)
    (one,) = score([future])
    assert one.score == pytest.approx(np.log10(SETTINGS.outlier_fraction))
    assert np.isnan(one.dust_depth_pc)


def test_speed_tells_sources_in_one_direction_apart():
    right = Source("right", 97.7, 0.0, **KNOWN, **AGED)
    wrong = Source("wrong", 97.7, 0.0, distance_pc=50_000.0, **AGED)
    best, other = score([wrong, right], speed_arcsec_yr=21.0, speed_err_arcsec_yr=2.0)
    assert best.source == "right"
    assert best.score - other.score > 1.0


def test_depth_needs_age_and_distance():
    sources = [
        Source("both", 97.7, 0.0, **KNOWN, **AGED),
        Source("age", 97.7, 0.0, **AGED),
        Source("distance", 97.7, 0.0, **KNOWN),
    ]
    depth = {s.source: s.dust_depth_pc for s in score(sources)}
    assert np.isfinite(depth["both"])
    assert np.isnan(depth["age"])
    assert np.isnan(depth["distance"])


def test_depth_uses_the_age_at_the_epoch():
    source = Source("a", 97.7, 0.0, **KNOWN, **AGED)
    (now,) = score([source])
    (later,) = score([source], mjd=60000.0 + 50 * 365.25)
    assert later.dust_depth_pc < now.dust_depth_pc


def test_error_free_source_has_a_depth_without_error():
    source = Source(
        "a", 97.7, 0.0, distance_pc=3000.0, age_yr=400.0, age_at_mjd=60000.0
    )
    (one,) = score([source])
    assert one.dust_depth_err_pc == 0.0


def test_source_on_the_arc_or_across_the_sky_does_no_harm():
    sources = [
        Source("here", 100.0, 0.0, **KNOWN, **AGED),
        Source("opposite", 280.0, 0.0, **KNOWN, **AGED),
    ]
    for one in score(sources, speed_arcsec_yr=20.0, speed_err_arcsec_yr=2.0):
        assert np.isfinite(one.score)
