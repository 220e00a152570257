"""Five epochs of one echo: rendered light and stated truth obey the geometry."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import ndimage

from latelight.echo.geometry import (
    delay_gradient,
    delay_yr,
    depth_pc,
    light_speed_arcsec_yr,
    speed_arcsec_yr,
)
from latelight.records import Source
from latelight.simulation.astrometry import frame_wcs
from latelight.simulation.dust import DustSheet, DustTexture, Relief
from latelight.simulation.echoes import Echo, Viewpoint, render_echo, sheet_slopes
from latelight.simulation.exposures import Camera, Exposure
from latelight.simulation.fields import random_field
from latelight.simulation.following import measure_track
from latelight.simulation.optics import MoffatField
from latelight.simulation.outburst import LightCurve
from latelight.sky import (
    offset_position,
    pixel_scale_arcsec,
    position_angle,
    separation_deg,
    wrap_180,
)

pytestmark = pytest.mark.theory

SHAPE = (300, 300)
SOURCE = Source("Bramble 1650", 150.0, 20.0, 5000.0, 0.0, 350.0, 0.0, 60_000.0)
RA, DEC = (float(v) for v in offset_position(150.0, 20.0, 205.0, 1.4))
THETA = float(separation_deg(SOURCE.ra, SOURCE.dec, RA, DEC))
AWAY = float(position_angle(RA, DEC, SOURCE.ra, SOURCE.dec)) + 180.0
FLAT = Relief(np.zeros(1), np.zeros(1), np.full(1, np.pi / 2), 0.0)
MJDS = (59_820.0, 59_890.0, 60_010.0, 60_080.0, 60_180.0)


def smooth_dust(half_arcsec: float = 45.0) -> DustTexture:
    """Uniform dust with a round, faded rim far from where the echo is measured."""
    grid = np.arange(-half_arcsec, half_arcsec + 0.5, 1.0)
    radius = np.hypot(grid[:, None], grid[None, :])
    return DustTexture(np.clip((half_arcsec - 2.0 - radius) / 5.0, 0.0, 1.0), 1.0)


def an_echo(factor: float = 1.0, turn: float = 0.0) -> Echo:
    """A smooth thin sheet, flat unless asked otherwise, and a flash of 25 days."""
    depth = float(depth_pc(THETA, SOURCE.age_yr, SOURCE.distance_pc))
    flat = float(speed_arcsec_yr(THETA, SOURCE.age_yr, SOURCE.distance_pc))
    slopes = sheet_slopes(
        SOURCE, ra=RA, dec=DEC, depth_pc=depth, speed=flat * factor, pa=AWAY + turn
    )
    sheet = DustSheet(RA, DEC, depth, *slopes, 0.02, smooth_dust(), FLAT)
    return Echo(SOURCE, LightCurve("flash", 25.0, 0.2), sheet, 10.0 ** (-0.4 * 22.0))


def an_exposure(mjd: float) -> Exposure:
    """The same sky and seeing at every epoch, turned and shifted a little."""
    turn = 2.0 * np.sin(mjd)
    wcs = frame_wcs(
        ra=RA,
        dec=DEC,
        shape=SHAPE,
        scale_arcsec=0.4,
        rotation_deg=turn,
        offset_px=(3.0 * turn, -2.0 * turn),
        distortion=np.zeros(8),
    )
    psf = MoffatField(3.0, 3.5, (0.0,) * 5, (0.0,) * 3, (0.0,) * 3, SHAPE)
    return Exposure(
        Camera(shape=SHAPE),
        mjd,
        120.0,
        "r",
        "T",
        wcs,
        wcs,
        psf,
        28.7,
        200.0,
        (0.0,) * 5,
    )


EXPOSURES = tuple(an_exposure(mjd) for mjd in MJDS)
BLANK = (np.full(SHAPE, 200.0, np.float32),) * len(MJDS)


def speed_of_sheet(echo: Echo) -> float:
    """Return the speed that the delay's gradient on a tilted sheet gives, arcsec/yr."""
    away, sideways = np.radians(AWAY), np.radians(AWAY + 90.0)
    slopes = echo.sheet.slope_east, echo.sheet.slope_north
    # A plane across the way to the source recedes, seen along the line of sight.
    a = slopes[0] * np.sin(away) + slopes[1] * np.cos(away) - np.tan(np.radians(THETA))
    b = slopes[0] * np.sin(sideways) + slopes[1] * np.cos(sideways)
    across, per_tilt = delay_gradient(THETA, SOURCE.age_yr, SOURCE.distance_pc)
    gradient = np.hypot(across - per_tilt * a, per_tilt * b)
    light = light_speed_arcsec_yr(SOURCE.distance_pc - echo.sheet.depth_pc)
    return float(light / gradient)


