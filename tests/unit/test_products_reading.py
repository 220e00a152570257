"""Tables read back give the rows they were written from, or say what is wrong."""

from dataclasses import fields, replace

import pytest
from astropy.table import MaskedColumn, Table

from latelight.errors import ProductError
from latelight.products import reading
from latelight.products.rows import CandidateRow, PairRow
from latelight.products.tables import write_tables
from latelight.products.track_rows import InterpretationRow, TrackPointRow, TrackRow
from latelight.products.track_tables import write_track_tables

READERS = {
    CandidateRow: reading.read_candidates,
    PairRow: reading.read_pairs,
    TrackRow: reading.read_tracks,
    TrackPointRow: reading.read_track_points,
    InterpretationRow: reading.read_interpretations,
}


def make(row_type, number, *, known):
    """Return a row whose optional fields are all known or all missing.

    Numbers are whole, so that no column's format rounds them.
    """
    values = {}
    for place, field in enumerate(fields(row_type)):
        if "str" in field.type:
            values[field.name] = f"{field.name} {number}" if known else ""
        elif "None" in field.type and not known:
            values[field.name] = None
        elif "int" in field.type:
            values[field.name] = number
        else:
            values[field.name] = float(number + place)
    return row_type(**values)


def written(folder, *, of=()):
    made = {row_type: [] for row_type in READERS}
    for row in of:
        made[type(row)].append(row)
    write_tables(
        folder,
        candidates=made[CandidateRow],
        arcs=[],
        pairs=made[PairRow],
        residuals=[],
    )
    write_track_tables(
        folder,
        tracks=made[TrackRow],
        points=made[TrackPointRow],
        interpretations=made[InterpretationRow],
    )
    return folder


@pytest.mark.parametrize(("row_type", "read"), READERS.items())
def test_rows_come_back_as_they_were(tmp_path, row_type, read):
    rows = [make(row_type, n, known=n % 2 == 1) for n in range(1, 5)]
    back = read(written(tmp_path, of=rows))
    assert sorted(map(repr, back)) == sorted(map(repr, rows))
    for row in back:
        for field in fields(row):
            value = getattr(row, field.name)
            words = field.type.split(" | ")
            assert type(value).__name__.removesuffix("Type") in words, field.name


@pytest.mark.parametrize(("row_type", "read"), READERS.items())
def test_an_empty_night_has_no_rows(tmp_path, row_type, read):
    assert read(written(tmp_path)) == ()


def test_the_order_of_the_table_is_kept(tmp_path):
    rows = [
        replace(make(CandidateRow, n, known=True), snr=snr)
        for n, snr in enumerate((7.0, 30.0, 12.0))
    ]
    back = reading.read_candidates(written(tmp_path, of=rows))
    assert [row.snr for row in back] == [30.0, 12.0, 7.0]


def test_tracks_worth_a_look_come_first_and_best_sources_of_an_arc(tmp_path):
    tracks = [
        replace(make(TrackRow, n, known=True), verdict=verdict, snr=snr)
        for n, (verdict, snr) in enumerate(
            [("too faint", 50.0), ("track", 9.0), ("track", 20.0)]
        )
    ]
    one = make(InterpretationRow, 1, known=True)
    meanings = [replace(one, source=str(s), score=s) for s in (-1.0, None, 2.5)]
    folder = written(tmp_path, of=[*tracks, *meanings])
    assert [row.snr for row in reading.read_tracks(folder)] == [20.0, 9.0, 50.0]
    back = reading.read_interpretations(folder)
    assert [row.score for row in back] == [2.5, -1.0, None]


def test_text_with_commas_quotes_and_line_breaks_survives(tmp_path):
    remark = 'no age; "about 40" yr, says\nthe list \N{GREEK SMALL LETTER ETA}'
    row = replace(make(InterpretationRow, 1, known=True), remark=remark)
    assert reading.read_interpretations(written(tmp_path, of=[row])) == (row,)


def test_columns_that_were_added_do_no_harm(tmp_path):
    rows = [make(CandidateRow, n, known=True) for n in (2, 1)]
    path = written(tmp_path, of=rows) / "candidates.ecsv"
    table = Table.read(path, format="ascii.ecsv")
    table["grade"] = ["good", "bad"]
    table[table.colnames[::-1]].write(path, format="ascii.ecsv", overwrite=True)
    assert reading.read_candidates(tmp_path) == tuple(rows)


def edited(folder, change):
    """Write one candidate and change the table's text."""
    path = written(folder, of=[make(CandidateRow, 1, known=True)]) / "candidates.ecsv"
    table = Table.read(path, format="ascii.ecsv")
    change(table)
    table.write(path, format="ascii.ecsv", overwrite=True)
    return folder


def rename(table):
    table.rename_column("speed", "velocity")


def to_text(table):
    table["snr"] = ["high"]


def to_degrees(table):
    table["speed"].unit = "deg/yr"


def blank(table):
    table["snr"] = MaskedColumn([0.0], mask=[True])


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (rename, "no column speed"),
        (to_text, "column snr must hold numbers, got str"),
        (to_degrees, "column speed must be in arcsec/yr, got deg / yr"),
        (blank, "row 1 has no snr, which is never missing"),
    ],
)
def test_a_spoilt_table_names_file_column_and_cure(tmp_path, change, words):
    with pytest.raises(ProductError, match=words) as caught:
        reading.read_candidates(edited(tmp_path, change))
    assert "candidates.ecsv" in str(caught.value)
    assert "run the night again" in str(caught.value)


def test_what_is_no_table_or_not_there(tmp_path):
    with pytest.raises(ProductError, match=r"none: is no folder: give the output"):
        reading.read_tracks(tmp_path / "none")
    with pytest.raises(ProductError, match=r"tracks\.ecsv: does not exist: give"):
        reading.read_tracks(tmp_path)
    (tmp_path / "tracks.ecsv").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(ProductError, match="cannot be read as an ECSV table"):
        reading.read_tracks(tmp_path)
    (tmp_path / "tracks.ecsv").write_text("id field\na b\n")
    with pytest.raises(ProductError, match="cannot be read as an ECSV table"):
        reading.read_tracks(tmp_path)
    (tmp_path / "tracks.ecsv").write_text("")
    with pytest.raises(ProductError, match="cannot be read as an ECSV table"):
        reading.read_tracks(tmp_path)
