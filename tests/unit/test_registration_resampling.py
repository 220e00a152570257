"""Resampling: pixels, masks, edges and flux."""

import numpy as np
import pytest

from latelight.masks import MaskBit
from latelight.records import PixelMap, Plane
from latelight.registration.interpolation import kernel_weights
from latelight.registration.pixel_map import evaluate, identity_map
from latelight.registration.resampling import resample
from latelight.registration.settings import RegistrationSettings
from latelight.threads import n_threads, set_threads

SHAPE = (120, 140)
SETTINGS = RegistrationSettings()


def affine_map(matrix, offset, shape=SHAPE):
    grid = identity_map(shape)
    (a, b), (c, d) = matrix
    return PixelMap(
        grid.node_y,
        grid.node_x,
        c * grid.map_x + d * grid.map_y + offset[1],
        a * grid.map_x + b * grid.map_y + offset[0],
        error_px=0.0,
    )


def shift_map(x, y, shape=SHAPE):
    return affine_map(((1, 0), (0, 1)), (x, y), shape)


def noise_plane(rng, shape=SHAPE):
    return Plane(
        rng.normal(100.0, 3.0, shape).astype(np.float32),
        rng.uniform(5.0, 15.0, shape).astype(np.float32),
        np.zeros(shape, np.uint16),
    )


def slow_resample(plane, pixel_map, row, col, taps):
    """One output pixel from the formula, in double precision."""
    x, y = evaluate(pixel_map, float(col), float(row))
    i = np.arange(int(np.floor(x)) - 3, int(np.floor(x)) + 5)
    j = np.arange(int(np.floor(y)) - 3, int(np.floor(y)) + 5)
    w = np.outer(taps(j - y), taps(i - x))
    box = np.ix_(j, i)
    return np.sum(w * plane.pixels[box]), np.sum(w**2 * plane.variance[box])


def lanczos(lobes):
    def taps(d):
        w = np.where(np.abs(d) < lobes, np.sinc(d) * np.sinc(d / lobes), 0.0)
        return w / w.sum()

    return taps


@pytest.mark.parametrize(("name", "lobes"), [("lanczos3", 3), ("lanczos4", 4)])
def test_values_and_variance_are_those_of_the_formula(rng, name, lobes):
    plane = noise_plane(rng)
    angle, scale = np.radians(20.0), 0.9
    c, s = scale * np.cos(angle), scale * np.sin(angle)
    pixel_map = affine_map(((c, -s), (s, c)), (30.3, -11.6))
    settings = RegistrationSettings(interpolation=name)
    got = resample(plane, pixel_map, shape=SHAPE, settings=settings)
    for row, col in ((60, 70), (44, 80), (73, 55)):
        value, variance = slow_resample(plane, pixel_map, row, col, lanczos(lobes))
        # Phases are rounded to 1/8192 px at most; slopes are some sigma a pixel.
        area = scale**2
        assert got.pixels[row, col] == pytest.approx(value * area, abs=6 / 8192 + 1e-4)
        assert got.variance[row, col] == pytest.approx(variance * area**2, rel=1e-3)
        assert got.mask[row, col] == 0


def test_identity_returns_the_plane(rng):
    plane = noise_plane(rng)
    plane.mask[50, 60] = MaskBit.COSMIC_RAY
    got = resample(plane, identity_map(SHAPE), shape=SHAPE, settings=SETTINGS)
    assert got.pixels == pytest.approx(plane.pixels, abs=1e-4)
    assert got.variance == pytest.approx(plane.variance, rel=1e-5)
    assert np.array_equal(got.mask, plane.mask)
    assert got.noise_power == pytest.approx(1.0, abs=1e-6)
    assert [a.dtype for a in (got.pixels, got.variance, got.mask)] == [
        np.float32,
        np.float32,
        np.uint16,
    ]


def test_whole_pixel_shift_moves_pixels_and_bits(rng):
    plane = noise_plane(rng)
    plane.mask[50, 60] = MaskBit.DECLARED
    got = resample(plane, shift_map(3.0, -2.0), shape=SHAPE, settings=SETTINGS)
    assert got.pixels[10:100, 10:120] == pytest.approx(
        plane.pixels[8:98, 13:123], abs=1e-4
    )
    assert got.mask[52, 57] == MaskBit.DECLARED
    assert (got.mask[10:-10, 10:-10] != 0).sum() == 1


def test_bad_pixels_flag_where_their_weight_counts(rng):
    plane = noise_plane(rng)
    plane.mask[50, 60] = MaskBit.COSMIC_RAY
    plane.mask[50, 61] = MaskBit.SATURATED
    shift = shift_map(0.5, 0.5)
    got = resample(plane, shift, shape=SHAPE, settings=SETTINGS)
    flagged = np.argwhere(got.mask[10:-10, 10:-10]) + 10
    # The weight of an output pixel's four nearest is 0.13 of all |weights| each.
    assert {(49, 59), (50, 59), (49, 60), (50, 60), (49, 61), (50, 61)} <= {
        tuple(p) for p in flagged.tolist()
    }
    assert got.mask[49, 60] == MaskBit.COSMIC_RAY | MaskBit.SATURATED
    assert np.abs(flagged - [49.5, 60.0]).max() <= 2.0
    strict = RegistrationSettings(bad_weight=0.001)
    more = resample(plane, shift, shape=SHAPE, settings=strict)
    assert (more.mask[10:-10, 10:-10] != 0).sum() > 2 * len(flagged)


