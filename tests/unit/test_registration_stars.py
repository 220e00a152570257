"""Finding and judging stars."""

import numpy as np
import pytest

from latelight.errors import StageError
from latelight.masks import MaskBit
from latelight.records import Plane
from latelight.registration import stars as stars_module
from latelight.registration.settings import RegistrationSettings
from latelight.registration.stars import detect_stars
from latelight.threads import n_threads, set_threads

SHAPE = (256, 320)
SETTINGS = RegistrationSettings()


@pytest.fixture
def field(rng):
    """Thirty stars on a loose grid, far from one another."""
    x, y = np.meshgrid(np.arange(30.0, 300.0, 50.0), np.arange(30.0, 240.0, 45.0))
    x = x.ravel() + rng.uniform(-4.0, 4.0, x.size)
    y = y.ravel() + rng.uniform(-4.0, 4.0, y.size)
    return x, y, np.geomspace(2e3, 2e5, x.size)


def nearest(stars, x, y):
    return int(np.argmin(np.hypot(stars.x - x, stars.y - y)))


def test_every_star_is_found_at_its_place_brightest_first(field, star_plane, rng):
    x, y, flux = field
    stars = detect_stars(
        star_plane(x, y, flux, shape=SHAPE, rng=rng), settings=SETTINGS
    )
    assert len(stars) == x.size
    assert stars.clean.all()
    assert not stars.saturated.any()
    assert np.all(np.diff(stars.flux) <= 0.0)
    order = np.argsort(-flux)
    pull = np.stack([stars.x - x[order], stars.y - y[order]]) / stars.position_err
    # 60 normal pulls: their rms is 1 within 4 / sqrt(120).
    assert np.sqrt(np.mean(pull**2)) == pytest.approx(1.0, abs=4 / np.sqrt(120))
    # The aperture of 1.5 FWHM holds 99.8 % of a Gaussian.
    off = (stars.flux - 0.998 * flux[order]) / stars.flux_err
    assert np.abs(np.median(off)) < 4 * 1.25 / np.sqrt(off.size)


def test_width_and_peak(field, star_plane, rng):
    x, y, flux = field
    sigma = 1.7
    plane = star_plane(x, y, flux, shape=SHAPE, sigma=sigma, rng=rng)
    stars = detect_stars(plane, settings=SETTINGS)
    assert stars.fwhm_px == pytest.approx(2.3548 * sigma, rel=0.01)
    assert stars.fwhm[:10] == pytest.approx(2.3548 * sigma, rel=0.02)
    assert stars.elongation[:10] == pytest.approx(1.0, abs=0.02)
    # A pixel is at most half a diagonal from the centre: exp(-0.25 / sigma^2).
    top = flux.max() / (2 * np.pi * sigma**2)
    assert top * np.exp(-0.25 / sigma**2) * 0.98 < stars.peak[0] < top * 1.02


def test_width_of_a_profile_with_wings(rng):
    beta, fwhm = 3.0, 3.2
    alpha = fwhm / (2.0 * np.sqrt(2.0 ** (1.0 / beta) - 1.0))
    row, col = np.mgrid[0:256, 0:256]
    pixels = rng.normal(100.0, 3.0, (256, 256))
    for x, y in rng.uniform(0.0, 1.0, (36, 2)) + np.stack(
        np.meshgrid(np.arange(25, 250, 40), np.arange(25, 250, 40)), axis=-1
    ).reshape(-1, 2):
        pixels += 3e3 * (1 + ((col - x) ** 2 + (row - y) ** 2) / alpha**2) ** -beta
    plane = Plane(
        pixels.astype(np.float32),
        np.full((256, 256), 9.0, np.float32),
        np.zeros((256, 256), np.uint16),
    )
    assert detect_stars(plane, settings=SETTINGS).fwhm_px == pytest.approx(
        fwhm, rel=0.01
    )


@pytest.mark.parametrize(
    ("bit", "saturated"),
    [(MaskBit.SATURATED, True), (MaskBit.BLEED, True), (MaskBit.COSMIC_RAY, False)],
)
def test_a_marked_pixel_spoils_its_star_only(field, star_plane, rng, bit, saturated):
    x, y, flux = field
    plane = star_plane(x, y, flux, shape=SHAPE, rng=rng)
    plane.mask[round(y[20]), round(x[20]) + 2] = bit
    stars = detect_stars(plane, settings=SETTINGS)
    hit = nearest(stars, x[20], y[20])
    assert not stars.clean[hit]
    assert stars.clean.sum() == x.size - 1
    assert stars.saturated[hit] == saturated
    assert stars.saturated.sum() == int(saturated)


