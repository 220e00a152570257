"""Cutouts and pictures of tracks."""

from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS
from PIL import Image

from latelight.masks import MaskBit
from latelight.products.captions import track_facts
from latelight.products.coadding import part_moving
from latelight.products.position_time import draw_position_time, place_strips
from latelight.products.settings import ProductSettings
from latelight.products.track_columns import TRACK_COLUMNS
from latelight.products.track_cutouts import (
    TRACK_CARDS,
    cut_out_track,
    moved_px,
    write_track_cutout,
)
from latelight.products.track_picture import draw_track_picture, write_track_picture
from latelight.products.track_rows import TrackRow
from latelight.records import ArcTrace, EpochSeries, Track, TrackPoint

SETTINGS = ProductSettings()
SIZE, SIGMA, SPEED, HEIGHT = 160, 2.0, 8.0, 30.0


def make_wcs():
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [161.0, -60.0]
    wcs.wcs.crpix = [80.0, 80.0]
    wcs.wcs.cd = np.array([[-0.25, 0.0], [0.0, 0.25]]) / 3600
    return wcs


def make_row(**changes):
    values = {}
    for column in TRACK_COLUMNS:
        values[column.name] = {"text": "", "integer": 5, "real": None}[column.kind]
    values |= {
        "id": "J104412.12-601601.6_track",
        "field": "F1",
        "filter": "r",
        "grid": "f0",
        "mjd": 60365.25,
        "mjd_first": 60000.0,
        "mjd_last": 60730.5,
        "snr": 20.0,
        "ra": 161.0,
        "dec": -60.0,
        "normal_pa": 270.0,
        "normal_pa_err": 2.0,
        "speed": 2.0,
        "speed_err": 0.1,
        "source": "Nova Ficta 1604",
        "away_angle": 8.0,
        "score": 1.2,
        "found_in": "both",
        "verdict": "track",
        "x": 80.0,
        "y": 80.0,
        "normal_angle": 0.0,
        "normal_angle_err": 2.0,
        "length_px": 40.0,
        "width_px": 3.0,
    }
    return TrackRow(**(values | changes))


class Scene:
    """A straight vertical ridge that moves by 8 pixels a year to the right."""

    def __init__(self, *, years=(0.0, 0.5, 1.0, 1.5, 2.0), x=80.0, y=80.0):
        rng = np.random.default_rng(5)
        years = np.asarray(years)
        n = years.size
        offsets = SPEED * (years - years.mean())
        rows, columns = np.mgrid[:SIZE, :SIZE].astype(float)
        light = HEIGHT * (np.abs(rows - y) <= 20.0)
        pixels = rng.normal(0.0, SIGMA, (n, SIZE, SIZE)) + [
            light * np.exp(-((columns - x - at) ** 2) / 8) for at in offsets
        ]
        mask = np.zeros(pixels.shape, np.uint16)
        mask[:, :, 110] = MaskBit.BAD_COLUMN
        mjd = 60000.0 + 365.25 * years
        self.series = EpochSeries(
            pixels=np.where(mask == 0, pixels, 0.0).astype(np.float32),
            variance=np.full(pixels.shape, SIGMA**2, np.float32),
            mask=mask,
            mjd=mjd,
            fwhm_px=np.full(n, 3.0),
            noise_ratio=np.ones(n),
            names=tuple(f"f{i}" for i in range(n)),
        )
        along = np.arange(y - 20.0, y + 21.0)
        grid = np.arange(-30.0, 31.0)
        self.track = Track(
            trace=ArcTrace(np.full(41, x), along, np.zeros(41)),
            x=x,
            y=y,
            mjd=float(mjd.mean()),
            direction_angle=0.0,
            direction_angle_err=2.0,
            speed_px_yr=SPEED,
            speed_err_px_yr=0.4,
            change_px_yr2=np.nan,
            change_err_px_yr2=np.nan,
            place_err_px=0.3,
            covariance=np.array([[0.09, 0.0, 0.0], [0.0, 0.16, 0.0], [0.0, 0.0, 0.0]]),
            snr=20.0,
            length_px=40.0,
            width_px=3.0,
            width_err_px=0.2,
            sense_odds=5.0,
            chi2=1.0,
            points=tuple(
                TrackPoint(i, float(m), float(at), 0.3, HEIGHT, 3.0)
                for i, (m, at) in enumerate(zip(mjd, offsets, strict=True))
            ),
            profile_offsets=grid,
            profiles=HEIGHT * np.exp(-((grid - offsets[:, None]) ** 2) / 8),
            seeds=(),
            verdict="track",
        )

    def cut(self, *, wcs=True, settings=SETTINGS, **changes):
        return cut_out_track(
            make_row(**changes),
            track=self.track,
            series=self.series,
            wcs=make_wcs() if wcs else None,
            settings=settings,
        )


