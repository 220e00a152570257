"""``latelight origins`` as a user runs it, on tables written by hand."""

import json

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS
from astropy_healpix import HEALPix
from PIL import Image

from latelight.cli import main
from latelight.origin.settings import OriginSettings
from latelight.products.rows import CandidateRow
from latelight.products.tables import candidate_table, make_table, to_ecsv
from latelight.products.track_columns import TRACK_COLUMNS
from latelight.products.track_rows import TrackRow
from latelight.sky import offset_position, position_angle

pytestmark = pytest.mark.e2e

EVENT = (359.2, 41.0)
FILES = ["origin_arcs.ecsv", "origin_map.fits", "origins.ecsv", "origins.png"]


def candidate(name, ra, dec, pa, **changes):
    unknown = {
        field: None
        for field, kind in CandidateRow.__annotations__.items()
        if "None" in str(kind)
    }
    row = {
        **unknown,
        "id": name, "field": "F", "filter": "r", "template": "F_1", "science": "F_2",
        "mjd_template": 60000.0, "mjd_science": 60365.25,
        "snr": 20.0, "length": 40.0, "width": 3.0,
        "normal_pa": float(pa) % 360.0, "normal_pa_err": 2.0, "speed": 15.0,
        "speed_err": 1.0, "source": "", "verdict": "arc", "pair": "F_2-F_1",
        "x": 1.0, "y": 1.0, "normal_angle": 0.0, "normal_angle_err": 2.0,
        "length_px": 100.0, "width_px": 8.0, "surface_brightness_counts": 9.0,
        "sense_odds": 5.0, "lobes": 2, "track": "",
    }  # fmt: skip
    place = {} if ra is None else {"ra": float(ra), "dec": float(dec)}
    return CandidateRow(**{**row, **place, **changes})


def track(name, ra, dec, pa, **changes):
    unknown = {
        field: None
        for field, kind in TrackRow.__annotations__.items()
        if "None" in str(kind)
    }
    row = {
        **unknown,
        "id": name, "field": "F", "filter": "r", "grid": "F_1", "mjd": 60200.0,
        "mjd_first": 60000.0, "mjd_last": 60400.0, "n_epochs": 5, "ra": float(ra),
        "dec": float(dec), "snr": 30.0, "length": 40.0, "width": 3.0,
        "normal_pa": float(pa) % 360.0, "normal_pa_err": 1.0, "speed": 15.0,
        "speed_err": 0.3, "source": "", "found_in": "pairs", "candidates": "",
        "verdict": "track", "x": 1.0, "y": 1.0, "normal_angle": 0.0,
        "normal_angle_err": 1.0, "length_px": 100.0, "width_px": 8.0,
        "sense_odds": 9.0,
    }  # fmt: skip
    return TrackRow(**{**row, **changes})


def write_night(folder, candidates, *, tracks=None, sources=(), record=True):
    folder.mkdir(parents=True)
    (folder / "candidates.ecsv").write_bytes(to_ecsv(candidate_table(candidates)))
    if tracks is not None:
        table = make_table("tracks", tracks, TRACK_COLUMNS)
        (folder / "tracks.ecsv").write_bytes(to_ecsv(table))
    if record:
        settings = {"origin": OriginSettings().model_dump(), "sources": list(sources)}
        (folder / "run.json").write_text(json.dumps({"settings": settings}))
    return folder


def lit(rng, count=18, *, event=EVENT, distance=(0.5, 2.0), start=0):
    """Candidates all round an event, turned by 6 degrees."""
    ra, dec = offset_position(
        *event, np.arange(count) * 360.0 / count, rng.uniform(*distance, count)
    )
    pa = position_angle(ra, dec, *event) + 180.0 + rng.normal(0.0, 6.0, count)
    return [
        candidate(f"J{start + i:03d}", *place)
        for i, place in enumerate(zip(ra, dec, pa, strict=True))
    ]


def read(folder, name="origins.ecsv"):
    return Table.read(folder / name, format="ascii.ecsv")


