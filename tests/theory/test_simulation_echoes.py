"""Rendered echoes obey the geometry of light echoes and say how detectable they are."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import ndimage

from latelight.echo.geometry import delay_yr, depth_pc, speed_arcsec_yr
from latelight.records import Source
from latelight.simulation import _kernels
from latelight.simulation.astrometry import frame_wcs
from latelight.simulation.dust import DustSheet, DustTexture, Relief
from latelight.simulation.echoes import Echo, Viewpoint, render_echo, sheet_slopes
from latelight.simulation.exposures import Camera, Exposure
from latelight.simulation.measuring import measure_echo
from latelight.simulation.optics import MoffatField
from latelight.simulation.outburst import LightCurve
from latelight.simulation.scenes import random_pair
from latelight.sky import offset_position, position_angle, separation_deg, wrap_180

pytestmark = pytest.mark.theory

SHAPE = (300, 300)
SOURCE = Source("Bramble 1650", 150.0, 20.0, 5000.0, 0.0, 350.0, 0.0, 60_000.0)
RA, DEC = (float(v) for v in offset_position(150.0, 20.0, 205.0, 1.4))
FLAT = Relief(np.zeros(1), np.zeros(1), np.full(1, np.pi / 2), 0.0)


def smooth_dust(half_arcsec: float = 45.0) -> DustTexture:
    """Uniform dust with a round, faded rim far from where the echo is measured."""
    grid = np.arange(-half_arcsec, half_arcsec + 0.5, 1.0)
    radius = np.hypot(grid[:, None], grid[None, :])
    return DustTexture(np.clip((half_arcsec - 2.0 - radius) / 5.0, 0.0, 1.0), 1.0)


def an_exposure(mjd: float) -> Exposure:
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


def an_echo(speed_factor: float = 1.0, turn: float = 0.0, **changes) -> Echo:
    theta = separation_deg(SOURCE.ra, SOURCE.dec, RA, DEC)
    depth = float(depth_pc(theta, SOURCE.age_yr, SOURCE.distance_pc))
    away = float(position_angle(RA, DEC, SOURCE.ra, SOURCE.dec)) + 180.0
    flat = float(speed_arcsec_yr(theta, SOURCE.age_yr, SOURCE.distance_pc))
    slopes = sheet_slopes(
        SOURCE,
        ra=RA,
        dec=DEC,
        depth_pc=depth,
        speed=flat * speed_factor,
        pa=away + turn,
    )
    sheet = DustSheet(RA, DEC, depth, *slopes, 0.02, smooth_dust(), FLAT)
    curve = LightCurve("flash", 30.0, 0.2)
    return replace(Echo(SOURCE, curve, sheet, 10.0 ** (-0.4 * 22.0)), **changes)


def ridge_along(echo: Echo, exposure: Exposure, pa: float) -> float:
    """Return where the light's centroid lies along a position angle, arcsec."""
    patch = render_echo(echo, Viewpoint.of(echo, exposure))
    steps = np.arange(-25.0, 25.0, 0.05)
    ra, dec = offset_position(RA, DEC, pa, steps / 3600.0)
    x, y = exposure.wcs.all_world2pix(ra, dec, 0)
    cut = ndimage.map_coordinates(
        patch.pixels.astype(float), [y - patch.row, x - patch.col], order=3
    )
    return float(cut @ steps / cut.sum())


