"""Fields of many epochs: reproducible, as asked for, and ready to be run."""

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from latelight.config import load_config
from latelight.errors import ProductError
from latelight.origin.sources import read_source_table
from latelight.simulation.__main__ import main
from latelight.simulation.fields import random_cadence, random_field, usual_ways
from latelight.simulation.nights import write_night
from latelight.sky import position_angle, separation_deg, wrap_180


@pytest.fixture(scope="module")
def field():
    return random_field(21, size=400, n_echoes=2, n_stars=30, brightness=(22.0, 23.0))


def test_one_seed_makes_one_field():
    order = {"size": 256, "epochs": 2, "n_stars": 20, "n_echoes": 1}
    one, again, other = (random_field(s, **order) for s in (4, 4, 5))
    for a, b, c in zip(one.frames, again.frames, other.frames, strict=True):
        assert np.array_equal(a.pixels, b.pixels)
        assert a.header == b.header
        assert not np.array_equal(a.pixels, c.pixels)
    assert one.truth.echoes == again.truth.echoes
    assert one.decoys == again.decoys


def test_epochs_are_in_order_of_time_and_unlike(field):
    truth = field.truth
    assert len(field.frames) == len(truth.frames) == len(truth.mjds) == 5
    assert np.all(np.diff(truth.mjds) > 5.0)
    half_exposure_d = 60.0 / 86_400.0
    for frame, mjd in zip(field.frames, truth.mjds, strict=True):
        assert frame.header["MJD-OBS"] == pytest.approx(mjd - half_exposure_d, abs=1e-6)
    for name in ("fwhm_px", "zero_point"):
        assert len({getattr(frame, name) for frame in truth.frames}) == 5
    corners = np.array([frame.wcs.wcs.crpix for frame in truth.frames])
    assert np.all(np.ptp(corners, axis=0) > 1.0)


def test_every_echo_shines_at_every_epoch_and_moves_on(field):
    low, high = usual_ways(5)
    assert len(field.truth.echoes) == 2
    for echo in field.truth.echoes:
        way = echo.offsets_arcsec[-1] - echo.offsets_arcsec[0]
        assert 0.95 * low < way < 1.05 * high
        assert np.all(np.diff(echo.offsets_arcsec) > 0.0)
        # Nowhere less than 0.3 of the middle epoch, when the seeing is the same.
        assert np.ptp(echo.surface_brightness) < 2.0
        assert 22.0 <= echo.surface_brightness[field.truth.grid] <= 23.0
        for epoch, frame in enumerate(field.truth.frames):
            place = frame.wcs.all_world2pix(echo.ras[epoch], echo.decs[epoch], 0)
            col, row = (round(float(v)) for v in place)
            around = frame.echoes[row - 6 : row + 7, col - 6 : col + 7]
            assert around.max() > 0.3 * frame.echoes.max() / 6.0
        source = next(s for s in field.truth.sources if s.name == echo.source)
        inward = position_angle(echo.ra, echo.dec, source.ra, source.dec)
        assert abs(wrap_180(echo.normal_pa - inward)) > 130.0
        assert echo.bound_all > echo.bound_best


def test_pixels_are_carried_between_epochs(field):
    x, y = field.truth.carry(0, 4, [50.0, 300.0], [60.0, 200.0])
    back = field.truth.carry(4, 0, x, y)
    assert np.abs(back - np.array([[50.0, 300.0], [60.0, 200.0]])).max() < 1e-6
    ra, dec = field.truth.frames[0].wcs.all_pix2world(50.0, 60.0, 0)
    there = field.truth.frames[4].wcs.all_pix2world(x[0], y[0], 0)
    assert separation_deg(ra, dec, *there) * 3600.0 < 1e-5


