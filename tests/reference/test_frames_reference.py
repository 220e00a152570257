"""Published numbers: epochs and digests."""

import pytest

from latelight.frames.digest import file_digest
from latelight.frames.words import parse_date

pytestmark = pytest.mark.reference


@pytest.mark.parametrize(
    ("date", "mjd"),
    [
        # J2000.0 is JD 2451545.0, and MJD = JD - 2400000.5: IAU 1994, resolution C7
        # and IAU 1997, resolution B1 (from memory).
        ("2000-01-01T12:00:00", 51544.5),
        # Day 0 of the Modified Julian Date (from memory).
        ("1858-11-17", 0.0),
        # Start of Unix time (common practice).
        ("1970-01-01T00:00:00", 40587.0),
        # The example date of FITS standard 4.0, section 4.4.2.1 (from memory).
        ("31/12/99", 51543.0),
    ],
)
def test_dates(date, mjd):
    assert parse_date(date) == pytest.approx(mjd, abs=1e-9)


@pytest.mark.parametrize(
    ("content", "digest"),
    [
        # FIPS 180-4, example "abc" (from memory), and the empty message.
        (b"abc", "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"),
        (b"", "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"),
    ],
)
def test_digest(tmp_path, content, digest):
    path = tmp_path / "file"
    path.write_bytes(content)
    assert file_digest(path) == digest
