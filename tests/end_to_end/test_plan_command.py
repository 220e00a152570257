"""``latelight plan`` on small settings files."""

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from PIL import Image

from latelight.cli import main

pytestmark = pytest.mark.e2e

HEAD = '[night]\nframes = ["none/*.fits"]\noutput = "out"\n'
PLAN = "[plan]\ndate = 2027-03-14\npeak_mag = -2.0\norder = 7\n"
SORREL = """
[[sources]]
name = "Sorrel 1713"
ra = 82.27
dec = -29.61
distance_pc = 4200.0
distance_err_pc = 250.0
age_yr = 310.0
age_at_mjd = 60000.0
"""
BRAMBLE = """
[[sources]]
name = "Bramble/Pole"
ra = 359.9
dec = 89.7
distance_pc = 3000.0
age_yr = 200.0
age_err_yr = 30.0
age_at_mjd = 60000.0
peak_mag = 1.0
duration_days = 100.0
"""
NETTLE = '\n[[sources]]\nname = "Nettle"\nra = 83.0\ndec = -31.0\n'
FIELDS = """
[[fields]]
name = "Larkfield"
ra = 82.9
dec = -30.9
width_deg = 0.5

[[fields]]
name = "Over the pole"
ra = 180.0
dec = 89.1
radius_deg = 0.3

[[fields]]
name = "On Sorrel"
ra = 82.27
dec = -29.61
"""
LAYERS = """
[[layers]]
name = "near"
depth_pc = 60.0

[[layers]]
name = "tilted"
distance_pc = 4150.0
slope = 0.5
slope_pa = 40.0
source = "Sorrel 1713"

[[layers]]
name = "far behind"
depth_pc = -300.0
"""


@pytest.fixture
def plan(tmp_path):
    """Write settings, run the command, return its exit code and the tables' folder."""

    def run(text, *arguments):
        path = tmp_path / "night.toml"
        path.write_text(HEAD + text)
        return main(["plan", str(path), *arguments]), tmp_path / "out" / "plan"

    return run


def test_a_plan_leaves_tables_cells_and_a_picture(plan, capsys):
    code, folder = plan(PLAN + SORREL + BRAMBLE + NETTLE + FIELDS + LAYERS)
    assert code == 0
    assert {path.name for path in folder.iterdir()} == {
        "plan.ecsv", "plan_rings.ecsv", "plan_cells.ecsv", "plan.png",
        "plan_Sorrel_1713.moc.fits", "plan_Bramble_Pole.moc.fits",
    }  # fmt: skip
    assert "6 files in" in capsys.readouterr().out
    fields = Table.read(folder / "plan.ecsv")
    assert len(fields) == 9
    by_name = {(row["source"], row["field"]): row for row in fields}
    lark = by_name["Sorrel 1713", "Larkfield"]
    assert lark["dust_depth_min"] < lark["dust_depth"] < lark["dust_depth_max"]
    assert lark["speed_slow"] < lark["flat_speed"] < lark["speed_fast"]
    assert lark["dust_depth_err"] > 0.0
    assert 15.0 < lark["surface_brightness"] < 35.0
    assert by_name["Bramble/Pole", "Over the pole"]["separation"] == pytest.approx(
        1.2, abs=1e-3
    )
    with Image.open(folder / "plan.png") as picture:
        assert min(picture.size) > 400


def test_what_is_not_known_is_masked_with_a_reason(plan, capsys):
    code, folder = plan(PLAN + SORREL + NETTLE + FIELDS)
    assert code == 0
    fields = Table.read(folder / "plan.ecsv")
    reasons = {
        ("Nettle", "Larkfield"): "distance and age of the source unknown",
        ("Sorrel 1713", "Over the pole"): "more than a quarter circle",
        ("Sorrel 1713", "On Sorrel"): "the field's centre is the source",
    }
    for row in fields:
        reason = reasons.get((row["source"], row["field"]))
        if reason:
            assert np.ma.is_masked(row["dust_depth"])
            assert np.ma.is_masked(row["flat_speed"])
            assert reason in row["remark"]
    for name in fields.colnames:
        if fields[name].dtype.kind == "f":
            assert np.isfinite(np.ma.compressed(fields[name])).all(), name
    assert len(Table.read(folder / "plan_cells.ecsv")) == 0