def test_every_field_of_a_track_has_its_own_header_keyword():
    assert list(TRACK_CARDS) == [column.name for column in TRACK_COLUMNS]
    keywords = [keyword for keyword, _ in TRACK_CARDS.values()]
    assert len(set(keywords)) == len(keywords)
    for keyword in keywords:
        assert len(keyword) <= 8
        assert keyword.replace("-", "").isalnum()
        assert keyword == keyword.upper()


def test_place_and_error_at_other_dates():
    """Two years on: 2 v + 2 c pixels, and v^2 = c00 + 4 c01 + 4 c02 + 4 c11 + ..."""
    covariance = np.array([[4.0, 1.0, 0.5], [1.0, 9.0, 2.0], [0.5, 2.0, 1.0]])
    track = replace(Scene().track, change_px_yr2=0.5, covariance=covariance)
    offset, err = moved_px(track, np.array([track.mjd, track.mjd + 730.5]))
    np.testing.assert_allclose(offset, [0.0, 2 * SPEED + 2 * 0.5])
    terms = np.array([1.0, 2.0, 2.0])
    np.testing.assert_allclose(err, [2.0, np.sqrt(terms @ covariance @ terms)])


def test_the_cutout_holds_the_ridge_at_all_epochs():
    scene = Scene()
    cutout = scene.cut()
    n, side = cutout.epochs.shape[:2]
    assert (n, side % 2) == (5, 1)
    for x, y in ((72, 60), (88, 60), (72, 100), (88, 100)):
        assert 20 <= x - cutout.x0 < side - 20
        assert 20 <= y - cutout.y0 < side - 20
    np.testing.assert_array_equal(cutout.track.trace.x + cutout.x0, 80.0)
    assert (cutout.track.x + cutout.x0, cutout.track.y + cutout.y0) == (80.0, 80.0)
    bad = 110 - cutout.x0
    assert np.isnan(cutout.epochs[:, :, bad]).all()
    assert np.isfinite(np.delete(cutout.epochs, bad, axis=2)).all()
    np.testing.assert_allclose(cutout.noise, SIGMA)
    assert cutout.scale == pytest.approx(0.25, rel=1e-6)


def test_an_edge_cutout_keeps_its_size():
    inner, edge = Scene().cut(), Scene(x=5.0, y=150.0).cut()
    assert edge.epochs.shape == inner.epochs.shape
    rows, columns = np.indices(edge.moving.shape)
    x, y = columns + edge.x0, rows + edge.y0
    outside = (x < 0) | (y < 0) | (x >= SIZE) | (y >= SIZE)
    assert outside.any()
    assert np.isnan(edge.epochs[:, outside]).all()
    assert np.isfinite(edge.moving[~outside]).mean() > 0.9
    # Eight pixels of motion bring no data farther out than that.
    assert np.isnan(edge.moving[(x < -10) | (y >= SIZE + 2)]).all()


def test_cutout_size_is_bounded():
    cutout = Scene().cut(settings=ProductSettings(max_cutout_px=65))
    assert cutout.epochs.shape == (5, 65, 65)


def test_a_track_of_another_series_is_refused():
    scene = Scene()
    scene.track = replace(scene.track, points=scene.track.points[:3])
    with pytest.raises(ValueError, match="5 epochs of the series, got 3"):
        scene.cut()


def test_what_moves_is_parted_from_what_stands_still():
    """Without noise: a moving ridge to 10 %, a still one to less than 10 % of it."""
    rows, columns = np.mgrid[:80, :80].astype(float)
    steps = np.array([-20.0, -10.0, 0.0, 10.0, 20.0])
    still = 50.0 * np.exp(-((rows - 20) ** 2 + (columns - 40) ** 2) / 8)
    pixels = np.array(
        [still + 10.0 * np.exp(-((columns - 40 - s) ** 2) / 8) for s in steps]
    )
    weight = np.ones(pixels.shape)
    pixels[2, :, 40], weight[2, :, 40] = 0.0, 0.0
    zero = np.zeros(5)
    moving, stood = part_moving(
        pixels.astype(np.float32), weight, step_x=steps, step_y=zero
    )
    profile = moving[60] - np.median(moving[60])
    assert profile[40] == pytest.approx(10.0, rel=0.1)
    assert int(profile.argmax()) == 40
    assert abs(moving[20, 40] - moving[60, 40]) < 5.0
    assert stood[20, 40] - np.median(stood) == pytest.approx(50.0, rel=0.1)