def light_along(echo: Echo, exposure: Exposure, pa: float) -> float:
    """Return where the light's centroid lies along a position angle, arcsec."""
    patch = render_echo(echo, Viewpoint.of(echo, exposure))
    steps = np.arange(-25.0, 25.0, 0.05)
    ra, dec = offset_position(RA, DEC, pa, steps / 3600.0)
    x, y = exposure.wcs.all_world2pix(ra, dec, 0)
    cut = ndimage.map_coordinates(
        patch.pixels.astype(float), [y - patch.row, x - patch.col], order=3
    )
    return float(cut @ steps / cut.sum())


@pytest.mark.parametrize(("factor", "turn"), [(1.0, 0.0), (0.7, 10.0), (1.4, -20.0)])
def test_light_is_where_the_geometry_says_at_every_epoch(factor, turn):
    """At each of five epochs the light lies where delay = age - mean time of light.

    Over the whole span, 10 arcsec and more, the front moves as measured on the
    noise-free frames within 1 %; so says the truth.
    """
    echo = an_echo(factor, turn)
    pa = AWAY + turn
    places = np.array([light_along(echo, e, pa) for e in EXPOSURES])
    light = echo.light_curve.sampled(0.5)
    mean_d = float(np.arange(light.size) * 0.5 @ light / light.sum())
    ra, dec = offset_position(RA, DEC, pa, places / 3600.0)
    theta = separation_deg(SOURCE.ra, SOURCE.dec, ra, dec)
    east, north = echo.plate().from_sky(ra, dec)
    delay = delay_yr(theta, echo.depth(east, north), SOURCE.distance_pc)
    age = 350.0 + (np.array(MJDS) - mean_d - 60_000.0) / 365.25
    flat = float(speed_arcsec_yr(THETA, SOURCE.age_yr, SOURCE.distance_pc))
    # A centroid of the cut is good to 0.02 arcsec.
    assert (delay - age) * factor * flat == pytest.approx(0.0, abs=0.02)

    span = (MJDS[-1] - MJDS[0]) / 365.25
    measured = (places[-1] - places[0]) / span
    assert measured == pytest.approx(factor * flat, rel=0.01)
    assert measured == pytest.approx(speed_of_sheet(echo), rel=0.01)
    truth = measure_track(echo, EXPOSURES, variances=BLANK, grid=2)
    assert truth.speed_arcsec_yr == pytest.approx(measured, rel=0.01)
    assert abs(float(wrap_180(truth.normal_pa - pa))) < 0.3
    moved = np.array(truth.offsets_arcsec)
    assert moved - moved[0] == pytest.approx(places - places[0], abs=0.05)


def test_an_echo_slows_down_as_the_closed_form_does():
    """On a flat sheet radius and age grow at one depth, and the speed falls.

    Five years make the change plain; the way of 70 arcsec is that of the front,
    whether there is dust at its ends or not.
    """
    echo = an_echo()
    years = 5.0
    ends = [an_exposure(60_000.0 + sign * 0.5 * years * 365.25) for sign in (-1, 1)]
    inside = replace(echo, sheet=replace(echo.sheet, texture=smooth_dust(75.0)))
    truth = measure_track(inside, ends, variances=BLANK[:2], grid=1)
    radii = _radii(
        echo.sheet.depth_pc, 350.0 + np.array([-1.0, 0.0, 1.0]) * 0.5 * years
    )
    assert radii[1] == pytest.approx(THETA, rel=1e-9)
    change = float(np.diff(radii, 2)[0]) * 3600.0 / (0.5 * years) ** 2
    # The crest trails the youngest front by 20 days in 350 years.
    assert truth.change_arcsec_yr2 == pytest.approx(change, rel=0.01)
    assert change < 0.0


def _radii(depth: float, ages: np.ndarray) -> np.ndarray:
    """Return the angles at which a sheet of one depth is lit at ages, degrees."""
    fine = np.linspace(0.5 * THETA, 1.5 * THETA, 200_001)
    return np.interp(ages, delay_yr(fine, depth, SOURCE.distance_pc), fine)


