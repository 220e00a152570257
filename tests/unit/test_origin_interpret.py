"""What cannot be told of an arc is None, and the remark says why."""

import math
from dataclasses import fields, replace

import numpy as np
import pytest

from latelight.origin.interpret import interpret
from latelight.records import Interpretation, Source
from latelight.sky import offset_position, position_angle

MJD = 60000.0
SOURCE = Source("Nova Ficta", 10.0, -60.0, 2000.0, 100.0, 300.0, 5.0, MJD)
DUST = {
    "dust_depth",
    "dust_distance",
    "scattering_angle",
    "viewing_inclination",
    "flat_speed",
}
SHEET = {"speed_ratio", "sheet_slope", "sheet_slope_sideways"}
AGES = {"implied_age", "implied_age_behind"}
ALWAYS = {"source", "separation", "away_angle", "remark"}


def arc(source=SOURCE, *, apart=1.6, towards=110.0, turn=8.0, **changes):
    """Interpret an arc some degrees from a source, moving away but for a turn."""
    ra, dec = offset_position(source.ra, source.dec, towards, apart)
    away = position_angle(ra, dec, source.ra, source.dec) + 180.0
    seen = {
        "ra": float(ra),
        "dec": float(dec),
        "normal_pa": float(away + turn) % 360.0,
        "normal_pa_err": 2.0,
        "speed_arcsec_yr": 40.0,
        "speed_err_arcsec_yr": 2.0,
        "mjd": MJD,
    }
    return interpret(source, **(seen | changes))


def told(found):
    """Return the names of what is known, and check that nothing is NaN."""
    names = set()
    for field in fields(Interpretation):
        value = getattr(found, field.name)
        if isinstance(value, float):
            assert math.isfinite(value), field.name
        if value is not None:
            names.add(field.name)
    return names - ALWAYS - {"viewing_pa"}


def with_errors(names):
    return names | {f"{name}_err" for name in names}


def test_all_is_told_of_a_whole_measurement():
    found = arc()
    assert told(found) == with_errors(DUST | SHEET)
    assert found.remark == ""
    assert found.separation == pytest.approx(1.6, abs=1e-9)
    assert found.away_angle == pytest.approx(8.0, abs=1e-6)
    assert found.viewing_pa == pytest.approx(110.0, abs=1e-6)


def test_without_age_both_ages_are_implied():
    found = arc(replace(SOURCE, age_yr=None, age_err_yr=None, age_at_mjd=None))
    assert told(found) == with_errors(AGES)
    assert 0.0 < found.implied_age < found.implied_age_behind
    assert found.remark == "age of the source not given"


@pytest.mark.parametrize("missing", [None, math.nan])
def test_a_masked_speed_leaves_the_dust(missing):
    found = arc(speed_arcsec_yr=missing, speed_err_arcsec_yr=missing)
    assert told(found) == with_errors(DUST)
    assert found.remark == "speed not measured"


@pytest.mark.parametrize("missing", [None, math.nan])
def test_a_masked_direction_leaves_the_dust(missing):
    found = arc(normal_pa=missing, normal_pa_err=missing)
    assert told(found) == with_errors(DUST)
    assert found.away_angle is None
    assert found.remark == "direction of motion not measured"


def test_missing_errors_leave_values_without_error():
    found = arc(speed_err_arcsec_yr=None)
    assert told(found) == with_errors(DUST) | SHEET
    assert found.remark == "error of the speed not known"
    found = arc(normal_pa_err=None)
    assert told(found) == with_errors(DUST) | SHEET | {"speed_ratio_err"}
    assert found.remark == "error of the direction not known"


def test_errors_the_source_does_not_give_are_said_to_be_zero():
    exact = replace(SOURCE, distance_err_pc=None, age_err_yr=None)
    found = arc(exact)
    assert found.dust_depth_err == 0.0
    assert found.sheet_slope_err > 0.0
    assert "distance and age of the source taken as exact" in found.remark


def test_nothing_but_the_angles_without_a_distance():
    found = arc(replace(SOURCE, distance_pc=None, distance_err_pc=None))
    assert told(found) == set()
    assert found.away_angle == pytest.approx(8.0, abs=1e-6)
    assert found.remark == "distance of the source not given"


def test_an_arc_on_the_source():
    found = arc(ra=SOURCE.ra, dec=SOURCE.dec)
    assert told(found) == set()
    assert found.away_angle is None
    assert found.remark.startswith("the arc lies on the source")


def test_an_arc_at_a_right_angle_and_beyond():
    found = arc(apart=97.25)
    assert told(found) == set()
    assert found.remark == (
        "the source is 97.2 deg away: at 90 and more the dust would lie behind the "
        "observer"
    )


def test_an_outburst_that_was_not_seen_yet():
    found = arc(replace(SOURCE, age_yr=5.0), mjd=MJD - 10 * 365.25)
    assert told(found) == set()
    assert found.remark == ("the arc was seen 5 yr before the outburst's light arrived")


def test_a_slow_arc_implies_no_age():
    # Light at 2000 pc crosses 63241 / 2000 = 31.6 arcsec a year.
    ageless = replace(SOURCE, age_yr=None, age_err_yr=None, age_at_mjd=None)
    found = arc(ageless, speed_arcsec_yr=15.8)
    assert told(found) == set()
    assert "moves at 0.5 of the speed of light" in found.remark
    assert found.remark.endswith("no implied age")


def test_an_inward_arc_implies_no_age_but_a_tilted_sheet():
    ageless = replace(SOURCE, age_yr=None, age_err_yr=None, age_at_mjd=None)
    found = arc(ageless, turn=150.0)
    assert told(found) == set()
    assert "moves towards the source" in found.remark
    found = arc(turn=180.0)
    assert told(found) == with_errors(DUST | SHEET)
    assert found.sheet_slope > 1.0
    assert found.sheet_slope_sideways == pytest.approx(0.0, abs=1e-6)


def test_absurd_errors_are_not_taken_through():
    found = arc(replace(SOURCE, age_err_yr=1e5))
    assert told(found) == DUST | SHEET
    assert "too large" in found.remark


@pytest.mark.parametrize("name", ["ra", "dec", "mjd"])
def test_an_arc_without_place_or_date_is_refused(name):
    with pytest.raises(ValueError, match=f"{name} must be finite, got nan"):
        arc(**{name: np.nan})
