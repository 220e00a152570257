"""Differences of one field gathered on their template's grid."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.masks import MaskBit
from latelight.night.calibration import Calibration
from latelight.night.series import (
    Grid,
    SeriesPart,
    build_series,
    group_parts,
    seed_on_grid,
    to_grid,
    write_part,
)
from latelight.records import Arc, ArcTrace, Difference, Motion
from latelight.registration.pixel_map import identity_map
from latelight.registration.settings import RegistrationSettings

SHAPE = (96, 128)
SETTINGS = RegistrationSettings()


def difference(pixels, variance=4.0, mask=None):
    shape = pixels.shape
    return Difference(
        pixels=pixels.astype(np.float32),
        variance=np.full(shape, variance, np.float32),
        mask=np.zeros(shape, np.uint16) if mask is None else mask,
        fwhm_px=3.0,
        noise_ratio=1.0,
        method="kernel",
        compact=(),
        star_scatter=0.0,
        star_shift_px=0.0,
    )


def moved(shape, *, dx, dy):
    """A map by which science pixel (x, y) is template pixel (x + dx, y + dy)."""
    same = identity_map(shape)
    return replace(same, map_x=same.map_x + dx, map_y=same.map_y + dy)


def bump(x0, y0, sigma=3.0, shape=SHAPE):
    y, x = np.mgrid[: shape[0], : shape[1]]
    return 100.0 * np.exp(-((x - x0) ** 2 + (y - y0) ** 2) / (2.0 * sigma**2))


def epoch_of(pixels, **changed):
    words = {
        "scale": 1.0, "template_share": 0.5, "shape": SHAPE, "settings": SETTINGS,
        "pixel_map": moved(SHAPE, dx=0.0, dy=0.0),
    } | changed  # fmt: skip
    pixel_map = words.pop("pixel_map")
    return to_grid(difference(pixels), pixel_map, **words)


def test_light_lands_where_the_template_has_it():
    epoch = epoch_of(bump(60.0, 40.0), pixel_map=moved(SHAPE, dx=7.3, dy=-4.6))
    expected = bump(67.3, 35.4)
    use = epoch.mask == 0
    assert use[20:70, 30:110].all()
    # Interpolating a Gaussian of sigma 3 px errs by 2e-3 of its peak.
    assert np.abs(epoch.pixels - expected)[use].max() < 0.3


def test_counts_and_noise_are_the_grids():
    epoch = epoch_of(bump(60.0, 40.0), scale=2.0, template_share=0.25)
    assert epoch.pixels.max() == pytest.approx(50.0, rel=1e-3)
    # Variance 4 over scale**2 = 1, three quarters of it the epoch's own.
    assert np.median(epoch.variance) == pytest.approx(0.75, rel=1e-3)
    assert epoch.template_variance == pytest.approx(0.25, rel=1e-3)


def test_variance_is_not_lowered_by_interpolation(rng):
    epoch = epoch_of(
        rng.normal(0.0, 2.0, SHAPE), pixel_map=moved(SHAPE, dx=0.5, dy=0.5)
    )
    use = epoch.mask == 0
    np.testing.assert_allclose(epoch.variance[use], 2.0, rtol=1e-3)


def grid(name="t"):
    return Grid(
        name=name, field="F", filter="r", chip="", mjd=60_000.0, fwhm_px=3.0,
        variance=2.0, shape=SHAPE, calibration=Calibration(None, None),
    )  # fmt: skip


def part(folder, mjd, pixels, *, where=None, share=0.5):
    epoch = epoch_of(pixels, template_share=share)
    file = folder / f"{mjd}.npy"
    write_part(file, epoch)
    return SeriesPart(
        file=file, grid=where or grid(), pair=f"s{mjd}-t", name=f"s{mjd}", mjd=mjd,
        fwhm_px=3.1, template_variance=epoch.template_variance, seeds=(),
    )  # fmt: skip


def test_the_template_is_an_epoch_of_its_own(rng, tmp_path):
    parts = [
        part(tmp_path, mjd, rng.normal(0.0, 2.0, SHAPE)) for mjd in (60_100.0, 59_900.0)
    ]
    (group,) = group_parts(parts)
    series = build_series(group)
    assert series.names == ("s59900.0", "t", "s60100.0")
    assert list(series.mjd) == [59_900.0, 60_000.0, 60_100.0]
    assert not series.pixels[1].any()
    use = series.mask == 0
    # All of the 4 is shared between two frames alike.
    np.testing.assert_allclose(series.variance[use], 2.0, rtol=2e-3)
    # Robust sigma of some 370 samples of one pixel in 25: 1 +- 0.05 (times 0.9-1
    # for what interpolation smooths).
    assert np.all(np.abs(series.noise_ratio - 0.95) < 0.2)


def test_without_a_template_of_its_own_epochs_stand_alone(rng, tmp_path):
    parts = [
        part(tmp_path, mjd, rng.normal(0.0, 2.0, SHAPE), share=0.0)
        for mjd in (1.0, 2.0, 3.0)
    ]
    (group,) = group_parts(parts)
    assert build_series(group).names == ("s1.0", "s2.0", "s3.0")
    assert group_parts(parts[:2]) == []


def test_two_epochs_are_no_series(rng, tmp_path):
    one = part(tmp_path, 60_100.0, rng.normal(0.0, 2.0, SHAPE))
    other = part(tmp_path, 60_200.0, np.zeros(SHAPE), where=grid("u"))
    assert group_parts([one, other]) == []


def test_the_template_is_masked_where_nothing_else_has_data(rng, tmp_path):
    parts = []
    for mjd in (60_100.0, 60_200.0):
        mask = np.zeros(SHAPE, np.uint16)
        mask[:, :20] = MaskBit.TRAIL
        made = difference(rng.normal(0.0, 2.0, SHAPE), mask=mask)
        epoch = to_grid(
            made, moved(SHAPE, dx=0.0, dy=0.0), scale=1.0, template_share=0.5,
            shape=SHAPE, settings=SETTINGS,
        )  # fmt: skip
        file = tmp_path / f"{mjd}.npy"
        write_part(file, epoch)
        parts.append(
            SeriesPart(
                file=file, grid=grid(), pair="p", name=f"{mjd}", mjd=mjd, fwhm_px=3.0,
                template_variance=epoch.template_variance, seeds=(),
            )
        )  # fmt: skip
    series = build_series(parts)
    assert series.mask[0][:, :20].all()
    assert not series.mask[0][:, 30:].any()


def arc(sign):
    n = 41
    trace = ArcTrace(np.full(n, 60.0), np.arange(n) + 20.0, np.zeros(n))
    return Arc(
        trace=trace, sign=sign, snr=20.0, x=60.0, y=40.0, normal_angle=0.0,
        normal_angle_err=1.0, curvature=0.0, length_px=40.0, width_px=4.0,
        surface_brightness_counts=10.0, shift_px=8.0, verdict="arc",
    )  # fmt: skip


MOTION = Motion(
    direction_angle=10.0, direction_angle_err=1.0, shift_px=8.0, shift_err_px=0.5,
    x=60.0, y=40.0, width_px=4.0, width_err_px=0.3, surface_brightness_counts=10.0,
    surface_brightness_err_counts=1.0, sense_odds=3.0, chi2=1.0, lobes=2,
)  # fmt: skip


def seed(sign, pixel_map):
    return seed_on_grid(
        arc(sign), MOTION, index=4, pair="s-t", pixel_map=pixel_map,
        epochs=(60_365.25, 60_000.0), fwhm_px=3.0,
    )  # fmt: skip


def test_a_seed_is_turned_and_stretched_with_the_map():
    """A quarter turn and a scale of two: (x, y) -> (200 - 2 y, 2 x)."""
    same = identity_map(SHAPE)
    turn = replace(same, map_x=200.0 - 2.0 * same.map_y, map_y=2.0 * same.map_x)
    made = seed(1, turn)
    assert made.direction_angle == pytest.approx(100.0, abs=1e-6)
    assert made.speed_px_yr == pytest.approx(16.0, rel=1e-6)
    assert made.width_px == pytest.approx(10.0, rel=1e-6)
    np.testing.assert_allclose(made.trace.x, 200.0 - 2.0 * (np.arange(41) + 20.0))
    np.testing.assert_allclose(made.trace.y, 120.0)
    np.testing.assert_allclose(made.trace.normal_angle, 90.0, atol=1e-6)
    assert (made.origin, made.arc) == ("s-t", 4)


@pytest.mark.parametrize(("sign", "mjd"), [(1, 60_365.25), (-1, 60_000.0)])
def test_a_seed_lies_where_its_lobe_shines(sign, mjd):
    assert seed(sign, None).mjd == mjd
    assert seed(sign, None).speed_px_yr == pytest.approx(8.0)
