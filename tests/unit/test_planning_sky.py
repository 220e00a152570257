"""What a plan refuses: impossible geometry, and fields of no one shape."""

import numpy as np
import pytest
from pydantic import ValidationError

from latelight.planning.cells import cells_of
from latelight.planning.extent import PlannedField, angles_from
from latelight.planning.outlook import Dust, outlook
from latelight.planning.rings import Layer, ring_of
from latelight.planning.settings import FieldSettings, LayerSettings

SOURCE = {"ra": 10.0, "dec": 20.0, "age_yr": 300.0, "distance_pc": 2000.0}
DUST = Dust(
    visual_extinction=0.5,
    thickness_pc=0.1,
    wavelength_um=0.62,
    seeing_arcsec=1.0,
    tilt_scale=0.35,
)


def layer(depth, **changes):
    return Layer(
        **{"name": "s", "depth_pc": depth, "distance_pc": None, "thickness_pc": 1.0}
        | changes
    )


@pytest.mark.parametrize(
    ("depth", "changes", "message"),
    [
        (2000.0, {}, "must lie in front of the observer, got a depth of 2000 pc"),
        (-60.0, {}, "at most 45.99 pc behind the source .* its echo is still"),
        (60.0, {"age_yr": -4.0}, "age and distance must be positive, got -4 yr"),
        (60.0, {"distance_pc": 0.0}, "must be positive, got 300 yr, 0 pc"),
    ],
)
def test_impossible_rings(depth, changes, message):
    with pytest.raises(ValueError, match=message):
        ring_of(layer(depth), **{**SOURCE, **changes})


def test_a_layer_by_its_distance_is_the_layer_by_its_depth():
    one = ring_of(layer(60.0), **SOURCE)
    two = ring_of(layer(None, distance_pc=1940.0), **SOURCE)
    assert two.radius_deg == pytest.approx(one.radius_deg, rel=1e-12)


def test_the_far_face_of_a_layer_may_be_dark_still():
    ring = ring_of(layer(-45.5, thickness_pc=4.0), **SOURCE)
    assert ring.inner_deg == 0.0
    assert 0.0 < ring.radius_deg < ring.outer_deg


def test_too_many_cells_are_refused_with_the_cure():
    with pytest.raises(ValueError, match=r"cells of order .* lower the order"):
        cells_of(layer(900.0), **SOURCE, age_err_yr=100.0, order=13)


def test_nothing_moves_straight_ahead_of_the_source():
    with pytest.raises(ValueError, match="theta_deg must be above 0, got 0"):
        outlook(0.0, 300.0, 2000.0, dust=DUST, duration_days=30.0)


def test_angles_of_a_field_from_outside_and_inside():
    field = PlannedField(name="f", ra=0.1, dec=0.0, width_deg=1.0, height_deg=2.0)
    least, most = angles_from(field, 357.1, 0.0)
    assert least == pytest.approx(2.5, rel=1e-3)
    assert most == pytest.approx(np.hypot(3.5, 1.0), rel=1e-3)
    assert angles_from(field, 0.3, 0.5)[0] == 0.0
    point = PlannedField(name="p", ra=0.1, dec=0.0)
    assert angles_from(point, 0.1, 2.0) == pytest.approx((2.0, 2.0))


def test_a_round_field_over_the_pole_holds_both_sides():
    field = PlannedField(name="f", ra=40.0, dec=89.8, radius_deg=0.5)
    assert field.holds(220.0, 89.8)
    assert not field.holds(220.0, 89.6)


@pytest.mark.parametrize(
    ("model", "keys", "message"),
    [
        (FieldSettings, {"width_deg": 1.0, "radius_deg": 1.0}, "not both"),
        (FieldSettings, {"height_deg": 1.0}, "height_deg needs width_deg"),
        (LayerSettings, {}, "give depth_pc"),
        (LayerSettings, {"depth_pc": 1.0, "distance_pc": 1.0}, "give depth_pc"),
    ],
)
def test_settings_that_contradict_themselves(model, keys, message):
    place = {"ra": 1.0, "dec": 1.0} if model is FieldSettings else {}
    with pytest.raises(ValidationError, match=message):
        model(name="n", **place, **keys)
