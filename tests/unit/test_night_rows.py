"""From pixels and counts to the columns: hand-worked numbers."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from astropy.wcs import WCS

from latelight.echo.geometry import source_distance_pc
from latelight.frames.headers import FrameHeader
from latelight.night.calibration import Calibration, known, magnitude_error
from latelight.night.pairing import Pair
from latelight.night.rows import arc_row, candidate_row, residual_row
from latelight.records import (
    Arc,
    ArcTrace,
    CompactResidual,
    Motion,
    OriginScore,
    Source,
)
from latelight.sky import separation_deg

SCALE = 0.5
NEED_WCS = [
    "ra",
    "dec",
    "length",
    "width",
    "width_err",
    "surface_brightness",
    "normal_pa",
    "normal_pa_err",
    "speed",
    "speed_err",
    "curvature_radius",
]


@pytest.fixture
def wcs():
    """0.5 arcsec a pixel, north up (+y), east left (-x)."""
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [150.0, -20.0]
    wcs.wcs.crpix = [101.0, 101.0]
    wcs.wcs.cdelt = [-SCALE / 3600, SCALE / 3600]
    return wcs


def _pair(days=182.625):
    def header(name, mjd):
        return FrameHeader(
            name, Path(f"{name}.fits"), "", (200, 200), mjd, 60.0, "r", "A",
            1.0, 5.0, 6e4, 25.0, None, (),
        )  # fmt: skip

    return Pair("s-t", header("t", 60000.0), header("s", 60000.0 + days))


def _arc(**changes):
    line = np.linspace(-20.0, 20.0, 41)
    arc = Arc(
        trace=ArcTrace(np.full(41, 100.0), 100.0 + line, np.zeros(41)),
        sign=1,
        snr=12.0,
        x=100.0,
        y=100.0,
        normal_angle=0.0,
        normal_angle_err=2.0,
        curvature=0.0,
        length_px=40.0,
        width_px=3.0,
        surface_brightness_counts=8.0,
        shift_px=math.nan,
        verdict="arc",
    )
    return replace(arc, **changes)


def _motion(**changes):
    motion = Motion(
        direction_angle=180.0,
        direction_angle_err=2.0,
        shift_px=4.0,
        shift_err_px=0.4,
        x=100.0,
        y=100.0,
        width_px=3.0,
        width_err_px=0.3,
        surface_brightness_counts=10.0,
        surface_brightness_err_counts=1.0,
        sense_odds=3.0,
        chi2=1.1,
        lobes=2,
    )
    return replace(motion, **changes)


def test_magnitudes_of_counts(wcs):
    calibration = Calibration(wcs, 25.0)
    assert calibration.magnitude(100.0) == pytest.approx(20.0)
    # One count a pixel is four an arcsec^2: 25 - 2.5 log10(4).
    assert calibration.surface_brightness(1.0, 100, 100) == pytest.approx(
        23.4949, abs=1e-4
    )
    # 10.857 % is 2.5 / ln 10 / 10 mag.
    assert magnitude_error(100.0, 10.0) == pytest.approx(0.10857, abs=1e-5)


def test_depth_of_a_patch(wcs):
    # 10 arcsec^2 are 40 pixels: 5 x 10 / sqrt(40) = 7.906 counts a pixel, 31.62 an
    # arcsec^2, 3.75 mag brighter than the zero point.
    assert Calibration(wcs, 25.0).depth(10.0, (201, 201)) == pytest.approx(
        21.25, abs=1e-3
    )


@pytest.mark.parametrize("counts", [0.0, -3.0, math.nan, math.inf])
def test_what_has_no_magnitude_is_none(wcs, counts):
    assert Calibration(wcs, 25.0).magnitude(counts) is None
    assert Calibration(wcs, None).magnitude(10.0) is None
    assert known(math.nan) is None


def test_nothing_on_the_sky_without_a_wcs():
    row = candidate_row(
        _arc(), _motion(), None, pair=_pair(), calibration=Calibration(None, 25.0)
    )
    for name in NEED_WCS:
        assert getattr(row, name) is None, name
    assert row.shift_px == 4.0
    assert row.length_px == 40.0


def test_speed_and_direction_on_the_sky(wcs):
    row = candidate_row(
        _arc(), _motion(), None, pair=_pair(), calibration=Calibration(wcs, 25.0)
    )
    # 4 px of 0.5 arcsec in half a year; -x is east.
    assert row.speed == pytest.approx(4.0, rel=1e-5)
    assert row.speed_err == pytest.approx(0.4, rel=1e-5)
    assert row.normal_pa == pytest.approx(90.0, abs=1e-3)
    assert row.length == pytest.approx(20.0, rel=1e-5)
    assert row.width == pytest.approx(1.5, rel=1e-5)
    assert (row.ra, row.dec) == pytest.approx((150.0, -20.0))
    assert row.source == ""
    assert row.score is None


def test_the_speed_does_not_depend_on_which_epoch_is_the_template(wcs):
    rows = [
        candidate_row(
            _arc(),
            _motion(),
            None,
            pair=_pair(days),
            calibration=Calibration(wcs, 25.0),
        )
        for days in (100.0, -100.0)
    ]
    assert rows[0].speed == rows[1].speed > 0


def test_one_lobe_has_no_speed(wcs):
    motion = _motion(shift_px=math.nan, shift_err_px=math.nan, lobes=1)
    row = candidate_row(
        _arc(), motion, None, pair=_pair(), calibration=Calibration(wcs, 25.0)
    )
    assert row.speed is None
    assert row.shift_px is None
    assert row.normal_pa == pytest.approx(90.0, abs=1e-3)


def test_the_best_source_and_unknown_depth(wcs):
    score = OriginScore("Ember", 1.5, -12.0, 2.0)
    row = candidate_row(
        _arc(), _motion(), score, pair=_pair(), calibration=Calibration(wcs, 25.0)
    )
    assert (row.source, row.score, row.away_angle) == ("Ember", 1.5, -12.0)
    assert row.dust_depth is None


def test_the_best_source_gives_its_meaning(wcs):
    source = Source("Ember", 151.0, -20.0, 2000.0, None, 300.0, None, 60000.0)
    score = OriginScore("Ember", 1.5, -12.0, 0.94)
    row = candidate_row(
        _arc(),
        _motion(),
        score,
        pair=_pair(),
        calibration=Calibration(wcs, 25.0),
        sources=[source],
    )
    # At the science epoch, half a year after the age was given.
    expected = source_distance_pc(separation_deg(150, -20, 151, -20), 300.5, 2000.0)
    assert row.dust_distance == pytest.approx(float(expected), rel=1e-6)
    assert row.sheet_slope is not None
    assert row.implied_age is None


def test_an_arc_and_its_circle(wcs):
    calibration = Calibration(wcs, 25.0)
    straight = arc_row(_arc(curvature=1e-4), pair=_pair(), calibration=calibration)
    assert straight.curvature_radius is None  # 40^2 / 8 x 1e-4 = 0.02 px off its chord
    bent = arc_row(_arc(curvature=-0.005), pair=_pair(), calibration=calibration)
    assert bent.curvature_radius == pytest.approx(100.0)
    # The sense of an arc's normal is unknown: west, 270, reads 90.
    assert bent.normal_pa == pytest.approx(90.0, abs=1e-3)
    assert bent.shift_px is None


def test_a_fading_residual_has_a_magnitude(wcs):
    residual = CompactResidual(10.0, 20.0, -100.0, 5.0, -20.0, 2.0, "variable")
    row = residual_row(residual, pair=_pair(), calibration=Calibration(wcs, 25.0))
    assert row.magnitude == pytest.approx(20.0)
    assert row.flux == -100.0
