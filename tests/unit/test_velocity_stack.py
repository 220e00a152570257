"""Moving ridges found in the sum of all epochs, and what is none."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.motion.velocity_stack._kernels import take_out_ridge
from latelight.motion.velocity_stack.levels import build_levels, take_out_static
from latelight.motion.velocity_stack.search import search_velocities
from latelight.motion.velocity_stack.settings import VelocityStackSettings
from latelight.records import EpochSeries
from latelight.threads import n_threads, set_threads

SIZE, NOISE, FWHM = 288, 10.0, 3.2
SETTINGS = VelocityStackSettings(largest_shift_px=50.0)
MJD = np.array([60_000.0, 60_055.0, 60_110.0, 60_150.0, 60_200.0])
SPAN_YR = 200.0 / 365.25


def ridges(angle, shift, *, sigma=2.2, half=45.0, phase=None, x=144.0, y=144.0):
    """Return ridges of height 1 at every epoch, shape (n, SIZE, SIZE)."""
    if phase is None:
        phase = (MJD - 60_100.0) / 200.0
    yy, xx = np.mgrid[:SIZE, :SIZE].astype(float)
    across = (xx - x) * np.cos(angle) + (yy - y) * np.sin(angle)
    along = (yy - y) * np.cos(angle) - (xx - x) * np.sin(angle)
    apart = (across - shift * phase[:, None, None]) / sigma
    return np.exp(-0.5 * apart**2) * np.exp(-((along / half) ** 8))


def series_of(signal, rng, *, mjd=MJD):
    """Return white noise on a static scene, with a signal of given counts."""
    n = len(mjd)
    scene = rng.normal(0.0, 50.0, (SIZE, SIZE))
    pixels = scene + signal + rng.normal(0.0, NOISE, (n, SIZE, SIZE))
    pixels -= scene  # what a template without noise leaves
    return EpochSeries(
        pixels=pixels.astype(np.float32),
        variance=np.full(pixels.shape, NOISE**2, np.float32),
        mask=np.zeros(pixels.shape, np.uint16),
        mjd=np.asarray(mjd, dtype=float),
        fwhm_px=np.full(n, FWHM),
        noise_ratio=np.ones(n),
        names=tuple(f"epoch_{i}" for i in range(n)),
    )


def scaled(shape, snr):
    """Scale shapes to the S/N of the perfect filter, static sky free."""
    rest = shape - shape.mean(axis=0)
    return shape * snr * NOISE / np.sqrt((rest**2).sum())


def search(series, settings=SETTINGS):
    return search_velocities(series, settings=settings)


@pytest.mark.parametrize("degrees", [20.0, 215.0, 300.0])
def test_a_ridge_too_faint_for_every_pair_is_found(degrees, rng):
    # S/N 11 in all, 5.5 in the best pair; the fit shifts it by about 1.
    signal = scaled(ridges(np.radians(degrees), 30.0), 11.0)
    seeds = search(series_of(signal, rng))
    assert len(seeds) == 1
    (seed,) = seeds
    turned = (seed.direction_angle - degrees + 180.0) % 360.0 - 180.0
    assert abs(turned) < 5.0
    assert seed.speed_px_yr == pytest.approx(30.0 / SPAN_YR, rel=0.08)
    assert seed.snr == pytest.approx(11.0, abs=3.0)
    assert seed.mjd == 60_100.0
    assert seed.origin == "stack"
    assert seed.arc == -1
    middle = seed.trace.x.size // 2
    place = np.array([seed.trace.x[middle] - 144.0, seed.trace.y[middle] - 144.0])
    normal = np.radians(seed.trace.normal_angle[middle])
    assert abs(place @ [np.cos(normal), np.sin(normal)]) < 2.0
    turned = (seed.trace.normal_angle[middle] - degrees + 180.0) % 360.0 - 180.0
    assert abs(turned) < 5.0
    steps = np.hypot(np.diff(seed.trace.x), np.diff(seed.trace.y))
    assert steps == pytest.approx(1.0, abs=0.1)
    assert seed.width_px == pytest.approx(2.2 * 2.3548, rel=0.35)


def test_a_bright_ridge_is_one_seed(rng):
    seeds = search(series_of(scaled(ridges(0.5, 30.0), 60.0), rng))
    assert len(seeds) == 1
    assert seeds[0].speed_px_yr == pytest.approx(30.0 / SPAN_YR, rel=0.03)


def test_two_ridges_come_the_stronger_first(rng):
    signal = scaled(ridges(0.3, 25.0, half=30.0, x=80.0), 14.0)
    signal += scaled(ridges(2.2, 35.0, half=30.0, x=210.0), 24.0)
    seeds = search(series_of(signal, rng))
    assert len(seeds) == 2
    assert seeds[0].snr > seeds[1].snr
    assert abs(np.mean(seeds[0].trace.x) - 210.0) < 15.0


def test_three_epochs_are_enough(rng):
    mjd = np.array([60_000.0, 60_080.0, 60_200.0])
    phase = (mjd - 60_100.0) / 200.0
    signal = scaled(ridges(1.1, 40.0, phase=phase), 13.0)
    (seed,) = search(series_of(signal, rng, mjd=mjd))
    assert seed.speed_px_yr == pytest.approx(40.0 / SPAN_YR, rel=0.06)


def test_nothing_is_found_in_noise():
    # At 6.7 sigma about one field of 1024 pixels in ten; four of 288 in two hundred.
    for number in range(4):
        assert search(series_of(0.0, np.random.default_rng(900 + number))) == ()


@pytest.mark.parametrize("epoch", [0, 3])
def test_a_trail_at_one_epoch_is_none(epoch, rng):
    signal = ridges(0.8, 30.0, half=300.0)
    signal[np.arange(5) != epoch] = 0.0
    assert search(series_of(40.0 * signal, rng)) == ()


def test_a_ghost_at_two_epochs_is_none(rng):
    signal = ridges(0.8, 30.0)
    signal[[0, 2, 4]] = 0.0
    assert search(series_of(scaled(signal, 16.0), rng)) == ()


def test_residues_of_stars_stay_and_are_none(rng):
    yy, xx = np.mgrid[:SIZE, :SIZE].astype(float)
    signal, variance = np.zeros((5, SIZE, SIZE)), np.full((SIZE, SIZE), NOISE**2)
    for x, y in rng.uniform(20.0, SIZE - 20.0, (40, 2)):
        star = np.exp(-((xx - x) ** 2 + (yy - y) ** 2) / (2.0 * 1.4**2))
        # Anew at every epoch, up to 12 sigma of the sky; the variance says so.
        signal += rng.normal(0.0, 4.0 * NOISE, 5)[:, None, None] * star
        variance += (4.0 * NOISE * star) ** 2
    series = series_of(signal, rng)
    stated = np.broadcast_to(variance, signal.shape).astype(np.float32)
    assert search(replace(series, variance=stated)) == ()


def test_a_still_ridge_is_none(rng):
    signal = np.broadcast_to(ridges(0.8, 0.0), (5, SIZE, SIZE))
    assert search(series_of(30.0 * signal, rng)) == ()


def test_masked_pixels_do_not_count(rng):
    series = series_of(scaled(ridges(0.0, 30.0), 14.0), rng)
    wild = np.array(series.pixels)
    mask = np.array(series.mask)
    # Wild values on a fifth of all pixels, all of them masked.
    bad = rng.random(wild.shape) < 0.2
    wild[bad], mask[bad] = 1e6, 4
    series = replace(series, pixels=wild, mask=mask)
    moving = take_out_static(series, smooth_px=26.0)
    assert not moving.weight[bad].any()
    assert moving.total == pytest.approx((~bad).sum(axis=0) / NOISE**2, rel=1e-5)
    (seed,) = search(series)
    assert seed.speed_px_yr == pytest.approx(30.0 / SPAN_YR, rel=0.08)


def test_taking_a_ridge_out_is_masking_it(rng):
    series = series_of(0.0, rng)
    moving = take_out_static(series, smooth_px=26.0)
    arrays = moving.pixels, moving.weight, moving.signal, moving.total
    take_out_ridge(*arrays, 2, 144.0, 144.0, 0.5, 0.0, -30.0, 20.0, 6.0)
    yy, xx = np.mgrid[:SIZE, :SIZE] - 144.0
    across = xx * np.cos(0.5) + yy * np.sin(0.5)
    along = yy * np.cos(0.5) - xx * np.sin(0.5)
    inside = (np.abs(across) <= 6.0) & (along >= -30.0) & (along <= 20.0)
    weight = np.full(series.pixels.shape, 1.0 / NOISE**2)
    weight[2, inside] = 0.0
    total = weight.sum(axis=0)
    mean = (weight * moving.pixels).sum(axis=0) / total
    assert moving.weight == pytest.approx(weight, rel=1e-6)
    assert moving.total == pytest.approx(total, rel=1e-6)
    assert moving.signal == pytest.approx(weight * (moving.pixels - mean), abs=1e-6)


def test_fully_masked_series_hold_nothing(rng):
    series = series_of(scaled(ridges(0.0, 30.0), 14.0), rng)
    mask = np.full(series.mask.shape, 1, np.uint16)
    assert search(replace(series, mask=mask)) == ()


def test_faster_ridges_than_asked_for_are_left(rng):
    series = series_of(scaled(ridges(0.4, 45.0), 20.0), rng)
    assert len(search(series)) == 1
    assert search(series, VelocityStackSettings(largest_shift_px=20.0)) == ()


def test_few_epochs_or_none_wanted_bring_nothing(rng):
    series = series_of(scaled(ridges(0.4, 30.0), 20.0), rng)
    assert search(series, VelocityStackSettings(least_epochs=6)) == ()
    assert search(series, VelocityStackSettings(enabled=False)) == ()
    assert search(replace(series, mjd=np.full(5, 60_000.0))) == ()


def test_input_stays_and_threads_do_not_matter(rng):
    series = series_of(scaled(ridges(0.4, 30.0), 12.0), rng)
    before = [a.copy() for a in (series.pixels, series.variance, series.mask)]
    threads = n_threads()
    found = []
    try:
        for count in (1, 3):
            set_threads(count)
            found.append(search(series))
    finally:
        set_threads(threads)
    assert len(found[0]) == len(found[1]) == 1
    one, other = found[0][0], found[1][0]
    assert one.snr == other.snr
    assert np.array_equal(one.trace.x, other.trace.x)
    after = (series.pixels, series.variance, series.mask)
    assert all(np.array_equal(a, b) for a, b in zip(before, after, strict=True))


def test_a_gradient_that_changes_is_taken_off(rng):
    slope = np.linspace(-10.0, 10.0, SIZE)
    signal = np.array([0.0, 1.0, -1.0, 0.5, 2.0])[:, None, None] * slope[None, None, :]
    moving = take_out_static(
        series_of(np.broadcast_to(signal, (5, SIZE, SIZE)), rng), smooth_px=26.0
    )
    # Of 23 counts at most nothing is left but noise: 0.2 counts, 5 sigma of it.
    inner = moving.pixels[:, 60:-60, 60:-60].mean(axis=1)
    ends = inner[:, -40:].mean(axis=1) - inner[:, :40].mean(axis=1)
    assert ends == pytest.approx(0.0, abs=1.0)


def test_levels_keep_all_signal_and_weight(rng):
    moving = take_out_static(series_of(0.0, rng), smooth_px=26.0)
    levels = build_levels(moving, fwhm_px=FWHM, widest_px=26.0)
    assert [level.bin_px for level in levels] == [2, 4, 8]
    weight = moving.weight * (1.0 - moving.weight / moving.total)
    for level in levels:
        assert level.weight.sum() == pytest.approx(weight.sum(), rel=1e-4)
        assert level.signal[0].sum() == pytest.approx(
            moving.signal[0].sum(dtype=float), abs=1e-2
        )