def test_origin_is_found_named_and_mapped(tmp_path, rng, capsys):
    right = {"name": "Fennick", "ra": EVENT[0], "dec": EVENT[1], "distance_pc": 3000.0}
    wrong = {"name": "Ashgrove", "ra": 1.9, "dec": 42.0, "distance_pc": 3000.0}
    night = write_night(tmp_path / "night", lit(rng), sources=[wrong, right])
    assert main(["origins", str(night)]) == 0
    said = capsys.readouterr().out
    assert "Fennick" in said
    assert "1 origin of " in said
    table = read(night)
    assert table.colnames[:8] == [
        "ra", "dec", "err_major", "err_minor", "err_pa", "n_arcs", "score", "source",
    ]  # fmt: skip
    (row,) = table
    assert row["source"] == "Fennick"
    assert row["kind"] == "peak"
    assert row["n_arcs"] >= 16
    # The age of a source of known distance and unknown age, with its interval.
    assert row["implied_age_low"] < row["implied_age"] < row["implied_age_high"]
    arcs = read(night, "origin_arcs.ecsv")
    assert len(arcs) == 18
    assert sum(arcs["origin"] == "O1") == row["n_arcs"]
    with fits.open(night / "origin_map.fits", checksum=True) as hdus:
        image, wcs = hdus[0].data, WCS(hdus[0].header)
        assert len(hdus) == 1  # a small region
    y, x = np.unravel_index(np.argmax(image), image.shape)
    ra, dec = wcs.all_pix2world(x, y, 0)
    assert abs(ra - row["ra"]) * np.cos(np.radians(dec)) < 3 * row["err_major"]
    assert abs(dec - row["dec"]) < 3 * row["err_major"]
    with Image.open(night / "origins.png") as picture:
        assert picture.size[0] > 600


def test_bytes_do_not_depend_on_order_threads_or_repetition(tmp_path, rng):
    from latelight.threads import n_threads, set_threads

    rows = lit(rng)
    first = write_night(tmp_path / "a", rows[:9])
    second = write_night(tmp_path / "b", rows[9:])
    orders = ([first, second], [second, first, second])
    made, before = [], n_threads()
    try:
        for threads, nights in zip((1, 2), orders, strict=True):
            set_threads(threads)
            out = tmp_path / f"out{threads}"
            names = [str(path) for path in nights]
            assert main(["origins", *names, "--output", str(out)]) == 0
            made.append({name: (out / name).read_bytes() for name in FILES})
    finally:
        set_threads(before)
    assert made[0] == made[1]
    assert sorted(path.name for path in (tmp_path / "out1").iterdir()) == FILES


def test_one_arc_seen_often_counts_once(tmp_path, rng):
    """In two pairs, in another night under the same id, and as a track."""
    rows = lit(rng)
    moved = []
    for row in rows:
        # A year on, 15 arcsec farther along its motion.
        ra, dec = offset_position(row.ra, row.dec, row.normal_pa, 15.0 / 3600.0)
        changes = {"mjd_science": row.mjd_science + 365.25, "pair": "F_3-F_1"}
        moved.append(candidate(row.id, ra, dec, row.normal_pa + 1.0, **changes))
    known = rows[0]
    back = offset_position(
        known.ra, known.dec, known.normal_pa, -15.0 * 165.25 / 365.25 / 3600.0
    )
    followed = track("T000", *back, known.normal_pa, candidates=known.id)
    first = write_night(tmp_path / "a", rows, tracks=[followed])
    second = write_night(tmp_path / "b", moved)
    assert main(["origins", str(first), str(second)]) == 0
    arcs = read(first, "origin_arcs.ecsv")
    assert len(arcs) == 18
    (one,) = arcs[arcs["kind"] == "track"]
    assert one["id"] == "T000"
    assert one["same"] == known.id


def test_tracks_set_aside_and_rows_without_direction_are_left_out(tmp_path, rng):
    rows = lit(rng, 8)
    bad = [
        candidate("J900", None, None, 10.0, normal_pa=None),
        candidate("J901", 0.0, 41.0, 10.0, normal_pa=None, normal_pa_err=None),
    ]
    bogus = track("T001", 1.0, 41.5, 10.0, verdict="disagrees")
    masked = candidate("J902", 358.0, 41.2, 280.0, speed=None, speed_err=None, lobes=1)
    night = write_night(tmp_path / "n", [*rows, *bad, masked], tracks=[bogus])
    assert main(["origins", str(night)]) == 0
    arcs = read(night, "origin_arcs.ecsv")
    assert set(arcs["id"]) == {row.id for row in rows} | {"J902"}
    assert arcs["speed"].mask[list(arcs["id"]).index("J902")]


def test_parallel_arcs_name_a_ridge_and_no_place(tmp_path, rng, capsys):
    rows = [
        candidate(f"J{i}", 50 + rng.uniform(0, 0.4), 20 + rng.uniform(0, 0.4),
                  100.0 + rng.normal(0.0, 4.0))
        for i in range(14)
    ]  # fmt: skip
    night = write_night(tmp_path / "n", rows)
    assert main(["origins", str(night)]) == 0
    (row,) = read(night)
    assert row["kind"] == "ridge"
    assert np.ma.is_masked(row["err_major"])
    assert "great circle" in row["remark"]
    assert "great circle" in capsys.readouterr().out


def test_random_arcs_claim_nothing_and_say_so(tmp_path, rng, capsys):
    rows = [
        candidate(f"J{i}", 50 + rng.uniform(0, 4), 20 + rng.uniform(0, 4),
                  rng.uniform(0, 360))
        for i in range(15)
    ]  # fmt: skip
    night = write_night(tmp_path / "n", rows)
    assert main(["origins", str(night)]) == 0
    assert len(read(night)) == 0
    assert "no common origin claimed" in capsys.readouterr().out