def test_a_place_without_data_is_blank_in_the_sum():
    weight = np.ones((3, 20, 20))
    weight[:, :5] = 0.0
    zero = np.zeros(3)
    moving, stood = part_moving(
        np.ones((3, 20, 20), np.float32), weight, step_x=zero, step_y=zero
    )
    assert np.isnan(moving[:5]).all()
    np.testing.assert_array_equal(np.isnan(stood), np.isnan(moving))
    assert np.isfinite(moving[5:]).all()


def test_the_sum_along_the_motion_shows_the_arc_at_the_reference_epoch():
    scene = Scene(years=(0.0, 1.0, 2.0, 3.0, 4.0))
    cutout = scene.cut()
    column = int(cutout.track.x)
    rows = slice(int(cutout.track.y) - 15, int(cutout.track.y) + 16)
    profile = np.nanmean(cutout.moving[rows], axis=0)
    near = profile[column - 8 : column + 9]
    assert int(np.nanargmax(near)) == 8
    assert near[8] > 0.7 * HEIGHT


def test_track_cutout_file(tmp_path):
    cutout = Scene().cut(candidates=" ".join(f"J0000{i:05}-000000.0" for i in range(9)))
    path = tmp_path / "track.fits"
    write_track_cutout(path, cutout)
    with fits.open(path, checksum=True) as hdus:
        names = [hdu.name for hdu in hdus][1:]
        epochs = [f"EPOCH{i}" for i in range(1, 6)]
        assert names == ["MOVING", "STILL", *epochs, "PROFILES", "POINTS", "TRACE"]
        header = hdus[0].header
        assert (header["ID"], header["SPEED"]) == ("J104412.12-601601.6_track", 2.0)
        assert header.comments["SPEED"] == "[arcsec/yr] along the normal"
        assert header["DEPTH"] is None
        assert header["CANDIDAT"] == cutout.row.candidates
        np.testing.assert_array_equal(hdus["EPOCH3"].data, cutout.epochs[2])
        assert hdus["EPOCH3"].header["FRAME"] == "f2"
        assert hdus["EPOCH3"].header["MJD-AVG"] == 60365.25
        sky = WCS(hdus["MOVING"].header).all_pix2world(3.0, 4.0, 0)
        parent = make_wcs().all_pix2world(3.0 + cutout.x0, 4.0 + cutout.y0, 0)
        np.testing.assert_allclose(sky, parent, rtol=0, atol=1e-9)
        for hdu in hdus[1:]:
            assert {"DATASUM", "CHECKSUM"} <= set(hdu.header)
    profiles, points, trace = (
        Table.read(path, hdu=name) for name in ("PROFILES", "POINTS", "TRACE")
    )
    track = cutout.track
    np.testing.assert_allclose(profiles["offset"], 0.25 * track.profile_offsets)
    np.testing.assert_allclose(profiles["epoch2"], track.profiles[1], atol=1e-5)
    assert list(points["frame"]) == [f"f{i}" for i in range(5)]
    np.testing.assert_allclose(points["fitted_px"], SPEED * np.arange(-1, 1.1, 0.5))
    np.testing.assert_allclose(
        points["fitted_err_px"], np.hypot(0.3, 0.4 * np.arange(-1, 1.1, 0.5))
    )
    np.testing.assert_array_equal(trace["x"], track.trace.x)


