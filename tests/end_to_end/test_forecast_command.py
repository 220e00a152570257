"""``latelight forecast`` on hand-made tables of a night."""

from dataclasses import fields

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS
from PIL import Image

from latelight.cli import main
from latelight.products.rows import CandidateRow, PairRow
from latelight.products.tables import write_tables
from latelight.products.track_rows import TrackPointRow, TrackRow
from latelight.products.track_tables import write_track_tables
from latelight.sky import offset_position, separation_deg

pytestmark = pytest.mark.e2e

YEAR = 365.25
RA, DEC = 359.999, -41.3  # within an arc's length of RA = 0


def made(row_type, **known):
    """Return a row with what is given; the rest unknown, empty or zero."""
    plain = {
        f.name: None if "None" in f.type else "" if f.type == "str" else 0
        for f in fields(row_type)
    }
    return row_type(**{**plain, **known})


def track(name="J1", **changes):
    known = {
        "id": name, "field": "LARK", "filter": "r", "grid": "lark_1", "mjd": 61000.0,
        "mjd_first": 60300.0, "mjd_last": 61000.0, "n_epochs": 5, "ra": RA, "dec": DEC,
        "place_err": 0.1, "snr": 30.0, "length": 40.0, "width": 3.0, "normal_pa": 90.0,
        "normal_pa_err": 1.0, "speed": 20.0, "speed_err": 0.3, "verdict": "track",
        "candidates": "C1", "seeing": 1.2, "sense_odds": 9.0,
    }  # fmt: skip
    return made(TrackRow, **{**known, **changes})


def candidate(name, **changes):
    known = {
        "id": name, "field": "LARK", "template": "lark_1", "science": "lark_2",
        "mjd_template": 60300.0, "mjd_science": 60700.0, "ra": 0.004, "dec": DEC,
        "snr": 12.0, "length": 35.0, "width": 2.0, "normal_pa": 45.0,
        "normal_pa_err": 2.0, "speed": 15.0, "speed_err": 0.8, "verdict": "arc",
        "pair": "lark_2-lark_1", "lobes": 2, "surface_brightness": 23.0,
        "surface_brightness_err": 0.1,
    }  # fmt: skip
    return made(CandidateRow, **{**known, **changes})


def cutout(path):
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval, wcs.wcs.crpix = [RA, DEC], [60.5, 60.5]
    wcs.wcs.cdelt = [-0.5 / 3600.0, 0.5 / 3600.0]
    pixels = np.random.default_rng(1).normal(0.0, 5.0, (120, 120)).astype(np.float32)
    image = fits.ImageHDU(pixels, header=wcs.to_header(), name="SCIENCE")
    fits.HDUList([fits.PrimaryHDU(), image]).writeto(path)


@pytest.fixture
def night(tmp_path):
    """A night with a track, a candidate on it, one beside it and one of one lobe."""
    folder = tmp_path / "night"
    (folder / "cutouts").mkdir(parents=True)
    pair = made(PairRow, pair="lark_2-lark_1", status="done", seeing_science=1.1)
    write_tables(
        folder,
        candidates=[
            candidate("C1"), candidate("C2"), candidate("C3", speed=None, lobes=1),
        ],
        arcs=[], pairs=[pair], residuals=[],
    )  # fmt: skip
    points = [
        made(
            TrackPointRow, track="J1", frame=f"lark_{n}", mjd=mjd,
            offset=20.0 * (mjd - 61000.0) / YEAR, offset_err=0.2,
            surface_brightness=22.5 + 0.1 * n, surface_brightness_err=0.05,
        )
        for n, mjd in enumerate(np.linspace(60300.0, 61000.0, 5))
    ]  # fmt: skip
    write_track_tables(
        folder,
        tracks=[track(), track("J2", verdict="trail", candidates="")],
        points=points,
        interpretations=[],
    )
    for name in ("J1", "C2"):
        cutout(folder / "cutouts" / f"{name}.fits")
    return folder


def table(folder):
    return Table.read(folder / "forecast.ecsv")


def test_a_forecast_leaves_a_table_and_charts(night, capsys):
    assert main(["forecast", str(night), "--at", str(61000.0 + YEAR)]) == 0
    rows = table(night)
    assert list(rows["id"]) == ["J1", "C2"]  # C1 is on the track, C3 has no speed
    assert list(rows["kind"]) == ["track", "candidate"]
    ra, dec = offset_position(RA, DEC, 90.0, 20.0 / 3600.0)
    apart = separation_deg(ra, dec, rows["ra"][0], rows["dec"][0]) * 3600.0
    assert apart < 0.01
    assert rows["ra"][0] < 1.0  # it crossed RA = 0
    # A slit has no head: 180 is 0.
    assert np.sin(np.radians(rows["slit_pa_along"][0])) == pytest.approx(0.0, abs=1e-3)
    assert rows["slit_pa_motion"][0] == pytest.approx(90.0, abs=0.02)
    assert rows["mjd_moved_3"][0] == pytest.approx(
        61000.0 + 3.6 / 20.0 * YEAR, abs=0.01
    )
    assert 22.5 < rows["surface_brightness"][0] < 22.95
    assert not np.ma.is_masked(rows["surface_brightness"])
    assert list(rows["in_field"]) == ["unknown", "unknown"]
    for column in rows.colnames:
        info = rows[column].info
        assert info.description
        assert info.meta["ucd"]
    for name in ("J1", "C2"):
        with Image.open(night / "forecast" / f"{name}.png") as chart:
            assert min(chart.size) > 800
    said = capsys.readouterr().out
    assert "2 arcs in" in said
    assert "2 charts, 3 left out" in said


