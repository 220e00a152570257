"""Arguments of the light-echo geometry."""

import numpy as np
import pytest

from latelight.echo import geometry, paraboloid
from latelight.echo.constants import LIGHT_PC_PER_YEAR


@pytest.mark.parametrize(
    ("args", "message"),
    [
        ((1.0, 4000.0, 3000.0), "depth_pc must be less than distance_pc, got 4000"),
        ((1.0, 3000.0, 3000.0), "depth_pc must be less than distance_pc, got 3000"),
        ((-1.0, 10.0, 3000.0), r"theta_deg must be in \[0, 90\), got -1"),
        ((90.0, 10.0, 3000.0), r"theta_deg must be in \[0, 90\), got 90"),
        ((1.0, 10.0, 0.0), "distance_pc must be positive and finite, got 0"),
        ((1.0, 10.0, np.inf), "distance_pc must be positive and finite, got inf"),
        ((np.nan, 10.0, 3000.0), r"theta_deg must be in \[0, 90\), got nan"),
    ],
)
@pytest.mark.parametrize(
    "function", [geometry.delay_yr, paraboloid.paraboloid_delay_yr]
)
def test_impossible_place_is_refused(function, args, message):
    with pytest.raises(ValueError, match=message):
        function(*args)


@pytest.mark.parametrize("age", [0.0, -1.0, np.nan, np.inf])
@pytest.mark.parametrize(
    "function",
    [
        geometry.depth_pc,
        geometry.speed_arcsec_yr,
        geometry.delay_gradient,
        paraboloid.paraboloid_depth_pc,
    ],
)
def test_impossible_age_is_refused(function, age):
    with pytest.raises(ValueError, match="age_yr must be positive and finite"):
        function(1.0, age, 3000.0)


def test_refusal_names_the_first_bad_value_of_an_array():
    with pytest.raises(ValueError, match="got -2"):
        geometry.depth_pc([1.0, -2.0, -3.0], 100.0, 3000.0)


def test_arguments_broadcast():
    depth = geometry.depth_pc([[1.0], [2.0]], [100.0, 200.0, 300.0], 3000.0)
    assert depth.shape == (2, 3)
    assert depth[1, 2] == geometry.depth_pc(2.0, 300.0, 3000.0)


def test_number_in_gives_number_out():
    assert isinstance(float(geometry.depth_pc(1.0, 100.0, 3000.0)), float)
    assert np.ndim(geometry.speed_arcsec_yr(1.0, 100.0, 3000.0)) == 0


def test_tangent_sheet_moves_infinitely_fast():
    """rho = ct = 1 pc exactly: a slope of one is tangent to the paraboloid."""
    theta = np.degrees(1.0 / 1000.0)
    speed = paraboloid.paraboloid_speed_arcsec_yr(
        theta,
        1.0 / LIGHT_PC_PER_YEAR,
        1000.0,
        [0.999, 1.001],
        error_arcsec_yr=np.inf,
    )
    assert speed[0] > 1e4
    assert speed[1] < -1e4
