"""Sources from settings and table files."""

import pytest
from pydantic import ValidationError

from latelight.errors import SettingsError
from latelight.origin.settings import OriginSettings, SourceSettings
from latelight.origin.sources import (
    age_yr,
    gather_sources,
    read_source_table,
    source_of,
)
from latelight.records import Source

PLACE = {"name": "outburst A", "ra": 10.0, "dec": -20.0}


def test_age_and_date_pass_through():
    entry = SourceSettings(**PLACE, age_yr=400.0, age_at_mjd=60000.0, age_err_yr=5.0)
    source = source_of(entry)
    assert (source.age_yr, source.age_at_mjd, source.age_err_yr) == (400, 60000, 5)


def test_outburst_year_counts_from_the_julian_epoch():
    source = source_of(SourceSettings(**PLACE, outburst_year=1620.5))
    assert age_yr(source, 51544.5) == pytest.approx(379.5)
    assert age_yr(source, 51544.5 + 365.25) == pytest.approx(380.5)


def test_age_is_unknown_without_a_date():
    assert age_yr(Source("a", 0.0, 0.0), 60000.0) is None


def test_age_before_the_outburst_is_negative():
    source = source_of(SourceSettings(**PLACE, outburst_year=2020.0))
    assert age_yr(source, 51544.5) == pytest.approx(-20.0)


@pytest.mark.parametrize(
    ("extra", "message"),
    [
        ({"ra": 360.0}, "less than 360"),
        ({"ra": -0.1}, "greater than or equal to 0"),
        ({"dec": 90.5}, "less than or equal to 90"),
        ({"ra": "12:30:00"}, "valid number"),
        ({"name": ""}, "at least 1 character"),
        ({"distance_pc": 0.0}, "greater than 0"),
        ({"distance_err_pc": 10.0}, "distance_err_pc needs distance_pc"),
        ({"age_yr": 100.0}, "age_yr and age_at_mjd belong together"),
        ({"age_at_mjd": 60000.0}, "age_yr and age_at_mjd belong together"),
        ({"age_err_yr": 1.0}, "age_err_yr needs age_yr"),
        (
            {"age_yr": 1.0, "age_at_mjd": 6e4, "outburst_year": 1900.0},
            "or outburst_year, not both",
        ),
        ({"distance_pcc": 1.0}, "Extra inputs are not permitted"),
    ],
)
def test_wrong_entries_are_refused(extra, message):
    with pytest.raises(ValidationError, match=message):
        SourceSettings(**{**PLACE, **extra})


def test_table_of_every_column(tmp_path):
    path = tmp_path / "sources.csv"
    path.write_text(
        "name,ra,dec,distance_pc,distance_err_pc,outburst_year,age_err_yr\n"
        "one,10,-20,3000,300,1620.5,2\n"
        "604,359.5,89,,,,\n"
    )
    one, two = read_source_table(path)
    assert one == Source(
        "one", 10.0, -20.0, 3000.0, 300.0, 379.5, age_err_yr=2.0, age_at_mjd=51544.5
    )
    assert two == Source("604", 359.5, 89.0)


def test_table_with_units_is_converted(tmp_path):
    from astropy.table import QTable

    path = tmp_path / "sources.ecsv"
    QTable(
        {"name": ["one"], "ra": [1.0], "dec": [2.0], "distance_pc": [3.0]},
        units={"ra": "hourangle", "dec": "deg", "distance_pc": "kpc"},
    ).write(path)
    (source,) = read_source_table(path)
    assert source.ra == pytest.approx(15.0)
    assert source.distance_pc == pytest.approx(3000.0)


def test_table_in_the_wrong_unit_is_refused(tmp_path):
    from astropy.table import QTable

    path = tmp_path / "sources.ecsv"
    QTable(
        {"name": ["one"], "ra": [1.0], "dec": [2.0]}, units={"ra": "m", "dec": "deg"}
    ).write(path)
    with pytest.raises(SettingsError, match="column ra: must be in deg, got m"):
        read_source_table(path)


def test_every_fault_of_a_table_is_named(tmp_path):
    path = tmp_path / "sources.csv"
    path.write_text(
        "name,ra,dec,age_yr\none,400,0,\ntwo,1,0,30\nthree,1,,\nfour,1,1,\n"
    )
    with pytest.raises(SettingsError) as caught:
        read_source_table(path)
    first, second, third = caught.value.faults
    assert first == "row 1: ra: should be less than 360, got 400"
    assert second.startswith("row 2: age_yr and age_at_mjd belong together")
    assert third == "row 3: dec: Field required; fill the cell"
    assert str(path) in str(caught.value)


def test_unknown_column_is_refused(tmp_path):
    path = tmp_path / "sources.csv"
    path.write_text("name,ra,dec,distance\none,1,1,5\n")
    with pytest.raises(SettingsError, match="column distance: unknown; rename or"):
        read_source_table(path)


def test_missing_table_is_refused(tmp_path):
    with pytest.raises(SettingsError, match="cannot be read: No such file"):
        read_source_table(tmp_path / "none.csv")


def test_file_that_is_no_table_is_refused(tmp_path):
    path = tmp_path / "sources.ecsv"
    path.write_text("name,ra\n1,2,3\n")
    with pytest.raises(SettingsError, match="not a table"):
        read_source_table(path)


def test_two_sources_of_one_name_are_refused(tmp_path):
    path = tmp_path / "sources.csv"
    path.write_text("name,ra,dec\noutburst A,1,1\n")
    with pytest.raises(SettingsError, match="names must differ, got 'outburst A'"):
        gather_sources([SourceSettings(**PLACE)], table=path)


def test_table_follows_the_entries(tmp_path):
    path = tmp_path / "sources.csv"
    path.write_text("name,ra,dec\nz,1,1\nb,2,2\n")
    listed = gather_sources([SourceSettings(**PLACE)], table=path)
    assert [s.name for s in listed] == ["outburst A", "z", "b"]


def test_defaults_are_valid():
    assert OriginSettings().source_table is None