@pytest.mark.parametrize(("factor", "turn"), [(1.0, 0.0), (0.6, 12.0), (1.6, -25.0)])
def test_the_rendered_front_moves_as_the_exact_geometry_says(factor, turn):
    """Two close epochs: speed and direction within 1 %; the truth says the same.

    On a sheet across the line of sight the speed is the closed form of the
    ellipsoid; a tilted one was asked for ``factor`` times that, ``turn`` aside.
    """
    echo = an_echo(factor, turn)
    theta = separation_deg(SOURCE.ra, SOURCE.dec, RA, DEC)
    flat = float(speed_arcsec_yr(theta, SOURCE.age_yr, SOURCE.distance_pc))
    away = float(position_angle(RA, DEC, SOURCE.ra, SOURCE.dec)) + 180.0 + turn
    early, late = an_exposure(59_985.0), an_exposure(60_015.0)
    moved = ridge_along(echo, late, away) - ridge_along(echo, early, away)
    assert moved / (30.0 / 365.25) == pytest.approx(factor * flat, rel=0.01)

    blank = np.full(SHAPE, 200.0, np.float32)
    truth = measure_echo(
        echo, late, early, science_variance=blank, template_variance=blank
    )
    assert truth.speed_arcsec_yr == pytest.approx(factor * flat, rel=0.01)
    assert abs(float(wrap_180(truth.normal_pa - away))) < 0.3
    assert truth.shift_arcsec == pytest.approx(moved, rel=0.01)


def test_shift_is_the_same_seen_from_either_epoch():
    """The speed is that half-way, so swapping the epochs changes nothing.

    In 250 days this echo moves 10 arcsec and slows down by about 0.1 %.
    """
    echo = an_echo(0.6, 20.0)
    early, late = an_exposure(59_875.0), an_exposure(60_125.0)
    blank = np.full(SHAPE, 200.0, np.float32)
    one, other = (
        measure_echo(echo, *pair, science_variance=blank, template_variance=blank)
        for pair in ((late, early), (early, late))
    )
    assert one.shift_arcsec == pytest.approx(other.shift_arcsec, rel=2e-4)
    assert one.normal_pa == pytest.approx(other.normal_pa, abs=0.05)
    assert one.bound == pytest.approx(other.bound, rel=1e-6)
    assert one.bound_positive == pytest.approx(other.bound_negative, rel=1e-6)


def test_the_ridge_lies_where_the_delay_is_the_age_of_peak_light():
    """Thin dust, a slow front: the crest is at delay = age - time of peak."""
    echo = an_echo()
    exposure = an_exposure(60_000.0)
    away = float(position_angle(RA, DEC, SOURCE.ra, SOURCE.dec)) + 180.0
    centre = ridge_along(echo, exposure, away)
    ra, dec = offset_position(RA, DEC, away, centre / 3600.0)
    theta = separation_deg(SOURCE.ra, SOURCE.dec, ra, dec)
    delay = float(delay_yr(theta, echo.sheet.depth_pc, SOURCE.distance_pc))
    light = echo.light_curve.sampled(0.5)
    mean_time = float(np.arange(light.size) * 0.5 @ light / light.sum()) / 365.25
    slowness = 1.0 / float(speed_arcsec_yr(theta, 350.0, 5000.0))
    # The front's speed turns an error of 0.02 arcsec into this one of the delay.
    assert delay == pytest.approx(350.0 - mean_time, abs=0.02 * slowness)


def test_early_light_leads():
    """A fast rise and slow decay: the leading edge is the sharper one."""
    echo = an_echo(light_curve=LightCurve("flash", 120.0, 0.05))
    exposure = an_exposure(60_000.0)
    patch = render_echo(echo, Viewpoint.of(echo, exposure))
    away = float(position_angle(RA, DEC, SOURCE.ra, SOURCE.dec)) + 180.0
    steps = np.arange(-20.0, 20.0, 0.1)
    ra, dec = offset_position(RA, DEC, away, steps / 3600.0)
    x, y = exposure.wcs.all_world2pix(ra, dec, 0)
    cut = ndimage.map_coordinates(
        patch.pixels.astype(float), [y - patch.row, x - patch.col], order=3
    )
    crest = int(np.argmax(cut))
    above = np.flatnonzero(cut > 0.5 * cut[crest])
    assert (above[-1] - crest) < 0.6 * (crest - above[0])