def test_galaxies_blends_and_elongated_sources_are_not_clean(field, star_plane, rng):
    x, y, flux = field
    plane = star_plane(x, y, flux, shape=SHAPE, rng=rng)
    broad = star_plane([55.0], [52.0], [5e4], shape=SHAPE, sigma=2.6, sky=0.0)
    pair = star_plane([155.0, 158.5], [52.0, 53.0], [5e4, 4e4], shape=SHAPE, sky=0.0)
    close = star_plane([255.0, 257.2], [52.0, 52.0], [4e4, 4e4], shape=SHAPE, sky=0.0)
    extra = broad.pixels + pair.pixels + close.pixels
    mixed = Plane(plane.pixels + extra, plane.variance, plane.mask)
    stars = detect_stars(mixed, settings=SETTINGS)
    for place in ((55.0, 52.0), (155.0, 52.0), (158.5, 53.0), (256.1, 52.0)):
        assert not stars.clean[nearest(stars, *place)], place
    assert stars.clean.sum() == x.size


def test_a_faint_neighbour_does_not_spoil_a_bright_star(star_plane, rng):
    x, y = [60.0, 66.8, 150.0, 250.0], [60.0, 60.0, 150.0, 200.0]
    plane = star_plane(x, y, [2e4, 1.6e3, 1e5, 1e5], shape=SHAPE, rng=rng)
    stars = detect_stars(plane, settings=SETTINGS)
    assert stars.clean[nearest(stars, 60.0, 60.0)]
    assert not stars.clean[nearest(stars, 66.8, 60.0)]


def test_a_sloping_sky_is_followed(field, star_plane, rng):
    x, y, flux = field
    plane = star_plane(x, y, flux, shape=SHAPE, rng=rng)
    slope = 0.2 * np.arange(SHAPE[1], dtype=np.float32)
    tilted = Plane(plane.pixels + slope, plane.variance, plane.mask)
    stars = detect_stars(tilted, settings=SETTINGS)
    middle = stars.sky[40:-40, 60:-60]
    expected = np.broadcast_to(200.0 + slope, SHAPE)[40:-40, 60:-60]
    # The wings of stars lift the median of a box by some tenths of sigma.
    assert np.abs(middle - expected).max() < 0.5 * 5.0
    assert stars.sky.dtype == np.float32


def test_an_empty_frame_gives_an_empty_list(star_plane, rng):
    stars = detect_stars(
        star_plane([], [], [], shape=SHAPE, rng=rng),
        settings=RegistrationSettings(detect_sigma=8.0),
    )
    assert len(stars) == 0
    assert np.isnan(stars.fwhm_px)
    assert stars.sky.shape == SHAPE


def test_a_constant_frame_and_an_all_masked_frame_have_no_stars(star_plane):
    flat = star_plane([], [], [], shape=SHAPE)
    assert len(detect_stars(flat, settings=SETTINGS)) == 0
    dead = Plane(flat.pixels, flat.variance, np.ones(SHAPE, np.uint16))
    assert len(detect_stars(dead, settings=SETTINGS)) == 0


def test_read_only_input_is_read_and_not_changed(field, star_plane, rng):
    plane = star_plane(*field, shape=SHAPE, rng=rng)
    before = [a.copy() for a in (plane.pixels, plane.variance, plane.mask)]
    for array in (plane.pixels, plane.variance, plane.mask):
        array.setflags(write=False)
    detect_stars(plane, settings=SETTINGS)
    for array, copy in zip(
        (plane.pixels, plane.variance, plane.mask), before, strict=True
    ):
        assert np.array_equal(array, copy)


def test_threads_do_not_change_the_list(field, star_plane, rng):
    plane = star_plane(*field, shape=SHAPE, rng=rng)
    threads = n_threads()
    lists = []
    try:
        for count in (1, 3):
            set_threads(count)
            lists.append(detect_stars(plane, settings=SETTINGS))
    finally:
        set_threads(threads)
    for name in ("x", "y", "flux", "position_err", "fwhm", "clean"):
        assert np.array_equal(getattr(lists[0], name), getattr(lists[1], name)), name


def test_an_overflowing_extraction_is_retried_and_then_named(
    field, star_plane, rng, monkeypatch
):
    plane = star_plane(*field, shape=SHAPE, rng=rng)
    contrasts = []

    def overflow(*args, deblend_cont, **kwargs):
        contrasts.append(deblend_cont)
        raise Exception("internal pixel buffer full")  # noqa: TRY002

    monkeypatch.setattr(stars_module.sep, "extract", overflow)
    with pytest.raises(StageError, match=r"pixel buffer full.*registration\.sky_mesh"):
        detect_stars(plane, settings=SETTINGS)
    assert contrasts[-1] == 1.0
    assert len(contrasts) == 2
