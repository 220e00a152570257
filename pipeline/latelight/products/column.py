"""What a table's column is, and the columns that several tables share."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = [
    "DEC",
    "EPOCHS",
    "PAIR",
    "RA",
    "Column",
    "X",
    "Y",
    "integer",
    "real",
    "text",
]

Kind = Literal["text", "integer", "real"]


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table.

    Attributes
    ----------
    name : str
        The column, and the field of its row.
    kind : str
        ``"text"``, ``"integer"`` (int32) or ``"real"`` (float64).
    unit : str
        Empty for text and for pure numbers.
    ucd : str
        UCD1+ word.
    description : str
        One sentence for a reader who has only the table.
    format : str
        Format specification of a real column; values are rounded to it, so that
        every file of a table holds the same number.  Empty for the rest.
    """

    name: str
    kind: Kind
    unit: str
    ucd: str
    description: str
    format: str = ""


def text(name: str, ucd: str, description: str) -> Column:
    """Return a column of text."""
    return Column(name, "text", "", ucd, description)


def integer(name: str, ucd: str, description: str) -> Column:
    """Return a column of whole numbers."""
    return Column(name, "integer", "", ucd, description)


def real(name: str, fmt: str, unit: str, ucd: str, description: str) -> Column:
    """Return a column of real numbers with a format and a unit."""
    return Column(name, "real", unit, ucd, description, fmt)


PAIR = text("pair", "meta.id.parent", "Name of the pair of frames.")
RA = "Right ascension, ICRS"
DEC = "Declination, ICRS"
X = "Science frame column, first pixel 0"
Y = "Science frame row, first pixel 0"

EPOCHS = (
    text("field", "meta.id;obs.field", "Field word of the frames."),
    text("filter", "meta.id;instr.filter", "Filter word of the frames."),
    text("template", "meta.id;obs.image", "Name of the template frame."),
    text("science", "meta.id;obs.image", "Name of the science frame."),
    real(
        "mjd_template",
        ".6f",
        "d",
        "time.epoch;obs.image",
        "Middle of the template exposure, MJD (UTC).",
    ),
    real(
        "mjd_science",
        ".6f",
        "d",
        "time.epoch;obs.image",
        "Middle of the science exposure, MJD (UTC).",
    ),
)
