"""World coordinates: trusted when sound, refused with a reason when broken."""

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from latelight.errors import FrameError
from latelight.frames.celestial import checked_wcs, footprint

PATH = Path("a.fits")
SHAPE = (200, 300)
TAN = {
    "CTYPE1": "RA---TAN",
    "CTYPE2": "DEC--TAN",
    "CRVAL1": 359.99,
    "CRVAL2": -30.0,
    "CRPIX1": 150.0,
    "CRPIX2": 100.0,
    "CD1_1": -1e-4,
    "CD1_2": 0.0,
    "CD2_1": 0.0,
    "CD2_2": 1e-4,
}
SIP = {
    "CTYPE1": "RA---TAN-SIP",
    "CTYPE2": "DEC--TAN-SIP",
    "A_ORDER": 2,
    "B_ORDER": 2,
    "A_2_0": 1e-6,
    "B_0_2": -2e-6,
}


def check(words, primary=None):
    headers = (fits.Header(words),)
    if primary is not None:
        headers += (fits.Header(primary),)
    return checked_wcs(PATH, headers, shape=SHAPE)


@pytest.mark.parametrize("extra", [{}, SIP, {"RADESYS": "ICRS", "EQUINOX": 2000.0}])
def test_sound_wcs_is_kept(extra):
    wcs, notes = check(TAN | extra)
    ra, dec = wcs.all_pix2world(149.0, 99.0, 0)
    assert float(ra) == pytest.approx(359.99)
    assert float(dec) == pytest.approx(-30.0)
    assert notes == ()


def test_scamp_style_pv_is_kept():
    pv = {"PV1_0": 0.0, "PV1_1": 1.0, "PV1_7": 1e-4, "PV2_0": 0.0, "PV2_1": 1.0}
    wcs, _ = check(TAN | pv)
    assert wcs is not None


@pytest.mark.parametrize("words", [{}, {"CTYPE1": "LINEAR", "CTYPE2": "LINEAR"}])
def test_without_a_wcs(words):
    wcs, notes = check(words | {"RA": 10.0, "DEC": 20.0})
    assert wcs is None
    assert "no WCS" in notes[0]
    assert "RA and DEC words alone" in notes[0]


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"CD1_1": 0.0}, "CD matrix is singular"),
        ({"CD1_1": 1e-4, "CD1_2": 1e-4, "CD2_1": 1e-4}, "singular"),
        ({"A_ORDER": 2, "B_ORDER": 2, "A_2_0": 1e-6}, "need -SIP"),
        (SIP | {"PV1_7": 1e-4}, "both SIP and PV"),
        ({"CTYPE1": "GLON-TAN", "CTYPE2": "GLAT-TAN"}, "right ascension"),
        ({"CTYPE1": "DEC--TAN", "CTYPE2": "RA---TAN"}, "right ascension"),
        ({"CTYPE1": "WAVE", "CTYPE2": "FREQ"}, "right ascension"),
        ({"RADESYS": "FK4", "EQUINOX": 1950.0}, "ICRS or J2000"),
        (SIP | {"A_2_0": 0.02, "B_0_2": 0.02}, "broken WCS"),
        ({"CRVAL1": "east"}, "broken WCS"),
        ({"CRVAL2": 95.0}, "broken WCS"),
    ],
)
def test_broken_wcs_is_refused(changes, reason):
    with pytest.raises(FrameError, match=reason) as caught:
        check(TAN | changes)
    assert caught.value.path == PATH


def test_odd_equinox_is_noted():
    _, notes = check(TAN | {"EQUINOX": 2016.5, "RADESYS": "FK5"})
    assert "equinox 2016.5" in notes[0]


def test_reference_system_is_inherited():
    with pytest.raises(FrameError, match="ICRS or J2000"):
        check(TAN, {"RADESYS": "FK4"})


def test_footprint_is_the_outer_edge_of_the_pixels():
    wcs, _ = check(TAN)
    corners = footprint(wcs, shape=SHAPE)
    assert corners.shape == (4, 2)
    assert (corners[:, 0] >= 0).all()
    assert (corners[:, 0] < 360).all()
    # 300 x 200 pixels of 0.36 arcsec: 0.03 x 0.02 degrees, to the flat-sky error.
    width = (corners[1, 0] - corners[0, 0] + 180) % 360 - 180
    assert abs(width) * np.cos(np.radians(30)) == pytest.approx(0.03, rel=1e-3)
    assert corners[2, 1] - corners[1, 1] == pytest.approx(0.02, rel=1e-3)
    assert footprint(None, shape=SHAPE) is None
