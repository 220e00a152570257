"""Designations, UCD words and checksums against the standards' own examples."""

import io

import numpy as np
import pytest
from astropy.io import fits
from astropy.io.votable.ucd import check_ucd

from latelight.products.designation import sky_designation
from latelight.products.fits_file import fits_bytes

pytestmark = pytest.mark.reference


def degrees(sexagesimal):
    """Turn '19 57 40.558' (hours or degrees) into a number."""
    sign = -1.0 if sexagesimal.startswith("-") else 1.0
    whole, minutes, seconds = (float(part) for part in sexagesimal.split())
    return sign * (abs(whole) + minutes / 60 + seconds / 3600)


@pytest.mark.parametrize(
    ("ra", "dec", "name"),
    [
        # IAU specifications for designations, August 2018, their own example.
        ("19 57 40.558", "+33 38 27.96", "J195740.55+333827.9"),
        # The same rule worked by hand: cut after 0.01 s and 0.1 arcsec.
        ("10 44 12.127", "-60 16 01.69", "J104412.12-601601.6"),
        ("00 00 00.009", "-00 00 00.96", "J000000.00-000000.9"),
        ("23 59 59.999", "+00 00 00.00", "J235959.99+000000.0"),
    ],
)
def test_designation_is_truncated_and_signed(ra, dec, name):
    assert sky_designation(degrees(ra) * 15.0, degrees(dec)) == name


@pytest.mark.parametrize(
    ("ucd", "valid"),
    [
        # IVOA UCD1+ vocabulary 1.5 (2022-07-15): codes P, S, Q, E of each word.
        ("stat.error;phot.mag.sb;em.opt.R", True),
        ("stat.fwhm;phys.angSize", False),  # S never first
        ("phys.angsize", True),  # UCDs ignore case
        ("phys.echo", False),
    ],
)
def test_the_validator_used_for_the_columns_knows_the_rules(ucd, valid):
    assert check_ucd(ucd, check_controlled_vocabulary=True) is valid


def ones_complement_sum(stored):
    """Return the 32-bit one's-complement sum of big-endian words."""
    total = int(np.frombuffer(stored, dtype=">u4").astype(np.uint64).sum())
    while total >> 32:
        total = (total & 0xFFFFFFFF) + (total >> 32)
    return total


def test_checksums_sum_to_all_ones(tmp_path):
    """FITS 4.0, section 4.4.2.7: with CHECKSUM in place every unit sums to -0.

    The test is on the sum, since any conforming spelling of CHECKSUM is allowed.
    """
    data = np.arange(6000, dtype=np.float32).reshape(60, 100)
    image = fits.ImageHDU(data, name="IMAGE")
    packed = fits.CompImageHDU(data, name="PACKED")
    path = tmp_path / "a.fits"
    path.write_bytes(fits_bytes([fits.PrimaryHDU(), image, packed]))
    stored = path.read_bytes()
    with fits.open(path, disable_image_compression=True) as hdus:
        for hdu in hdus:
            info = hdu.fileinfo()
            body = stored[info["datLoc"] : info["datLoc"] + info["datSpan"]]
            unit = stored[info["hdrLoc"] : info["datLoc"]] + body
            assert ones_complement_sum(unit) == 0xFFFFFFFF, hdu.name
            assert hdu.header["DATASUM"] == str(ones_complement_sum(body)), hdu.name


def encode(value):
    """Encode a 32-bit sum as 16 letters: the rules of the FITS standard, app. J."""
    columns = []
    for byte in value.to_bytes(4, "big"):
        quarter, rest = divmod(byte, 4)
        letters = [quarter + 0x30] * 4
        letters[0] += rest
        while any(0x3A <= c <= 0x40 or 0x5B <= c <= 0x60 for c in letters):
            for i in (0, 2):
                if any(
                    0x3A <= c <= 0x40 or 0x5B <= c <= 0x60 for c in letters[i : i + 2]
                ):
                    letters[i] += 1
                    letters[i + 1] -= 1
        columns.append(letters)
    text = "".join(chr(columns[j][i]) for i in range(4) for j in range(4))
    return text[-1] + text[:-1]


def test_the_published_checksum_example():
    """Sum 868229149 gives hcHjjc9ghcEghc9g (HEASARC checksum document, node 14)."""
    assert 0xFFFFFFFF - 868229149 == 3426738146 == 0xCC3FDFE2
    assert encode(0xFFFFFFFF - 868229149) == "hcHjjc9ghcEghc9g"
    assert encode(0) == "0" * 16


def test_written_checksums_are_the_recommended_spelling():
    """The complement of the sum with CHECKSUM at 16 zeros, encoded."""
    data = fits_bytes([fits.PrimaryHDU(), fits.ImageHDU(np.arange(99, dtype="i4"))])
    with fits.open(io.BytesIO(data)) as hdus:
        places = [(hdu.fileinfo(), hdu.header["CHECKSUM"]) for hdu in hdus]
    for place, spelling in places:
        unit = data[place["hdrLoc"] : place["datLoc"] + place["datSpan"]]
        assert unit.count(spelling.encode()) == 1
        zeroed = unit.replace(spelling.encode(), b"0" * 16)
        assert encode(0xFFFFFFFF - ones_complement_sum(zeroed)) == spelling
