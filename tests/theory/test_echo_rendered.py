"""Echoes of tilted sheets as the simulation renders them, read back by the physics.

The rendering adds light by the delay of every point of the sheet and knows nothing of
slopes, ages from motion or widths.
"""

from dataclasses import replace

import numpy as np
import pytest
from scipy import ndimage

from latelight.echo.geometry import depth_pc, speed_arcsec_yr
from latelight.echo.inversion import age_and_depth, sheet_slope
from latelight.echo.profile_width import profile_width
from latelight.records import Source
from latelight.simulation.astrometry import frame_wcs
from latelight.simulation.dust import DustSheet, DustTexture, Relief
from latelight.simulation.echoes import Echo, Viewpoint, render_echo, sheet_slopes
from latelight.simulation.exposures import Camera, Exposure
from latelight.simulation.optics import MoffatField
from latelight.simulation.outburst import LightCurve
from latelight.sky import offset_position, position_angle, separation_deg

pytestmark = pytest.mark.theory

SHAPE = (300, 300)
DISTANCE, AGE = 5000.0, 350.0
SOURCE = Source("Bramble 1650", 150.0, 20.0, DISTANCE, 0.0, AGE, 0.0, 60_000.0)
RA, DEC = (float(v) for v in offset_position(150.0, 20.0, 205.0, 1.4))
THETA = float(separation_deg(SOURCE.ra, SOURCE.dec, RA, DEC))
AWAY = float(position_angle(RA, DEC, SOURCE.ra, SOURCE.dec)) + 180.0
DEPTH = float(depth_pc(THETA, AGE, DISTANCE))
FLAT = float(speed_arcsec_yr(THETA, AGE, DISTANCE))


def exposure(mjd):
    camera = Camera(shape=SHAPE)
    wcs = frame_wcs(
        ra=RA,
        dec=DEC,
        shape=SHAPE,
        scale_arcsec=0.4,
        rotation_deg=7.0,
        offset_px=(0.0, 0.0),
        distortion=np.zeros(8),
    )
    psf = MoffatField(3.0, 3.5, (0.0,) * 5, (0.0,) * 3, (0.0,) * 3, SHAPE)
    return Exposure(
        camera, mjd, 120.0, "r", "TEST", wcs, wcs, psf, 28.7, 200.0, (0.0,) * 5
    )


def echo_moving(speed, turn):
    """Return an echo of a plane, uniform, thin sheet, and the plane's slopes."""
    slopes = sheet_slopes(
        SOURCE, ra=RA, dec=DEC, depth_pc=DEPTH, speed=speed, pa=AWAY + turn
    )
    grid = np.arange(-45.0, 46.0)
    radius = np.hypot(grid[:, None], grid[None, :])
    dust = DustTexture(np.clip((43.0 - radius) / 5.0, 0.0, 1.0), 1.0)
    level = Relief(np.zeros(1), np.zeros(1), np.full(1, np.pi / 2), 0.0)
    sheet = DustSheet(RA, DEC, DEPTH, *slopes, 1e-3, dust, level)
    curve = LightCurve("flash", 30.0, 0.2)
    return Echo(SOURCE, curve, sheet, 10.0 ** (-0.4 * 22.0)), slopes


def cut_along(echo, mjd, pa):
    """Return offsets, arcsec, and the light along a position angle."""
    seen = exposure(mjd)
    patch = render_echo(echo, Viewpoint.of(echo, seen))
    steps = np.arange(-25.0, 25.0, 0.05)
    ra, dec = offset_position(RA, DEC, pa, steps / 3600.0)
    x, y = seen.wcs.all_world2pix(ra, dec, 0)
    light = ndimage.map_coordinates(
        patch.pixels.astype(float), [y - patch.row, x - patch.col], order=3
    )
    return steps, light


def centroid(echo, mjd, pa):
    steps, light = cut_along(echo, mjd, pa)
    return float(light @ steps / light.sum())


@pytest.mark.parametrize(("factor", "turn"), [(1.0, 0.0), (0.6, 12.0), (1.6, -25.0)])
def test_slopes_of_the_sheet_come_back_from_its_motion(factor, turn):
    """Speed measured on two noise-free frames 30 days apart, good to 1 %.

    That is 1 % of the delay's gradient, r / (l c t) in slope; the sheet's own slopes
    are against the plane across the sight line, turned by theta = 0.024.
    """
    echo, (east, north) = echo_moving(factor * FLAT, turn)
    pa = AWAY + turn
    moved = centroid(echo, 60_015.0, pa) - centroid(echo, 59_985.0, pa)
    radial, sideways = sheet_slope(
        THETA,
        AGE,
        DISTANCE,
        speed_arcsec_yr=moved / (30.0 / 365.25),
        turn_deg=turn,
    )
    away = np.radians(AWAY)
    along = east * np.sin(away) + north * np.cos(away)
    aside = east * np.cos(away) - north * np.sin(away)
    tolerance = 0.02 + 0.05 * np.hypot(along, aside)
    assert radial == pytest.approx(along, abs=tolerance)
    assert sideways == pytest.approx(aside, abs=tolerance)


def test_age_comes_back_from_place_and_motion():
    """A sheet across the view: 1 % in speed is about 2 % in age here, where
    d ln(age) / d ln(speed) = -beta / sqrt(beta**2 - 1)."""
    echo, _ = echo_moving(FLAT, 0.0)
    ends = [centroid(echo, mjd, AWAY) for mjd in (59_985.0, 60_015.0)]
    # The light's centroid, shone late in the outburst, trails the front.
    theta = THETA + np.mean(ends) / 3600.0
    front, behind = age_and_depth(theta, np.diff(ends)[0] / (30.0 / 365.25), DISTANCE)
    truths = [abs(root.age_yr / AGE - 1.0) for root in (front, behind) if root.possible]
    assert min(truths) < 0.03


def second_moment(x, weight):
    mean = weight @ x / weight.sum()
    return float(weight @ (x - mean) ** 2 / weight.sum())


def test_width_of_the_rendered_profile():
    """Two outbursts, 20 and 40 days: the variances of their profiles differ by those
    of the light curves swept at the echo's speed; the PSF is the same in both."""
    measured, expected = [], []
    for days in (20.0, 40.0):
        echo, _ = echo_moving(FLAT, 0.0)
        echo = replace(echo, light_curve=LightCurve("flash", days, 0.2))
        measured.append(second_moment(*cut_along(echo, 60_000.0, AWAY)))
        curve = echo.light_curve.sampled(0.1)
        sigma_days = np.sqrt(second_moment(0.1 * np.arange(curve.size), curve))
        width = profile_width(THETA, AGE, DISTANCE, duration_yr=sigma_days / 365.25)
        expected.append(width.burst**2)
    assert np.diff(measured)[0] == pytest.approx(np.diff(expected)[0], rel=0.03)