@pytest.mark.parametrize("n", [2, 3, 5, 12, 40])
def test_strips_follow_time_and_never_overlap(n):
    rng = np.random.default_rng(n)
    mjd = np.sort(np.append(rng.uniform(0.0, 1000.0, n - 2), [0.0, 1000.0]))
    mjd[: n // 3] = mjd[0]
    middle, thick = place_strips(mjd, 500.0)
    assert np.diff(middle).min() >= thick - 1e-9
    assert middle[0] - thick / 2 >= 0.0
    assert middle[-1] + thick / 2 <= 500.0 + 1e-9
    assert thick >= min(26.0, 0.8 * 500.0 / n) - 1e-9


def test_even_epochs_are_spread_evenly():
    middle, _ = place_strips(np.array([0.0, 250.0, 500.0, 1000.0]), 500.0)
    np.testing.assert_allclose(np.diff(middle) / np.diff(middle)[0], [1.0, 1.0, 2.0])


def test_the_strips_are_orange_where_the_ridge_was():
    """In each strip the centroid of the orange is where the axis puts the ridge."""
    cutout = Scene().cut()
    picture = Image.new("RGB", (608, 524))
    limit = draw_position_time(picture, cutout, corner=(0, 0), size=(608, 524))
    assert limit == pytest.approx(1.2 * HEIGHT)
    image = np.asarray(picture).astype(float)
    middle, thick = place_strips(cutout.mjd, 500.0)
    offset, _ = cutout.offsets(cutout.mjd)
    columns, dots = [], []
    for y in middle:
        dark = image[round(y) - 1 : round(y) + 2, 109:540].sum(axis=(0, 2))
        dots.append(np.median(np.flatnonzero(dark < 450.0)))
        # The line of the fit hides the ridge where it crosses: look on both sides.
        rows = image[int(y - 0.45 * thick) + 2 : int(y + 0.45 * thick) - 2, 109:540]
        orange = np.median(rows[..., 0] - rows[..., 2], axis=0)
        orange[orange < 20.0] = 0.0  # the paper
        columns.append((orange * np.arange(orange.size)).sum() / orange.sum())
    # Four PSF widths and half the arc's, 13.5 pixels, to either side of -8 to 8: the
    # whole pixels in that are 43, on 500 pixels of the panel.
    expected = (offset + 21.5) / 43.0 * 500.0 - 1.0
    np.testing.assert_allclose(columns, expected, atol=1.5)
    # The points of the epochs stand on their ridges.
    np.testing.assert_allclose(dots, expected, atol=1.5)


@pytest.mark.parametrize(
    ("years", "wcs"),
    [((0.0, 1.0, 2.0), True), (np.arange(12.0) / 3.0, True), ((0.0, 0.1, 3.0), False)],
)
def test_pictures_are_drawn_whatever_is_missing(tmp_path, years, wcs):
    scene = Scene(years=years)
    points = list(scene.track.points)
    points[0] = replace(
        points[0], offset_px=np.nan, offset_err_px=np.nan,
        height_counts=np.nan, height_err_counts=np.nan,
    )  # fmt: skip
    profiles = scene.track.profiles.copy()
    profiles[0, 20:] = np.nan
    scene.track = replace(scene.track, points=tuple(points), profiles=profiles)
    bare = {} if wcs else {"speed": None, "normal_pa": None, "source": ""}
    cutout = scene.cut(wcs=wcs, **bare)
    picture = draw_track_picture(cutout, settings=SETTINGS)
    assert picture.size == (1422, 684)
    for name in ("a", "b"):
        write_track_picture(tmp_path / f"{name}.png", cutout, settings=SETTINGS)
        write_track_cutout(tmp_path / f"{name}.fits", cutout)
    for kind in ("png", "fits"):
        first, second = (tmp_path / f"{name}.{kind}" for name in "ab")
        assert first.read_bytes() == second.read_bytes()


def test_the_head_line_tells_the_motion():
    row = make_row(speed_change=-0.021, speed_change_err=0.008, sense_odds=0.2)
    told = dict(track_facts(row))
    assert told["significance"] == "S/N 20.0 in 5 epochs"
    assert told["speed along the normal"] == (
        "2.00 ± 0.10 arcsec/yr (-0.021 ± 0.008 a year)"
    )
    assert told["towards"] == "PA 270.0 ± 2.0° (sense unsure)"
    assert told["origin"] == "Nova Ficta 1604 · score +1.2 · +8° off"
    bare = make_row(speed=None, speed_px=8.0, speed_err_px=0.4, normal_pa=None)
    assert dict(track_facts(bare))["speed along the normal"] == "8.0 ± 0.4 px/yr"


def test_the_arc_on_the_template_shows_but_once():
    """An image taken from all epochs is taken from what stands still, and no more."""
    scene = Scene(years=(0.0, 1.0, 2.0, 3.0, 4.0))
    plain = scene.cut()
    pixels = scene.series.pixels - scene.series.pixels[1]
    scene.series = replace(scene.series, pixels=pixels)
    cutout = scene.cut()
    assert not cutout.epochs[1][:, :20].any()
    gap = (cutout.epochs - cutout.still) - (plain.epochs - plain.still)
    assert np.nanmax(np.abs(gap)) < 1e-4 * HEIGHT
