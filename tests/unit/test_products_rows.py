"""The rows and the registry of columns say the same."""

import dataclasses

import astropy.units as u
import pytest
from astropy.io.votable.ucd import check_ucd

from latelight.products.columns import (
    ARC_COLUMNS,
    CANDIDATE_COLUMNS,
    PAIR_COLUMNS,
    RESIDUAL_COLUMNS,
)
from latelight.products.cutouts import CARDS
from latelight.products.rows import ArcRow, CandidateRow, PairRow, ResidualRow
from latelight.products.track_columns import (
    INTERPRETATION_COLUMNS,
    TRACK_COLUMNS,
    TRACK_POINT_COLUMNS,
)
from latelight.products.track_rows import InterpretationRow, TrackPointRow, TrackRow

TABLES = [
    (CandidateRow, CANDIDATE_COLUMNS),
    (ArcRow, ARC_COLUMNS),
    (PairRow, PAIR_COLUMNS),
    (ResidualRow, RESIDUAL_COLUMNS),
    (TrackRow, TRACK_COLUMNS),
    (TrackPointRow, TRACK_POINT_COLUMNS),
    (InterpretationRow, INTERPRETATION_COLUMNS),
]
KINDS = {"str": "text", "int": "integer", "float": "real"}

# What other programs rely on, in this order.
FIXED = """
id field filter template science mjd_template mjd_science ra dec snr length width
surface_brightness normal_pa normal_pa_err speed speed_err source away_angle score
dust_depth dust_depth_err verdict
"""


@pytest.mark.parametrize(("row", "columns"), TABLES)
def test_columns_are_the_fields_of_the_row(row, columns):
    fields = dataclasses.fields(row)
    assert [field.name for field in fields] == [column.name for column in columns]
    for field, column in zip(fields, columns, strict=True):
        assert KINDS[field.type.removesuffix(" | None")] == column.kind, field.name


def test_candidate_columns_begin_with_the_fixed_ones():
    fixed = FIXED.split()
    assert [column.name for column in CANDIDATE_COLUMNS[: len(fixed)]] == fixed


@pytest.mark.parametrize("columns", [columns for _, columns in TABLES])
def test_every_column_has_a_valid_ucd_a_unit_and_a_sentence(columns):
    for column in columns:
        assert check_ucd(column.ucd, check_controlled_vocabulary=True), column
        assert column.description.endswith("."), column
        assert bool(column.format) == (column.kind == "real"), column
        if column.kind == "text":
            assert column.unit == "", column
        elif column.unit:
            for standard in ("fits", "vounit"):
                u.Unit(column.unit).to_string(standard)


def test_descriptions_state_the_conventions_a_reader_could_mistake():
    text = {column.name: column.description for column in CANDIDATE_COLUMNS}
    assert "only the component along the normal can be observed" in text["speed"]
    assert "from the earlier to the later epoch" in text["normal_pa"]
    assert "positive towards the observer" in text["dust_depth"]


def test_every_field_of_a_candidate_has_its_own_header_keyword():
    assert list(CARDS) == [column.name for column in CANDIDATE_COLUMNS]
    keywords = [keyword for keyword, _ in CARDS.values()]
    assert len(set(keywords)) == len(keywords)
    for keyword in keywords:
        assert len(keyword) <= 8
        assert keyword.replace("-", "").isalnum()
        assert keyword == keyword.upper()