def test_thick_dust_smears_the_front_by_its_depth():
    """Gaussian depth: the profile's variance grows by (speed * d(delay)/dz * s)^2."""
    thin, exposure = an_echo(), an_exposure(60_000.0)
    thick = replace(thin, sheet=replace(thin.sheet, thickness_pc=0.15))
    away = float(position_angle(RA, DEC, SOURCE.ra, SOURCE.dec)) + 180.0
    steps = np.arange(-25.0, 25.0, 0.1)
    x, y = exposure.wcs.all_world2pix(*offset_position(RA, DEC, away, steps / 3600), 0)
    spread = []
    for echo in (thin, thick):
        patch = render_echo(echo, Viewpoint.of(echo, exposure))
        cut = ndimage.map_coordinates(
            patch.pixels.astype(float), [y - patch.row, x - patch.col], order=3
        )
        mean = cut @ steps / cut.sum()
        spread.append(cut @ (steps - mean) ** 2 / cut.sum())
    theta = separation_deg(SOURCE.ra, SOURCE.dec, RA, DEC)
    z = thin.sheet.depth_pc
    per_pc = np.diff(delay_yr(theta, np.array([z - 0.1, z + 0.1]), 5000.0))[0] / 0.2
    speed = float(speed_arcsec_yr(theta, 350.0, 5000.0))
    added = (speed * per_pc) ** 2 * (0.15**2 - 0.02**2)
    # Cells of a quarter sigma, cut at 3 sigma, miss 2.7 % of the variance.
    assert spread[1] - spread[0] == pytest.approx(added, rel=0.06)


def test_depth_integral_equals_a_fine_sum():
    """24 cells with the exact running integral against 20 001 plain samples."""
    curve = LightCurve("relapse", 40.0, 0.1)
    cumulative = curve.cumulative(0.5)
    early, middle, late = (np.full((1, 1), v) for v in (-0.05, 0.12, 0.31))
    edges = np.linspace(-3.0, 3.0, 25)
    weights = ndimage.convolve1d(np.exp(-0.5 * edges**2), [0.5, 0.5])[1:]
    weights /= weights.sum()
    out = np.zeros((1, 1))
    _kernels.light_sheet(
        out,
        np.ones((1, 1)),
        early,
        middle,
        late,
        weights,
        cumulative,
        0.5 / 365.25,
        0,
        1,
    )
    s = (np.arange(24_000) + 0.5) / 12_000 - 1.0
    time = 0.12 + 0.18 * s + 0.01 * s**2
    light = np.interp(
        time * 365.25, 0.5 * np.arange(cumulative.size), curve.sampled(0.5), left=0.0
    )
    cells = light.reshape(24, -1).mean(axis=1)
    assert out[0, 0] == pytest.approx(float(weights @ cells), rel=2e-3)


def test_bound_is_the_signal_to_noise_of_a_matched_filter():
    """Filter many noisy differences with the true signal: mean/std is the bound.

    With N draws the mean of the normalised output scatters by 1/sqrt(N) and its
    standard deviation by 1/sqrt(2 N); four times those are allowed.
    """
    pair = random_pair(4, size=320, template_later=True)
    truth = pair.truth
    assert len(truth.echoes) == 1
    y, x = np.mgrid[0:320, 0:320].astype(float)
    tx, ty = truth.science_to_template(x, y)
    where = [ty, tx]
    before = ndimage.map_coordinates(truth.template.echoes, where, order=3)
    signal = truth.science.echoes - truth.scale * before
    variance = truth.science.variance + truth.scale**2 * ndimage.map_coordinates(
        truth.template.variance, where, order=1, mode="nearest"
    )
    lit = signal != 0.0
    signal, variance = signal[lit], variance[lit]
    norm = np.sqrt((signal**2 / variance).sum())
    rng = np.random.default_rng(5)
    n = 400
    outputs = [
        (signal / variance)
        @ (signal + rng.normal(size=signal.size) * np.sqrt(variance))
        / norm
        for _ in range(n)
    ]
    bound = truth.echoes[0].bound
    # Resampling the template's echo by a cubic spline costs up to 1 %.
    assert abs(np.mean(outputs) - bound) < 4.0 / np.sqrt(n) + 0.01 * bound
    assert abs(np.std(outputs) - 1.0) < 4.0 / np.sqrt(2.0 * n)
    lobes = np.hypot(truth.echoes[0].bound_positive, truth.echoes[0].bound_negative)
    assert lobes == pytest.approx(bound, rel=1e-9)
