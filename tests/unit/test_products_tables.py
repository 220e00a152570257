import io
from dataclasses import fields, replace

import numpy as np
import pytest
from astropy.io import fits
from astropy.io.votable import parse
from astropy.table import Table

from latelight.errors import ProductError
from latelight.products.columns import CANDIDATE_COLUMNS
from latelight.products.rows import ArcRow, CandidateRow, PairRow, ResidualRow
from latelight.products.tables import (
    arc_table,
    candidate_table,
    pair_table,
    residual_table,
    to_ecsv,
    to_fits,
    to_votable,
    write_tables,
)

MAKERS = {
    CandidateRow: candidate_table,
    ArcRow: arc_table,
    PairRow: pair_table,
    ResidualRow: residual_table,
}


def make(row_type, number, *, known):
    """Return a row whose optional fields are all known or all missing."""
    values = {}
    for place, field in enumerate(fields(row_type)):
        if "str" in field.type:
            values[field.name] = f"{field.name} {number}"
        elif "None" in field.type and not known:
            values[field.name] = None
        elif "int" in field.type:
            values[field.name] = number
        else:
            values[field.name] = number + place / 8.0
    return row_type(**values)


def rows(row_type=CandidateRow):
    return [make(row_type, 1, known=True), make(row_type, 2, known=False)]


@pytest.fixture
def candidates():
    special = replace(make(CandidateRow, 3, known=True), source="", ra=0.0, lobes=0)
    return candidate_table([*rows(), special])


def read_back(encoded, table_format):
    stream = io.BytesIO(encoded)
    if table_format == "ascii.ecsv":
        return Table.read(encoded.decode().splitlines(), format=table_format)
    return Table.read(stream, format=table_format)


@pytest.mark.parametrize(
    ("encode", "table_format"),
    [(to_ecsv, "ascii.ecsv"), (to_fits, "fits"), (to_votable, "votable")],
)
def test_round_trip_keeps_values_masks_and_units(candidates, encode, table_format):
    back = read_back(encode(candidates), table_format)
    assert back.colnames == candidates.colnames
    for column in CANDIDATE_COLUMNS:
        sent, got = candidates[column.name], back[column.name]
        if column.kind == "text":
            texts = np.ma.filled(
                np.ma.asarray(got), "" if got.dtype.kind == "U" else b""
            )
            texts = [t.decode() if isinstance(t, bytes) else str(t) for t in texts]
            assert texts == list(sent), column.name
            continue
        mask = np.ma.getmaskarray(np.ma.asarray(got))
        np.testing.assert_array_equal(mask, sent.mask, err_msg=column.name)
        good = ~sent.mask
        np.testing.assert_array_equal(np.asarray(got)[good], np.asarray(sent)[good])
        assert got.unit == sent.unit, column.name


@pytest.mark.parametrize("row_type", list(MAKERS))
def test_units_descriptions_and_ucds_are_in_ecsv(row_type):
    table = MAKERS[row_type](rows(row_type))
    back = read_back(to_ecsv(table), "ascii.ecsv")
    for name in table.colnames:
        assert back[name].info.description == table[name].info.description
        assert back[name].info.meta["ucd"] == table[name].info.meta["ucd"]
        assert back[name].unit == table[name].unit


def test_masked_cells_in_fits_are_nan_and_tnull(candidates):
    # No integer of a candidate is ever missing: use a table that has one.
    with fits.open(io.BytesIO(to_fits(candidates)), checksum=True) as hdus:
        header, data = hdus["CANDIDATES"].header, hdus["CANDIDATES"].data
        number = candidates.colnames.index("speed") + 1
        assert header[f"TUCD{number}"] == "phys.veloc.ang"
        assert header[f"TCOMM{number}"].startswith("Apparent speed along normal_pa")
        assert header[f"TUNIT{number}"] == "arcsec yr-1"
        np.testing.assert_array_equal(np.isnan(data["speed"]), candidates["speed"].mask)
        assert set(data["lobes"]) == {0, 1, 2}
    with fits.open(io.BytesIO(to_fits(pair_table(rows(PairRow))))) as hdus:
        number = hdus[1].columns.names.index("n_arcs") + 1
        null = hdus[1].header[f"TNULL{number}"]
        assert null == np.iinfo(np.int32).min
        assert list(hdus[1].data["n_arcs"]) == [1, null]


def test_votable_fields_carry_units_descriptions_and_ucds(candidates):
    document = parse(io.BytesIO(to_votable(candidates)), verify="exception")
    for field, column in zip(
        document.get_first_table().fields, CANDIDATE_COLUMNS, strict=True
    ):
        assert field.ucd == column.ucd
        assert " ".join(field.description.split()) == column.description
        assert (field.unit is None) == (column.unit == "")


@pytest.mark.parametrize("encode", [to_ecsv, to_fits, to_votable])
@pytest.mark.parametrize("row_type", list(MAKERS))
def test_bytes_do_not_depend_on_the_order_of_the_rows(encode, row_type):
    made = [make(row_type, number, known=number % 2 == 0) for number in range(5)]
    assert encode(MAKERS[row_type](made)) == encode(MAKERS[row_type](made[::-1]))


@pytest.mark.parametrize("encode", [to_ecsv, to_fits, to_votable])
def test_a_night_without_finds_has_all_columns(encode):
    table = candidate_table([])
    names = {to_ecsv: "ascii.ecsv", to_fits: "fits", to_votable: "votable"}
    back = read_back(encode(table), names[encode])
    assert back.colnames == [column.name for column in CANDIDATE_COLUMNS]
    assert len(back) == 0


def test_most_significant_first():
    faint, bright = (
        replace(row, snr=snr) for row, snr in zip(rows(), (8.0, 30.0), strict=True)
    )
    assert list(candidate_table([faint, bright])["snr"]) == [30.0, 8.0]


def test_values_are_rounded_to_what_is_shown():
    row = replace(rows()[0], ra=10.12345678901, dec=-1e-9, snr=12.3456)
    table = candidate_table([row])
    assert (table["ra"][0], table["snr"][0]) == (10.1234568, 12.35)
    assert not np.signbit(table["dec"][0])


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_unknown_numbers_must_be_none(value):
    with pytest.raises(ValueError, match="speed must be finite or None"):
        candidate_table([replace(rows()[0], speed=value)])


def test_letters_beyond_ascii_are_escaped_in_fits_only():
    table = candidate_table([replace(rows()[0], source="\N{GREEK SMALL LETTER ETA}")])
    assert read_back(to_fits(table), "fits")["source"][0] == r"\u03b7"
    assert read_back(to_ecsv(table), "ascii.ecsv")["source"][0] == "\u03b7"
    assert read_back(to_votable(table), "votable")["source"][0] == "\u03b7"
    assert table["source"][0] == "\u03b7"


def test_write_tables_writes_six_files(tmp_path):
    paths = write_tables(
        tmp_path,
        candidates=rows(),
        arcs=rows(ArcRow),
        pairs=rows(PairRow),
        residuals=rows(ResidualRow),
    )
    names = [
        "candidates.ecsv",
        "candidates.fits",
        "candidates.vot",
        "arcs.ecsv",
        "pairs.ecsv",
        "residuals.ecsv",
    ]
    assert [path.name for path in paths] == names
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(names)
    with pytest.raises(ProductError, match="does not exist"):
        write_tables(tmp_path / "none", candidates=[], arcs=[], pairs=[], residuals=[])