def test_rings_say_where_or_why_not(plan):
    _, folder = plan(PLAN + SORREL + NETTLE + LAYERS)
    rings = {
        (row["source"], row["layer"]): row
        for row in Table.read(folder / "plan_rings.ecsv")
    }
    assert rings["Sorrel 1713", "near"]["shift"] == 0.0
    tilted = rings["Sorrel 1713", "tilted"]
    assert tilted["dust_depth"] == pytest.approx(50.0)
    assert tilted["shift"] > 0.0
    assert "still on its way" in rings["Sorrel 1713", "far behind"]["remark"]
    assert np.ma.is_masked(rings["Sorrel 1713", "far behind"]["radius"])
    assert ("Nettle", "tilted") not in rings
    assert rings["Nettle", "near"]["remark"] == "distance of the source unknown"


def test_the_moc_is_the_list_of_cells(plan):
    """MOC 2.0: NUNIQ, ICRS, rising; opened to the finest order it is the table."""
    near = LAYERS.split("[[layers]]")[1]
    _, folder = plan(f"{PLAN}{BRAMBLE}[[layers]]{near}")
    with fits.open(folder / "plan_Bramble_Pole.moc.fits", checksum=True) as file:
        header, uniq = file[1].header, file[1].data["UNIQ"].astype(np.int64)
    assert (header["MOCVERS"], header["ORDERING"], header["COORDSYS"]) == (
        "2.0", "NUNIQ", "C",
    )  # fmt: skip
    assert header["MOCDIM"] == "SPACE"
    assert header["MOCORDER"] == header["MOCORD_S"] == 7
    assert header["MOCTOOL"].startswith("latelight ")
    assert header["TFORM1"].strip() in ("K", "1K")
    assert np.all(np.diff(uniq) > 0)
    opened = []
    for number in uniq:
        order = (int(number).bit_length() - 3) // 2
        first = (int(number) - 4 * 4**order) * 4 ** (7 - order)
        opened += range(first, first + 4 ** (7 - order))
    cells = Table.read(folder / "plan_cells.ecsv")
    assert sorted(opened) == sorted(cells["cell"])
    assert 0.95 <= cells["probability"].sum() < 1.0


def test_the_option_comes_before_the_settings_date(plan, tmp_path):
    _, folder = plan(PLAN + SORREL + FIELDS, "--at", "62000", "--output", str(tmp_path))
    assert not folder.exists()
    assert set(Table.read(tmp_path / "plan.ecsv")["mjd"]) == {62000.0}


def test_an_outburst_after_the_date_is_no_echo_yet(plan):
    late = SORREL.replace("60000.0", "80000.0").replace("310.0", "1.0")
    _, folder = plan(PLAN + late + FIELDS + LAYERS)
    fields = Table.read(folder / "plan.ecsv")
    assert all("years after the date" in remark for remark in fields["remark"])
    assert fields["dust_depth"].mask.all()


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (PLAN + SORREL, "fields: none given, and no layers; add"),
        (PLAN + SORREL, "[[fields]]\nname ="),
        (PLAN + FIELDS, "sources: none listed; add [[sources]]"),
        (SORREL + FIELDS, 'plan.date: missing; add date = "2027-03-14"'),
        ("[plan]\ndate = 'soon'\n" + SORREL + FIELDS, "plan.date: must be a date"),
        ("[plan]\ndate = 2027\n" + SORREL + FIELDS, "plan.date: must be an MJD"),
        (PLAN + SORREL + FIELDS + LAYERS.replace("Sorrel 1713", "Sorel 1713"),
         "layers[1].source: must be a listed source, got 'Sorel 1713'; did you mean"),
        (PLAN + SORREL + FIELDS + FIELDS, "fields[3].name: names must differ"),
        (PLAN + SORREL + "[[fields]]\nname='a'\nra=1\ndec=1\nwidth=1\n",
         "fields[0].width: unknown key"),
    ],
)  # fmt: skip
def test_settings_that_cannot_be_planned(plan, capsys, text, message):
    code, _ = plan(text)
    assert code == 2
    said = capsys.readouterr().err
    assert "night.toml: " in said
    assert message in said
