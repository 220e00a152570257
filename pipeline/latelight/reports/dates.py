"""Dates as people write them, turned into MJD."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

__all__ = ["date_words", "mjd_of"]

_MJD_ZERO = datetime(1858, 11, 17, tzinfo=UTC)
# The years 1900 and 2200: a bare year is not taken for an MJD, nor is a Julian date.
_FIRST, _LAST = 15020.0, 124593.0


def mjd_of(text: str) -> float:
    """Return the MJD (UTC) of a date.

    Parameters
    ----------
    text : str
        An ISO 8601 date, with a time of day or without (then 0h), taken as UTC
        unless it names its zone; or a number, which is an MJD.

    Raises
    ------
    ValueError
        If it is neither, or lies outside the years 1900 to 2200.
    """
    mjd = _from_iso(text)
    if mjd is None:
        mjd = _from_number(text)
    if mjd is None:
        msg = (
            "must be a date such as 2027-03-14, 2027-03-14T05:30 (UTC) or an MJD such "
            f"as 61478.2, got {text!r}"
        )
        raise ValueError(msg)
    if not _FIRST <= mjd <= _LAST:
        cure = "write a bare year as a date, and take 2400000.5 from a Julian date"
        msg = (
            f"must be an MJD from {_FIRST:.0f} to {_LAST:.0f} (1900 to 2200), got "
            f"{text!r}; {cure}"
        )
        raise ValueError(msg)
    return mjd


def date_words(mjd: float) -> str:
    """Return the UTC date and time of an MJD to the minute."""
    moment = _MJD_ZERO + timedelta(minutes=round(mjd * 1440.0))
    return moment.strftime("%Y-%m-%d %H:%M")


def _from_iso(text: str) -> float | None:
    try:
        moment = datetime.fromisoformat(text.strip())
    except ValueError:
        return None
    if moment.tzinfo is None:
        moment = moment.replace(tzinfo=UTC)
    return (moment - _MJD_ZERO) / timedelta(days=1)


def _from_number(text: str) -> float | None:
    try:
        return float(text)
    except ValueError:
        return None