def test_an_iso_date_is_the_mjd(night, tmp_path):
    for where, at in (("a", "2026-02-12T12:00"), ("b", "61083.5")):
        folder = tmp_path / where
        arguments = ["forecast", str(night), "--at", at, "--output", str(folder)]
        assert main(arguments) == 0
    assert (tmp_path / "a" / "forecast.ecsv").read_bytes() == (
        tmp_path / "b" / "forecast.ecsv"
    ).read_bytes()


def test_a_hindcast_and_a_hopeless_date_say_so(night):
    assert main(["forecast", str(night), "--at", "60500", "--id", "J1"]) == 0
    (row,) = table(night)
    assert "hindcast" in row["remark"]
    assert row["offset"] < 0.0
    assert main(["forecast", str(night), "--at", "2190-01-01", "--id", "J1"]) == 0
    (row,) = table(night)
    assert "the error exceeds the arc's length" in row["remark"]


def test_without_a_zero_point_the_brightness_is_masked(night):
    write_tables(
        night,
        candidates=[candidate("C2", surface_brightness=None)],
        arcs=[], pairs=[], residuals=[],
    )  # fmt: skip
    assert main(["forecast", str(night), "--at", "61100", "--id", "C2"]) == 0
    rows = table(night)
    assert rows["surface_brightness"].mask.all()
    assert rows["mjd_moved_1"].mask.all()  # nor is there a seeing


def test_an_arc_without_a_cutout_has_no_chart_but_a_row(night, capsys):
    (night / "cutouts" / "C2.fits").unlink()
    assert main(["forecast", str(night), "--at", "61100"]) == 0
    said = capsys.readouterr()
    assert "no chart of C2" in said.err
    assert len(table(night)) == 2


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--id", "J9"], "hold no arc 'J9'"),
        (["--id", "j1"], "hold no arc 'j1'"),
        (["--id", "C1"], "no forecast for 'C1': is on track J1"),
        (["--id", "C3"], "no forecast for 'C3': no speed: only one lobe shows"),
        (["--id", "J2"], "no forecast for 'J2': set aside as 'trail'"),
    ],
)
def test_arcs_that_cannot_be_forecast(night, capsys, arguments, message):
    assert main(["forecast", str(night), "--at", "61100", *arguments]) == 2
    assert message in capsys.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--at", "tomorrow"], "must be a date such as"),
        (["--at", "2027"], "must be an MJD from"),
        (["--at", "61000", "--slit-width", "0"], "a number of arcsec above 0, got '0'"),
        ([], "--at"),
    ],
)
def test_wrong_usage(night, capsys, arguments, message):
    with pytest.raises(SystemExit) as ended:
        main(["forecast", str(night), *arguments])
    assert ended.value.code == 2
    assert message in capsys.readouterr().err


def test_a_folder_without_tables(tmp_path, capsys):
    assert main(["forecast", str(tmp_path), "--at", "61000"]) == 2
    assert "candidates.ecsv: does not exist" in capsys.readouterr().err
    assert main(["forecast", str(tmp_path / "none"), "--at", "61000"]) == 2
    assert "give the output folder of a finished night" in capsys.readouterr().err


def test_the_shape_of_a_track_is_that_of_its_trace(night, tmp_path):
    """A trace on a circle of 60 arcsec about a point behind: ahead is -s^2 / 120."""
    from latelight.reports.finder_ground import arc_shape
    from latelight.reports.moving_arcs import read_arcs

    arc = read_arcs(night).arcs[0].arc
    along = np.linspace(-15.0, 15.0, 31)
    ahead = np.sqrt(60.0**2 - along**2) - 60.0
    pa = arc.pa + np.degrees(np.arctan2(along, ahead))
    ra, dec = offset_position(arc.ra, arc.dec, pa, np.hypot(along, ahead) / 3600.0)
    columns = [
        fits.Column(name=name, format="D", array=values)
        for name, values in (("ra", ra), ("dec", dec))
    ]
    table_hdu = fits.BinTableHDU.from_columns(columns, name="TRACE")
    path = tmp_path / "track.fits"
    fits.HDUList([fits.PrimaryHDU(), table_hdu]).writeto(path)
    shape = arc_shape(path, arc)
    assert shape.along == pytest.approx(along, abs=1e-3)
    assert shape.ahead == pytest.approx(ahead, abs=1e-3)
    assert not arc_shape(night / "cutouts" / "C2.fits", arc).ahead.any()