def test_bound_of_all_epochs_is_the_sum_over_pairs_when_noise_is_equal():
    """With equal variances v: sum_i (f_i - f)^2 / v = sum_(i<j) (f_i - f_j)^2 / (n v).

    The square of a pair's bound has 2 v below, so that it enters twice.
    """
    truth = measure_track(an_echo(), EXPOSURES, variances=BLANK, grid=2)
    pairs = np.array(truth.bound_pairs)
    assert pairs == pytest.approx(pairs.T)
    assert np.all(np.diag(pairs) == 0.0)
    total = 2.0 * (np.triu(pairs) ** 2).sum() / len(MJDS)
    assert truth.bound_all == pytest.approx(np.sqrt(total), rel=1e-6)
    assert truth.bound_best == pairs.max()


def test_bound_of_two_epochs_is_that_of_their_difference():
    """A constant free in every pixel: w1 w2 / (w1 + w2) is the inverse of v1 + v2."""
    unlike = (BLANK[0], 3.0 * BLANK[0])
    truth = measure_track(an_echo(), EXPOSURES[::4], variances=unlike, grid=0)
    assert truth.bound_all == pytest.approx(truth.bound_pairs[0][1], rel=1e-6)


def test_bound_is_the_signal_to_noise_with_the_sky_free():
    """Fit echo and sky to noisy epochs by least squares: height over its scatter.

    The normal equations of (height, one sky per pixel) are solved for the height's
    variance: its inverse root is the bound, since the true height is 1.
    """
    echo, few = an_echo(), EXPOSURES[:3]
    noise = tuple(s * BLANK[0] for s in (1.0, 2.0, 0.5))
    truth = measure_track(echo, few, variances=noise, grid=1)
    views = [Viewpoint.of(echo, exposure) for exposure in few]
    base = views[1]
    light = np.array(
        [render_echo(echo, replace(v, wcs=base.wcs)).pixels.ravel() for v in views],
        dtype=float,
    )
    weight = np.array([1.0 / n[0, 0] for n in noise])
    # Schur complement of the sky's diagonal block.
    height = (weight @ light**2).sum()
    coupling = weight @ light
    information = height - (coupling**2 / weight.sum()).sum()
    # The frame cuts nothing off the patch but its dark rim.
    assert truth.bound_all == pytest.approx(np.sqrt(information), rel=1e-3)


def test_truth_of_a_random_field_agrees_with_its_frames():
    """The light at every epoch lies on the stated ridge, on the stated frame."""
    field = random_field(11, size=400, n_echoes=1, n_stars=20, brightness=(22, 23))
    (echo,) = field.truth.echoes
    for epoch, frame in enumerate(field.truth.frames):
        ra, dec = field.truth.echoes[0].ridges[epoch]
        x, y = frame.wcs.all_world2pix(ra, dec, 0)
        on = ndimage.map_coordinates(frame.echoes, [y, x], order=1)
        # The crest is where it is stated, not 3 arcsec before or behind.
        steps = np.array([-3.0, 3.0])[:, None] / 3600.0
        besides = offset_position(ra, dec, echo.normal_pa, steps)
        x, y = frame.wcs.all_world2pix(besides[0].ravel(), besides[1].ravel(), 0)
        off = ndimage.map_coordinates(frame.echoes, [y, x], order=1).reshape(2, -1)
        assert on @ echo.weights > 1.2 * (off @ echo.weights).max()
        # Its peak is the stated surface brightness; grids differ by 1 % in scale.
        area = pixel_scale_arcsec(frame.wcs, *(0.5 * v for v in frame.wcs.array_shape))
        peak = frame.zero_point - 2.5 * np.log10(frame.echoes.max() / area**2)
        assert peak == pytest.approx(echo.surface_brightness[epoch], abs=0.25)
    away = offset_position(
        echo.ra, echo.dec, echo.normal_pa, np.array(echo.offsets_arcsec) / 3600.0
    )
    assert separation_deg(*away, echo.ras, echo.decs) * 3600.0 == pytest.approx(
        0.0, abs=0.01
    )
    x, y = field.truth.frames[field.truth.grid].wcs.all_world2pix(echo.ra, echo.dec, 0)
    assert (x, y) == pytest.approx((echo.x, echo.y), abs=1e-4)
