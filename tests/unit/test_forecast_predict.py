"""What a forecast refuses, and its limits."""

import numpy as np
import pytest

from latelight.forecast.brightness import predict_brightness
from latelight.forecast.predict import MovingArc, predict

NUMBERS = {
    "ra": 0.002,
    "dec": 10.0,
    "mjd": 61000.0,
    "pa": 270.0,
    "pa_err": 1.0,
    "speed": 20.0,
    "change": None,
    "covariance": np.zeros((3, 3)),
    "length": 40.0,
    "epochs": (60800.0, 61000.0),
}


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"speed": 0.0}, "speed must be positive and finite, got 0.0"),
        ({"speed": float("nan")}, "speed must be positive and finite, got nan"),
        ({"length": -1.0}, "length must be positive and finite, got -1.0"),
        ({"covariance": np.zeros((2, 2))}, r"shape \(3, 3\), got \(2, 2\)"),
    ],
)
def test_arcs_that_cannot_be_followed(change, message):
    with pytest.raises(ValueError, match=message):
        MovingArc(**{**NUMBERS, **change})


def test_dates_and_roughness_that_make_no_sense():
    arc = MovingArc(**NUMBERS)
    with pytest.raises(ValueError, match="mjd must be finite, got nan"):
        predict(arc, float("nan"))
    with pytest.raises(ValueError, match="roughness must not be negative"):
        predict(arc, 61000.0, roughness=-0.1)


def test_an_arc_crosses_right_ascension_zero():
    there = predict(MovingArc(**NUMBERS), 61000.0 + 365.25)
    assert 359.99 < there.ra < 360.0
    assert there.dec == pytest.approx(10.0, abs=1e-5)


def test_an_arc_crosses_the_pole():
    north = MovingArc(**{**NUMBERS, "dec": 90.0 - 5.0 / 3600.0, "pa": 0.0})
    there = predict(north, 61000.0 + 365.25)
    assert there.dec == pytest.approx(90.0 - 15.0 / 3600.0, abs=1e-6)
    assert there.ra == pytest.approx(180.002, abs=0.01)
    assert there.pa == pytest.approx(180.0, abs=0.01)


def test_at_its_own_epoch_an_arc_is_where_it_was():
    there = predict(MovingArc(**NUMBERS), 61000.0)
    assert (there.ra, there.dec, there.pa, there.offset) == (0.002, 10.0, 270.0, 0.0)


def test_one_epoch_alone_leaves_the_change_of_speed_open():
    there = predict(MovingArc(**{**NUMBERS, "epochs": (61000.0,)}), 61000.0 + 365.25)
    assert there.offset_err == pytest.approx(0.5 * 0.1 * 20.0**2 / 40.0)


def test_brightness_needs_an_epoch_and_a_width():
    with pytest.raises(ValueError, match="of one length of at least 1"):
        predict_brightness([], [], [], at=0.0, reach=1.0)
    with pytest.raises(ValueError, match="reach must be positive, got 0"):
        predict_brightness([0.0], [22.0], [0.1], at=0.0, reach=0.0)


def test_one_epoch_of_brightness_is_kept_with_a_growing_error():
    value, err = predict_brightness([0.0], [22.0], [0.1], at=0.0, reach=3.0)
    assert (value, err) == pytest.approx((22.0, 0.1))
    value, err = predict_brightness([0.0], [22.0], [0.1], at=1e4, reach=3.0)
    assert (value, err) == pytest.approx((22.0, np.hypot(0.1, 0.3 * np.sqrt(2.0))))
