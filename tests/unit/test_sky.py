"""Sky geometry against astropy's coordinates and against itself."""

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.wcs import WCS

from latelight import sky


def _tan_wcs(dec=-31.0, rotation=20.0, flip=-1.0):
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [212.5, dec]
    wcs.wcs.crpix = [257.0, 129.0]
    c, s = np.cos(np.radians(rotation)), np.sin(np.radians(rotation))
    wcs.wcs.cd = np.array([[flip * c, -s], [flip * s, c]]) * 0.4 / 3600
    return wcs


@pytest.fixture
def places():
    rng = np.random.default_rng(7)
    n = 500
    ra = rng.uniform(0, 360, (2, n))
    dec = np.degrees(np.arcsin(rng.uniform(-1, 1, (2, n))))
    return ra[0], dec[0], ra[1], dec[1]


def test_separation_agrees_with_astropy(places):
    ra1, dec1, ra2, dec2 = places
    a, b = SkyCoord(ra1, dec1, unit="deg"), SkyCoord(ra2, dec2, unit="deg")
    expected = a.separation(b).deg
    np.testing.assert_allclose(sky.separation_deg(*places), expected, atol=1e-12)


def test_position_angle_agrees_with_astropy(places):
    ra1, dec1, ra2, dec2 = places
    a, b = SkyCoord(ra1, dec1, unit="deg"), SkyCoord(ra2, dec2, unit="deg")
    gap = sky.wrap_180(sky.position_angle(*places) - a.position_angle(b).deg)
    assert np.abs(gap).max() < 1e-10


def test_offset_position_agrees_with_astropy(places):
    ra, dec, pa, _ = places
    distance = np.linspace(0.001, 170, ra.size)
    expected = SkyCoord(ra, dec, unit="deg").directional_offset_by(
        pa * u.deg, distance * u.deg
    )
    got = SkyCoord(*sky.offset_position(ra, dec, pa, distance), unit="deg")
    assert got.separation(expected).deg.max() < 1e-10


def test_position_angle_runs_east_of_north_across_ra_zero():
    assert sky.position_angle(359.9, 0.0, 0.1, 0.0) == pytest.approx(90.0, abs=1e-3)
    assert sky.position_angle(0.1, 0.0, 359.9, 0.0) == pytest.approx(270.0, abs=1e-3)
    assert sky.position_angle(10.0, 0.0, 10.0, 1.0) == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("flip", [-1.0, 1.0])
@pytest.mark.parametrize("dec", [-31.0, 75.0, 89.9])
def test_pixel_angle_follows_the_wcs(flip, dec):
    """A step along a pixel angle lands at the position angle it was said to have."""
    wcs = _tan_wcs(dec=dec, flip=flip)
    x, y = 100.0, 200.0
    for angle in (0.0, 37.0, 145.0, 300.0):
        pa, scale = sky.pixel_angle_to_position_angle(wcs, x, y, angle)
        step = 0.2
        dx, dy = step * np.cos(np.radians(angle)), step * np.sin(np.radians(angle))
        ra, dec_ = wcs.all_pix2world([x, x + dx], [y, y + dy], 0)
        start = SkyCoord(ra[0], dec_[0], unit="deg")
        stop = SkyCoord(ra[1], dec_[1], unit="deg")
        gap = sky.wrap_180(pa - start.position_angle(stop).deg)
        assert abs(gap) < 1e-3
        assert scale == pytest.approx(start.separation(stop).arcsec / step, rel=1e-4)
        back = sky.position_angle_to_pixel_angle(wcs, x, y, pa)
        assert abs(sky.wrap_180(back - angle)) < 1e-6


def test_pixel_scale_is_the_root_of_the_pixel_area():
    assert sky.pixel_scale_arcsec(_tan_wcs(), 256, 128) == pytest.approx(0.4, rel=1e-7)


@pytest.mark.reference
def test_tan_projection_shortens_one_degree():
    """1.0 deg in the plane is 0.99989848 deg on the sky (computed from the TAN law)."""
    wcs = _tan_wcs(dec=0.0, rotation=0.0)
    pixels = 3600 / 0.4
    ra, dec = wcs.all_pix2world([256.0, 256.0 + pixels], [128.0, 128.0], 0)
    gap = sky.separation_deg(ra[0], dec[0], ra[1], dec[1])
    assert gap == pytest.approx(0.99989848, abs=1e-8)


def test_wrap_180_covers_the_circle():
    np.testing.assert_allclose(
        sky.wrap_180([-190, -180, 0, 179.5, 180, 540]),
        [170, -180, 0, 179.5, -180, -180],
    )