@pytest.mark.parametrize("epochs", [2, 3, 5, 8])
def test_cadence_moves_a_usual_echo_by_what_is_usual(rng, epochs):
    for _ in range(30):
        days = random_cadence(rng, epochs, speed=8.0, width=2.0)
        assert days.size == epochs
        assert days[0] == pytest.approx(-days[-1])
        steps = 8.0 * np.diff(days) / 365.25
        # Means of 1.5-5 arcsec, single ones uneven by up to 0.65/1.35 either way.
        assert np.all((steps > 0.7) & (steps < 14.0 if epochs == 2 else steps < 10.5))
        if epochs > 2:
            assert 1.5 <= steps.mean() <= 5.0
        if epochs == 5:
            assert steps.sum() >= 3.0 * np.hypot(2.0, 1.3) - 1e-9


def test_nuisance_fields_hold_no_echo_but_a_list():
    field = random_field(5, size=256, epochs=2, kind="nuisances", n_stars=20)
    assert field.truth.echoes == ()
    assert not any(frame.echoes.any() for frame in field.truth.frames)
    assert field.truth.sources
    assert len(field.decoys) == 6


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        ({"kind": "galaxies"}, "kind must be"),
        ({"size": 200}, "at least 256"),
        ({"epochs": 1}, "epochs must be at least 2, got 1"),
        ({"size": 256, "n_echoes": 9, "epochs": 2}, "ask for fewer echoes"),
    ],
)
def test_wrong_orders_are_refused(arguments, text):
    with pytest.raises(ValueError, match=text):
        random_field(1, **arguments)


def test_frames_are_written_in_order(field, tmp_path):
    paths = field.write(tmp_path)
    assert [p.name for p in paths] == [f"epoch_{n}.fits" for n in range(1, 6)]
    for path, frame in zip(paths, field.frames, strict=True):
        with fits.open(path) as file:
            assert np.array_equal(file[0].data, frame.pixels)


def test_a_night_is_ready_to_be_run(field, tmp_path):
    sources = field.truth.sources + field.decoys
    write_night(tmp_path, [field], sources=sources, events=field.truth.sources)
    config = load_config(tmp_path / "night.toml")
    assert config.origin.source_table == str(tmp_path / "sources.ecsv")
    listed = read_source_table(tmp_path / "sources.ecsv")
    assert {s.name for s in listed} == {s.name for s in sources}
    assert len(list((tmp_path / "frames").iterdir())) == 5
    tracks = Table.read(tmp_path / "truth_tracks.ecsv")
    points = Table.read(tmp_path / "truth_track_points.ecsv")
    assert len(tracks) == 2
    assert len(points) == 10
    assert set(tracks["grid"]) == {"sim-21_3"}
    best = field.truth.echoes[0]
    assert tracks["bound_all"][0] == pytest.approx(best.bound_all, abs=1e-5)
    assert str(tracks["speed_arcsec_yr"].unit) == "arcsec / yr"
    of_first = points[points["track"] == 1]
    assert list(of_first["dec"]) == pytest.approx(best.decs, abs=1e-6)
    assert list(of_first["bound_first"]) == pytest.approx(best.bound_pairs[0], abs=1e-5)
    assert len(Table.read(tmp_path / "truth_frames.ecsv")) == 5


def test_a_folder_that_cannot_be_written_is_named(field, tmp_path):
    (tmp_path / "frames").write_text("in the way")
    with pytest.raises(ProductError, match="choose a folder"):
        write_night(tmp_path, [field], sources=field.decoys)


def test_one_field_can_be_written_for_trying_out(tmp_path, capsys):
    words = ["--field", "7", "--size", "256", "--epochs", "2", "--stars", "20"]
    assert main([*words, "--brightness", "22", "22.5", str(tmp_path)]) == 0
    assert "frames/sim-7_2.fits" in capsys.readouterr().out
    tracks = Table.read(tmp_path / "truth_tracks.ecsv")
    assert np.all(tracks["surface_brightness"] <= 22.5)
    assert len(read_source_table(tmp_path / "sources.ecsv")) >= 7
