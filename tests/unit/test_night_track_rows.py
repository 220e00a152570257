"""From a track in pixels to its rows: hand-worked numbers."""

import math
from dataclasses import fields, replace

import numpy as np
import pytest
from astropy.wcs import WCS

from latelight.night.calibration import Calibration
from latelight.night.track_rows import (
    interpretation_rows,
    track_point_rows,
    track_row,
)
from latelight.origin.interpret import interpret
from latelight.origin.score import score_origins
from latelight.origin.settings import OriginSettings
from latelight.products.meaning_columns import MEANING_COLUMNS
from latelight.products.track_tables import (
    interpretation_table,
    track_point_table,
    track_table,
)
from latelight.records import (
    ArcTrace,
    EpochSeries,
    Source,
    Track,
    TrackPoint,
    TrackSeed,
)

SCALE = 0.5
SOURCES = (
    Source("Nova Ficta", 151.2, -20.0, 2000.0, 100.0, 300.0, 5.0, 60000.0),
    Source("Guest Ficta", 150.0, -18.0, 900.0),
)


@pytest.fixture
def calibration():
    """0.5 arcsec a pixel, north up (+y), east left (-x); one count is mag 25."""
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [150.0, -20.0]
    wcs.wcs.crpix = [101.0, 101.0]
    wcs.wcs.cdelt = [-SCALE / 3600, SCALE / 3600]
    return Calibration(wcs, 25.0)


def make_series(n=4):
    shape = (n, 8, 8)
    return EpochSeries(
        pixels=np.zeros(shape, np.float32),
        variance=np.ones(shape, np.float32),
        mask=np.zeros(shape, np.uint16),
        mjd=60000.0 + 365.25 * np.arange(n),
        fwhm_px=np.array([3.0, 5.0, 4.0, 4.0])[:n],
        noise_ratio=np.ones(n),
        names=tuple(f"frame_{i}" for i in range(n)),
    )


def make_seed(origin):
    nothing = np.zeros(1)
    trace = ArcTrace(nothing, nothing, nothing)
    return TrackSeed(trace, 0.0, math.nan, 60000.0, 4.0, 8.0, origin, 0)


def make_track(**changes):
    heights = [2.0, 8.0, math.nan, 0.5]
    line = np.linspace(-20.0, 20.0, 41)
    track = Track(
        trace=ArcTrace(np.full(41, 100.0), 100.0 + line, np.zeros(41)),
        x=100.0,
        y=100.0,
        mjd=60365.25,
        direction_angle=0.0,
        direction_angle_err=2.0,
        speed_px_yr=6.0,
        speed_err_px_yr=0.4,
        change_px_yr2=-0.2,
        change_err_px_yr2=0.1,
        place_err_px=0.3,
        covariance=np.array(
            [[0.09, 0.01, 0.02], [0.01, 0.16, 0.03], [0.02, 0.03, 0.01]]
        ),
        snr=15.0,
        length_px=40.0,
        width_px=3.0,
        width_err_px=0.2,
        sense_odds=5.0,
        chi2=1.1,
        points=tuple(
            TrackPoint(i, 60000.0 + 365.25 * i, 6.0 * (i - 1), 0.5, height, 0.5)
            for i, height in enumerate(heights)
        ),
        profile_offsets=np.arange(-3.0, 4.0),
        profiles=np.zeros((4, 7)),
        seeds=(make_seed("pair_a"), make_seed("stack")),
        verdict="track",
    )
    return replace(track, **changes)


def make_row(track, calibration, *, score=None, sources=SOURCES):
    return track_row(
        track,
        score,
        series=make_series(),
        field="A",
        filter="r",
        grid="frame_0",
        calibration=calibration,
        sources=sources,
    )


def scores_of(row):
    return score_origins(
        SOURCES,
        ra=row.ra,
        dec=row.dec,
        normal_pa=row.normal_pa,
        normal_pa_err=row.normal_pa_err,
        speed_arcsec_yr=row.speed,
        speed_err_arcsec_yr=row.speed_err,
        mjd=row.mjd,
        settings=OriginSettings(),
    )


def test_pixels_become_arcsec_along_the_motion(calibration):
    row = make_row(make_track(), calibration)
    # The plus x direction is west: position angle 270.
    assert (row.ra, row.dec) == pytest.approx((150.0, -20.0))
    assert row.normal_pa == pytest.approx(270.0, abs=1e-4)
    for name, value in {
        "place_err": 0.15,
        "length": 20.0,
        "width": 1.5,
        "width_err": 0.1,
        "speed": 3.0,
        "speed_err": 0.2,
        "speed_change": -0.1,
        "speed_change_err": 0.05,
        "place_speed_cov": 0.0025,
        "place_change_cov": 0.005,
        "speed_change_cov": 0.0075,
        "seeing": 2.0,
    }.items():
        assert getattr(row, name) == pytest.approx(value, rel=1e-6), name
    assert (row.mjd_first, row.mjd_last) == (60000.0, 60000.0 + 3 * 365.25)
    assert (row.n_epochs, row.found_in) == (3, "both")


