"""Registration against general libraries: astropy's WCS, reproject, scipy."""

import numpy as np
import pytest
from astropy.wcs import WCS, Sip
from reproject import reproject_interp
from scipy import ndimage

from latelight.records import Plane
from latelight.registration.pixel_map import evaluate, jacobian_determinant, wcs_map
from latelight.registration.resampling import resample
from latelight.registration.settings import RegistrationSettings
from latelight.sky import pixel_scale_arcsec

pytestmark = pytest.mark.reference

SHAPE = (300, 360)
SETTINGS = RegistrationSettings()


def sip_wcs(*, angle=0.0, ra=210.0, dec=54.0, scale_arcsec=0.4, bend=1e-6):
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN-SIP", "DEC--TAN-SIP"]
    wcs.wcs.crval = [ra, dec]
    wcs.wcs.crpix = [180.0, 150.0]
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    wcs.wcs.cd = scale_arcsec / 3600.0 * np.array([[-c, s], [s, c]])
    a, b = np.zeros((4, 4)), np.zeros((4, 4))
    a[2, 0], a[1, 1], b[0, 2], b[3, 0] = bend, -bend, 2 * bend, 1e-3 * bend
    wcs.sip = Sip(a, b, None, None, wcs.wcs.crpix)
    wcs.wcs.set()
    return wcs


@pytest.fixture
def pair():
    return sip_wcs(), sip_wcs(angle=2.0, ra=210.002, dec=54.001, bend=-2e-6)


def pixel_areas(pixel_map):
    """Template pixels per science pixel everywhere, by central differences."""
    y, x = np.mgrid[0 : SHAPE[0], 0 : SHAPE[1]].astype(float)
    along_x = np.subtract(
        evaluate(pixel_map, x + 0.5, y), evaluate(pixel_map, x - 0.5, y)
    )
    along_y = np.subtract(
        evaluate(pixel_map, x, y + 0.5), evaluate(pixel_map, x, y - 0.5)
    )
    return np.abs(along_x[0] * along_y[1] - along_x[1] * along_y[0])


def test_map_is_the_wcs_at_every_pixel(pair):
    pixel_map = wcs_map(*pair, shape=SHAPE)
    y, x = np.mgrid[0 : SHAPE[0] : 7, 0 : SHAPE[1] : 7].reshape(2, -1).astype(float)
    sky = pair[0].all_pix2world(x, y, 0)
    expected = pair[1].all_world2pix(*sky, 0, tolerance=1e-8)
    got = evaluate(pixel_map, x, y)
    # astropy's own inverse stops at 1e-4 px unless told otherwise.
    assert np.abs(np.array(got) - expected).max() < 1e-4


def test_jacobian_is_the_ratio_of_pixel_areas(pair):
    pixel_map = wcs_map(*pair, shape=SHAPE)
    middle = (
        np.argmin(np.abs(pixel_map.node_y - 150)),
        np.argmin(np.abs(pixel_map.node_x - 180)),
    )
    x, y = pixel_map.node_x[middle[1]], pixel_map.node_y[middle[0]]
    there = evaluate(pixel_map, x, y)
    ratio = pixel_scale_arcsec(pair[0], x, y) / pixel_scale_arcsec(pair[1], *there)
    assert jacobian_determinant(pixel_map)[middle] == pytest.approx(ratio**2, rel=1e-5)


def test_no_map_without_wcs_or_inverse(pair):
    assert wcs_map(None, pair[1], shape=SHAPE) is None
    assert wcs_map(pair[0], None, shape=SHAPE) is None
    other_side_of_the_sky = sip_wcs(ra=30.0, dec=-54.0)
    assert wcs_map(pair[0], other_side_of_the_sky, shape=SHAPE) is None


def test_values_agree_with_reproject_bicubic(pair, star_plane, rng):
    x, y = rng.uniform(20, 280, (2, 60))
    plane = star_plane(x, y, np.full(60, 1e4), shape=SHAPE, sigma=1.9, sky=100.0)
    pixel_map = wcs_map(*pair, shape=SHAPE)
    got = resample(plane, pixel_map, shape=SHAPE, settings=SETTINGS)
    expected, footprint = reproject_interp(
        (plane.pixels, pair[1]), pair[0], shape_out=SHAPE, order="bicubic"
    )
    good = (got.mask == 0) & (footprint > 0)
    good[:8] = good[-8:] = False
    good[:, :8] = good[:, -8:] = False
    assert good.mean() > 0.6
    # reproject keeps surface brightness, resample counts.
    difference = (got.pixels / pixel_areas(pixel_map) - expected)[good]
    peak = 1e4 / (2 * np.pi * 1.9**2)
    # At a FWHM of 4.5 px each axis errs by up to 8e-4 with either method, and
    # stars that touch add up.
    assert np.abs(difference).max() < 4e-3 * peak
    assert np.sqrt(np.mean(difference**2)) < 3e-4 * peak


def test_values_agree_with_scipy_splines(pair, star_plane):
    plane = star_plane([80.2, 200.7], [90.4, 150.1], [5e4, 5e4], shape=SHAPE, sigma=2.5)
    pixel_map = wcs_map(*pair, shape=SHAPE)
    got = resample(plane, pixel_map, shape=SHAPE, settings=SETTINGS)
    row, col = np.mgrid[20:280:3, 20:340:3].reshape(2, -1)
    x, y = evaluate(pixel_map, col, row)
    # Splines of order 5 err by 1e-5 at this width.
    expected = ndimage.map_coordinates(plane.pixels, [y, x], order=5, mode="nearest")
    area = pixel_areas(pixel_map)[row, col]
    peak = 5e4 / (2 * np.pi * 2.5**2)
    miss = np.abs(got.pixels[row, col] / area - expected)
    # 7e-4 in each axis at 6 px.
    assert miss.max() < 1.4e-3 * peak


def test_planes_of_a_frame_stay_together(rng):
    """A shift by the WCS moves mask and pixels alike."""
    one, two = sip_wcs(bend=0.0), sip_wcs(bend=0.0)
    two.wcs.crpix = [187.0, 146.0]
    two.wcs.set()
    plane = Plane(
        rng.normal(0, 1, SHAPE).astype(np.float32),
        np.ones(SHAPE, np.float32),
        np.zeros(SHAPE, np.uint16),
    )
    plane.mask[100, 200] = 4
    got = resample(
        plane, wcs_map(one, two, shape=SHAPE), shape=SHAPE, settings=SETTINGS
    )
    assert got.mask[104, 193] == 4
    assert got.pixels[50:200, 50:300] == pytest.approx(
        plane.pixels[46:196, 57:307], abs=1e-3
    )
