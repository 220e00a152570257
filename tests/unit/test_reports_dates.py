"""Dates as people write them."""

import pytest

from latelight.reports.dates import date_words, mjd_of
from latelight.reports.finder import sexagesimal


@pytest.mark.parametrize(
    ("text", "mjd"),
    [
        ("61000", 61000.0),
        (" 61000.25 ", 61000.25),
        ("2000-01-01T12:00", 51544.5),  # J2000.0
        ("2000-01-01", 51544.0),
        ("2000-01-01 12:00:00Z", 51544.5),
        ("2000-01-01T14:00+02:00", 51544.5),
    ],
)
def test_dates_and_mjds(text, mjd):
    assert mjd_of(text) == pytest.approx(mjd, abs=1e-9)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("soon", "must be a date such as .* got 'soon'"),
        ("2027", "write a bare year as a date"),
        ("2461000.5", "take 2400000.5 from a Julian date"),
        ("nan", "must be an MJD"),
        ("2027-02-30", "must be a date such as"),
    ],
)
def test_what_is_no_date(text, message):
    with pytest.raises(ValueError, match=message):
        mjd_of(text)


def test_dates_are_told_to_the_minute():
    assert date_words(51544.5) == "2000-01-01 12:00"


@pytest.mark.parametrize(
    ("ra", "dec", "hours", "degrees"),
    [
        (187.5, -0.5, "12 30 00.00", "-00 30 00.0"),
        (359.9999999, 89.9999999, "00 00 00.00", "+90 00 00.0"),
        (15.0 / 3600.0 * 59.997, -1e-9, "00 01 00.00", "+00 00 00.0"),
    ],
)
def test_places_are_rounded_and_never_sixty(ra, dec, hours, degrees):
    assert sexagesimal(ra, dec) == (hours, degrees)