def test_the_brightness_is_that_of_the_last_epoch_that_shows_it(calibration):
    # 8 counts a pixel are 32 an arcsec^2; the last epoch is at 1 sigma only.
    row = make_row(make_track(), calibration)
    assert row.surface_brightness == pytest.approx(25 - 2.5 * math.log10(32), abs=1e-5)
    assert row.surface_brightness_err == pytest.approx(1.0857 * 0.5 / 8, rel=1e-3)


@pytest.mark.parametrize(
    ("origins", "word"), [(["p", "q"], "pairs"), (["stack"], "stack")]
)
def test_where_it_was_found(calibration, origins, word):
    track = make_track(seeds=tuple(map(make_seed, origins)))
    assert make_row(track, calibration).found_in == word


def test_a_change_that_is_not_fitted_is_masked(calibration):
    track = make_track(
        change_px_yr2=math.nan,
        change_err_px_yr2=math.nan,
        covariance=np.array([[0.09, 0.01, 0.0], [0.01, 0.16, 0.0], [0.0, 0.0, 0.0]]),
    )
    row = make_row(track, calibration)
    assert row.place_speed_cov == pytest.approx(0.0025)
    assert (row.speed_change, row.speed_change_err) == (None, None)
    assert (row.place_change_cov, row.speed_change_cov) == (None, None)


def test_points_are_masked_where_nothing_is_known(calibration):
    track = make_track()
    points = list(track.points)
    points[3] = replace(points[3], offset_px=math.nan, offset_err_px=math.nan)
    rows = track_point_rows(
        replace(track, points=tuple(points)),
        series=make_series(),
        calibration=calibration,
    )
    assert [row.frame for row in rows] == [f"frame_{i}" for i in range(4)]
    assert [row.offset for row in rows][:3] == pytest.approx([-3.0, 0.0, 3.0])
    assert (rows[3].offset, rows[3].offset_err) == (None, None)
    assert (rows[2].height_counts, rows[2].surface_brightness) == (None, None)
    assert rows[0].surface_brightness_err == pytest.approx(1.0857 * 0.25, rel=1e-3)
    track_point_table(rows)


def test_the_best_source_gives_the_row_its_meaning(calibration):
    bare = make_row(make_track(), calibration)
    score = scores_of(bare)[0]
    assert score.source == "Nova Ficta"
    row = make_row(make_track(), calibration, score=score)
    meaning = interpret(
        SOURCES[0],
        ra=row.ra,
        dec=row.dec,
        normal_pa=row.normal_pa,
        normal_pa_err=row.normal_pa_err,
        speed_arcsec_yr=row.speed,
        speed_err_arcsec_yr=row.speed_err,
        mjd=row.mjd,
    )
    for column in MEANING_COLUMNS:
        assert getattr(row, column.name) == getattr(meaning, column.name), column.name
        assert getattr(bare, column.name) is None
    assert row.source_separation == meaning.separation
    track_table([bare, row])


def test_every_scored_source_has_its_interpretation(calibration):
    row = replace(make_row(make_track(), calibration), id="J1")
    scores = scores_of(row)
    rows = interpretation_rows(row, scores, sources=SOURCES)
    assert [r.source for r in rows] == [s.source for s in scores]
    assert {(r.id, r.kind) for r in rows} == {("J1", "track")}
    ageless = next(r for r in rows if r.source == "Guest Ficta")
    assert ageless.dust_depth is None
    assert "age of the source not given" in ageless.remark
    interpretation_table(rows)


def test_without_a_wcs_only_pixels_are_left():
    calibration = Calibration(None, 25.0)
    row = make_row(make_track(), calibration)
    known = {
        field.name
        for field in fields(row)
        if isinstance(getattr(row, field.name), float)
    }
    assert known == {
        "mjd", "mjd_first", "mjd_last", "snr", "x", "y", "normal_angle",
        "normal_angle_err", "length_px", "width_px", "sense_odds", "chi2", "speed_px",
        "speed_err_px",
    }  # fmt: skip
    assert interpretation_rows(row, (), sources=SOURCES) == ()
    points = track_point_rows(
        make_track(), series=make_series(), calibration=calibration
    )
    assert points[1].height_counts == 8.0
    assert points[1].offset is None
    track_table([row])