def test_flags_are_those_of_the_formula(rng):
    plane = noise_plane(rng)
    plane.mask[rng.random(SHAPE) < 0.02] = MaskBit.DECLARED
    settings = RegistrationSettings(bad_weight=0.004)
    got = resample(plane, shift_map(0.5, 0.25), shape=SHAPE, settings=settings)
    weights = kernel_weights(settings.interpolation).astype(float)
    share = np.abs(np.outer(weights[1024], weights[2048]))
    share /= share.sum()
    share[share < 1e-3] = 0.0
    for row in range(20, 90):
        for col in range(20, 110):
            box = plane.mask[row - 3 : row + 5, col - 3 : col + 5] != 0
            expected = share[box].sum() > settings.bad_weight
            assert (got.mask[row, col] != 0) == expected, (row, col)


def test_off_the_template_there_is_no_data_but_sky(rng):
    pixels = np.broadcast_to(np.linspace(50.0, 190.0, SHAPE[1]), SHAPE)
    plane = Plane(
        pixels.astype(np.float32),
        np.full(SHAPE, 9.0, np.float32),
        np.zeros(SHAPE, np.uint16),
    )
    got = resample(plane, shift_map(40.25, 0.0), shape=SHAPE, settings=SETTINGS)
    inside = got.mask == 0
    assert inside[:, 5:96].all()
    assert not inside[:, 99:].any()
    assert np.all(got.mask[:, 100:] == MaskBit.NO_DATA)
    # The median of the last block, not of the frame.
    assert np.all(np.abs(got.pixels[:, 101:] - 184.0) < 10.0)
    assert np.isfinite(got.pixels).all()
    assert np.all(got.variance > 0.0)


def test_a_constant_stays_constant_up_to_the_edge():
    plane = Plane(
        np.full(SHAPE, 77.0, np.float32),
        np.full(SHAPE, 4.0, np.float32),
        np.zeros(SHAPE, np.uint16),
    )
    got = resample(plane, shift_map(0.37, -0.21), shape=SHAPE, settings=SETTINGS)
    assert got.pixels == pytest.approx(77.0, rel=1e-5)


def test_flux_of_stars_is_kept_whatever_the_scale(star_plane):
    scale = 1.1
    x, y, flux = np.array([50.0, 90.0]), np.array([70.0, 40.0]), np.array([1e5, 3e4])
    plane = star_plane(x, y, flux, shape=SHAPE, sigma=1.8, sky=0.0)
    got = resample(
        plane,
        affine_map(((scale, 0.0), (0.0, scale)), (-5.3, -4.7)),
        shape=SHAPE,
        settings=SETTINGS,
    )
    for star_x, star_y, star_flux in zip(x, y, flux, strict=True):
        col, row = round((star_x + 5.3) / scale), round((star_y + 4.7) / scale)
        box = got.pixels[row - 12 : row + 13, col - 12 : col + 13]
        assert box.sum() == pytest.approx(star_flux, rel=1e-3)


def test_output_may_have_another_shape(rng):
    shape = (60, 200)
    got = resample(
        noise_plane(rng), shift_map(1.5, 2.5, shape), shape=shape, settings=SETTINGS
    )
    assert got.pixels.shape == got.variance.shape == got.mask.shape == shape


def test_threads_do_not_change_the_result(rng):
    plane = noise_plane(rng)
    plane.mask[rng.random(SHAPE) < 0.01] = MaskBit.COSMIC_RAY
    threads = n_threads()
    results = []
    try:
        for count in (1, 3):
            set_threads(count)
            results.append(
                resample(plane, shift_map(0.3, 7.7), shape=SHAPE, settings=SETTINGS)
            )
    finally:
        set_threads(threads)
    for name in ("pixels", "variance", "mask"):
        assert np.array_equal(getattr(results[0], name), getattr(results[1], name))


def test_input_is_not_changed(rng):
    plane = noise_plane(rng)
    for array in (plane.pixels, plane.variance, plane.mask):
        array.setflags(write=False)
    resample(plane, shift_map(0.5, 0.5), shape=SHAPE, settings=SETTINGS)


def test_a_resampled_plane_is_refused(rng):
    once = resample(
        noise_plane(rng), shift_map(0.5, 0.5), shape=SHAPE, settings=SETTINGS
    )
    with pytest.raises(ValueError, match="resampled before"):
        resample(once, shift_map(0.5, 0.5), shape=SHAPE, settings=SETTINGS)


def test_a_map_of_a_smaller_frame_is_refused(rng):
    with pytest.raises(ValueError, match=r"must cover the shape \(400, 400\)"):
        resample(
            noise_plane(rng), identity_map(SHAPE), shape=(400, 400), settings=SETTINGS
        )


@pytest.mark.parametrize("name", ["least-squares", "lanczos4", "lanczos3"])
def test_weights_sum_to_one_and_mirror(name):
    weights = kernel_weights(name).astype(float)
    assert weights.sum(axis=1) == pytest.approx(1.0, abs=1e-6)
    # Position 1 - f seen from the right is position f seen from the left.
    assert weights == pytest.approx(weights[::-1, ::-1], abs=1e-6)


@pytest.mark.parametrize("name", ["lanczos4", "lanczos3"])
def test_lanczos_weights_leave_a_pixel_its_own_value(name):
    weights = kernel_weights(name)
    assert weights[0] == pytest.approx([0, 0, 0, 1, 0, 0, 0, 0], abs=1e-6)


def test_least_squares_weights_keep_slopes():
    weights = kernel_weights("least-squares").astype(float)
    place = weights @ np.arange(-3.0, 5.0)
    assert place == pytest.approx(np.arange(4097) / 4096, abs=1e-6)
