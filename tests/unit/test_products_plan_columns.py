"""Rows and columns of forecasts and plans say the same."""

import dataclasses

import astropy.units as u
import pytest
from astropy.io.votable.ucd import check_ucd

from latelight.products.forecast_columns import FORECAST_COLUMNS
from latelight.products.forecast_rows import ForecastRow
from latelight.products.plan_columns import (
    PLAN_CELL_COLUMNS,
    PLAN_COLUMNS,
    PLAN_RING_COLUMNS,
)
from latelight.products.plan_rows import PlanCellRow, PlanRingRow, PlanRow

TABLES = [
    (ForecastRow, FORECAST_COLUMNS),
    (PlanRow, PLAN_COLUMNS),
    (PlanRingRow, PLAN_RING_COLUMNS),
    (PlanCellRow, PLAN_CELL_COLUMNS),
]
KINDS = {"str": "text", "int": "integer", "float": "real"}


@pytest.mark.parametrize(("row", "columns"), TABLES)
def test_columns_are_the_fields_of_the_row(row, columns):
    fields = dataclasses.fields(row)
    assert [field.name for field in fields] == [column.name for column in columns]
    for field, column in zip(fields, columns, strict=True):
        assert KINDS[field.type.removesuffix(" | None")] == column.kind, field.name


@pytest.mark.parametrize(("row", "columns"), TABLES)
def test_every_column_has_a_valid_ucd_a_unit_and_a_sentence(row, columns):
    for column in columns:
        assert check_ucd(column.ucd, check_controlled_vocabulary=True), column
        assert column.description.endswith("."), column
        assert bool(column.format) == (column.kind == "real"), column
        if column.unit:
            u.Unit(column.unit).to_string("vounit")
