"""Forecasts against closed forms and against arcs that move as assumed."""

import numpy as np
import pytest

from latelight.forecast.brightness import predict_brightness
from latelight.forecast.predict import MovingArc, date_moved, predict
from latelight.sky import position_angle, separation_deg

pytestmark = pytest.mark.theory

YEAR = 365.25


def arc(**changes):
    numbers = {
        "ra": 120.0,
        "dec": -35.0,
        "mjd": 61000.0,
        "pa": 130.0,
        "pa_err": 2.0,
        "speed": 18.0,
        "change": None,
        "covariance": np.diag([0.1**2, 0.4**2, 0.0]),
        "length": 45.0,
        "epochs": (60600.0, 61000.0),
    }
    return MovingArc(**{**numbers, **changes})


def test_constant_speed_moves_along_a_great_circle_by_speed_times_time():
    """Offset v t, its error sqrt(p^2 + v_err^2 t^2), across it v t times the angle."""
    there = predict(arc(), 61000.0 + 1.5 * YEAR, roughness=0.0)
    assert there.offset == pytest.approx(27.0, rel=1e-12)
    assert there.offset_err == pytest.approx(np.hypot(0.1, 0.4 * 1.5), rel=1e-12)
    assert there.across_err == pytest.approx(27.0 * np.radians(2.0), rel=1e-12)
    assert separation_deg(120.0, -35.0, there.ra, there.dec) * 3600.0 == pytest.approx(
        27.0, abs=1e-5
    )
    assert position_angle(120.0, -35.0, there.ra, there.dec) == pytest.approx(
        130.0, abs=1e-4
    )


def test_a_change_of_speed_and_the_covariance_enter_as_they_must():
    """v t + c t^2/2, with (1, t, t^2/2) C (1, t, t^2/2)^T; speed v + c t."""
    root = np.random.default_rng(3).normal(size=(3, 3)) * [[0.1], [0.4], [0.6]]
    covariance = root @ root.T
    moving = arc(change=3.0, covariance=covariance)
    # Whatever the roughness: the fit has allowed for the dust.
    there = predict(moving, 61000.0 + 2.0 * YEAR, roughness=0.3)
    weights = np.array([1.0, 2.0, 2.0])
    assert there.offset == pytest.approx(18.0 * 2.0 + 3.0 * 2.0, rel=1e-6)
    assert there.offset_err**2 == pytest.approx(
        weights @ covariance @ weights, rel=1e-6
    )
    assert there.speed == pytest.approx(24.0, rel=1e-6)


def test_rolling_dust_errs_by_nothing_at_both_epochs_and_grows_beyond():
    """Two epochs T apart: a change c errs by c t (t + T) / 2, t from the later one."""
    moving = arc(covariance=np.zeros((3, 3)))
    change = 0.1 * 18.0**2 / 45.0
    for epoch in moving.epochs:
        assert predict(moving, epoch, roughness=0.1).offset_err == pytest.approx(
            0.0, abs=1e-9
        )
    for years in (0.3, 1.0, 4.0):
        there = predict(moving, 61000.0 + years * YEAR, roughness=0.1)
        expected = 0.5 * change * years * (years + 400.0 / YEAR)
        assert there.offset_err == pytest.approx(expected, rel=1e-9)


def test_the_date_moved_is_when_the_prediction_says_so():
    for change in (None, 4.0, -4.0):
        moving = arc(change=change, covariance=np.diag([0.1, 0.3, 0.2]) ** 2)
        date = date_moved(moving, 6.0, since_mjd=61050.0)
        moved = predict(moving, date).offset - predict(moving, 61050.0).offset
        assert moved == pytest.approx(6.0, abs=1e-6)


def test_an_arc_that_stops_before_never_gets_there():
    """It turns after v^2 / (2 c) = 0.9 arcsec."""
    moving = arc(change=-180.0, covariance=np.zeros((3, 3)))
    assert date_moved(moving, 0.8, since_mjd=61000.0) is not None
    assert date_moved(moving, 1.0, since_mjd=61000.0) is None


@pytest.mark.parametrize("fitted", [False, True])
def test_pulls_of_arcs_that_move_as_assumed_are_normal(rng, fitted):
    """Four epochs measured with errors, a change of speed drawn from the prior.

    2000 draws: the standard deviation of normal pulls scatters by 1 / sqrt(4000) =
    0.016; the bounds are four of those.
    """
    t = np.array([-1.0, -0.6, -0.2, 0.0])
    powers = [np.ones(4), t, 0.5 * t**2] if fitted else [np.ones(4), t]
    design = np.stack(powers, axis=1)
    error, speed, length, at = 0.15, 18.0, 45.0, 0.8
    covariance = np.zeros((3, 3))
    n = design.shape[1]
    covariance[:n, :n] = np.linalg.inv(design.T @ design) * error**2
    pulls = []
    for _ in range(2000):
        change = rng.normal(0.0, 0.1 * speed**2 / length)
        places = speed * t + 0.5 * change * t**2 + rng.normal(0.0, error, 4)
        fit = np.linalg.lstsq(design, places, rcond=None)[0]
        moving = arc(
            speed=fit[1],
            change=fit[2] if fitted else None,
            covariance=covariance,
            length=length,
            epochs=tuple(61000.0 + YEAR * t),
        )
        there = predict(moving, 61000.0 + at * YEAR, roughness=0.1)
        truth = speed * at + 0.5 * change * at**2 - fit[0]
        pulls.append((there.offset - truth) / there.offset_err)
    assert np.std(pulls) == pytest.approx(1.0, abs=0.065)


def test_brightness_goes_from_the_last_epoch_to_the_mean():
    """Near an epoch without error: that epoch; far away: the mean of all, with the
    patches' scatter and the error of the mean, s sqrt(1 + 1/n)."""
    offsets, mags = [0.0, 100.0, 200.0], [22.0, 23.0, 22.6]
    near = predict_brightness(
        offsets, mags, [1e-6] * 3, at=200.0, reach=2.0, patchiness=0.6
    )
    assert near == pytest.approx((22.6, 0.0), abs=1e-4)
    mean, err = predict_brightness(
        offsets, mags, [1e-6] * 3, at=1e6, reach=2.0, patchiness=0.6
    )
    assert mean == pytest.approx(np.mean(mags), abs=1e-6)
    assert err == pytest.approx(0.6 * np.sqrt(4.0 / 3.0), rel=1e-6)


def test_the_error_of_the_brightness_never_shrinks_with_distance():
    errors = [
        predict_brightness([0.0, 5.0], [22.0, 22.1], [0.1, 0.1], at=at, reach=3.0)[1]
        for at in np.linspace(5.0, 60.0, 40)
    ]
    assert np.all(np.diff(errors) > -1e-12)