@pytest.mark.parametrize("count", [0, 1])
def test_too_few_arcs(tmp_path, count, rng, capsys):
    night = write_night(tmp_path / "n", lit(rng, 5)[:count])
    (night / "origins.png").write_bytes(b"of an earlier run")
    assert main(["origins", str(night)]) == 0
    assert "it takes at least two" in capsys.readouterr().out
    assert len(read(night)) == 0
    assert (night / "origins.png").exists() == (count > 0)


def test_listed_source_with_few_arcs_is_not_lost(tmp_path):
    """Three arcs point roughly at a listed place: too few for a peak of their own."""
    rows = []
    for bearing, turn in ((0.0, 10.0), (120.0, -9.0), (240.0, 6.0)):
        ra, dec = offset_position(*EVENT, bearing, 1.0)
        pa = float(position_angle(ra, dec, *EVENT)) + 180.0 + turn
        rows.append(candidate(f"J{bearing:.0f}", ra, dec, pa, normal_pa_err=7.0))
    source = {"name": "Fennick", "ra": EVENT[0], "dec": EVENT[1]}
    night = write_night(tmp_path / "n", rows, sources=[source])
    assert main(["origins", str(night)]) == 0
    (row,) = read(night)
    assert (row["source"], row["kind"]) == ("Fennick", "listed")
    assert np.ma.is_masked(row["err_major"])
    assert row["ra"] == pytest.approx(EVENT[0])


def test_wide_region_has_a_healpix_table(tmp_path, rng):
    event = (20.0, 85.0)
    night = write_night(tmp_path / "n", lit(rng, event=event, distance=(25.0, 45.0)))
    assert main(["origins", str(night)]) == 0
    with fits.open(night / "origin_map.fits", checksum=True) as hdus:
        header, sky = hdus["HEALPIX"].header, hdus["HEALPIX"].data["LOG10_LR"]
        assert WCS(hdus[0].header).wcs.ctype[0] == "RA---ARC"
    assert (header["PIXTYPE"], header["ORDERING"]) == ("HEALPIX", "NESTED")
    assert header["COORDSYS"] == "C"
    grid = HEALPix(header["NSIDE"], order=header["ORDERING"].lower())
    assert sky.size == grid.npix
    lon, lat = grid.healpix_to_lonlat(int(np.argmax(sky)))
    (row,) = read(night)
    from latelight.sky import separation_deg

    gap = separation_deg(
        lon.to_value("deg"), lat.to_value("deg"), row["ra"], row["dec"]
    )
    assert gap < 3 * row["err_major"] + 2.0


def test_settings_file_stands_in_for_the_record(tmp_path, rng, capsys):
    night = write_night(tmp_path / "n", lit(rng), record=False)
    assert main(["origins", str(night)]) == 2
    said = capsys.readouterr().err
    assert "run.json" in said
    assert "--settings NIGHT.toml" in said
    path = tmp_path / "night.toml"
    path.write_text(
        '[night]\nframes = ["*.fits"]\noutput = "n"\n'
        f'[[sources]]\nname = "Fennick"\nra = {EVENT[0]}\ndec = {EVENT[1]}\n'
    )
    assert main(["origins", str(night), "--settings", str(path)]) == 0
    assert list(read(night)["source"]) == ["Fennick"]


def test_folders_without_tables_name_file_rule_and_cure(tmp_path, capsys):
    (tmp_path / "empty").mkdir()
    for folder, words in (("empty", "candidates.ecsv"), ("nowhere", "is no folder")):
        assert main(["origins", str(tmp_path / folder)]) == 2
        said = capsys.readouterr().err
        assert folder in said
        assert words in said
    assert not (tmp_path / "empty" / "origins.ecsv").exists()


def test_table_of_another_version_names_the_column(tmp_path, rng, capsys):
    night = write_night(tmp_path / "n", lit(rng, 4))
    table = read(night, "candidates.ecsv")
    table.remove_column("sense_odds")
    table.write(night / "candidates.ecsv", format="ascii.ecsv", overwrite=True)
    assert main(["origins", str(night)]) == 2
    said = capsys.readouterr().err
    assert "no column sense_odds" in said
    assert "run the night again" in said


def test_record_of_another_version_names_the_key(tmp_path, rng, capsys):
    night = write_night(tmp_path / "n", lit(rng, 4))
    (night / "run.json").write_text('{"settings": {"origin": {"old_key": 1}}}')
    assert main(["origins", str(night)]) == 2
    said = capsys.readouterr().err
    assert "old_key" in said
    assert "--settings NIGHT.toml" in said
