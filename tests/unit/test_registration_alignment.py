"""Aligning two frames: with their WCS, without, and with a wrong one."""

import numpy as np
import pytest
from astropy.wcs import WCS

from latelight.errors import StageError
from latelight.records import StarList
from latelight.registration.alignment import align
from latelight.registration.asterisms import match_asterisms
from latelight.registration.crossmatch import mutual_nearest, vote_offset
from latelight.registration.pixel_map import evaluate, identity_map
from latelight.registration.settings import RegistrationSettings

SHAPE = (600, 800)
SETTINGS = RegistrationSettings()
ERROR_PX = 0.03


def star_list(x, y, flux, rng, *, shape=SHAPE, error=ERROR_PX):
    """A list as detection would make it, in the frame, brightest first."""
    inside = (x >= 0) & (x < shape[1]) & (y >= 0) & (y < shape[0])
    x, y, flux = x[inside], y[inside], flux[inside]
    order = np.argsort(-flux, kind="stable")
    x, y, flux = x[order], y[order], flux[order]
    some = np.ones(x.size)
    return StarList(
        x=x + rng.normal(0.0, error, x.size),
        y=y + rng.normal(0.0, error, x.size),
        position_err=error * some,
        flux=flux,
        flux_err=0.01 * flux,
        peak=0.1 * flux,
        fwhm=3.0 * some,
        elongation=some,
        saturated=np.zeros(x.size, dtype=bool),
        clean=np.ones(x.size, dtype=bool),
        sky=np.zeros(shape, np.float32),
        fwhm_px=3.0,
    )


def sky(rng, n=300, margin=400):
    """Places and fluxes of stars in and around the science frame."""
    x = rng.uniform(-margin, SHAPE[1] + margin, 4 * n)
    y = rng.uniform(-margin, SHAPE[0] + margin, 4 * n)
    return x, y, 1e3 * rng.pareto(1.0, 4 * n) + 1e3


def similarity(angle, scale, mirrored, shift):
    radians = np.radians(angle)
    c, s = scale * np.cos(radians), scale * np.sin(radians)
    flip = -1.0 if mirrored else 1.0

    def move(x, y):
        dx, dy = flip * (x - 400.0), y - 300.0
        return c * dx - s * dy + 400 + shift[0], s * dx + c * dy + 300 + shift[1]

    return move


def tan_wcs(*, ra=120.0, dec=-30.0, angle=0.0, scale_arcsec=0.4, flip=False):
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [ra, dec]
    wcs.wcs.crpix = [400.5, 300.5]
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    parity = 1.0 if flip else -1.0
    wcs.wcs.cd = scale_arcsec / 3600.0 * np.array([[parity * c, s], [-parity * s, c]])
    wcs.wcs.set()
    return wcs


def run(science, template, wcs=(None, None), settings=SETTINGS):
    return align(
        science,
        template,
        *wcs,
        science_shape=SHAPE,
        template_shape=SHAPE,
        settings=settings,
    )


def map_error(alignment, move):
    """Rms of the map's error per coordinate, where the frames overlap."""
    x, y = np.meshgrid(
        np.linspace(0, SHAPE[1] - 1, 30), np.linspace(0, SHAPE[0] - 1, 30)
    )
    true_x, true_y = move(x, y)
    both = (true_x >= 0) & (true_x < SHAPE[1]) & (true_y >= 0) & (true_y < SHAPE[0])
    got_x, got_y = evaluate(alignment.pixel_map, x, y)
    square = (got_x - true_x) ** 2 + (got_y - true_y) ** 2
    return float(np.sqrt(0.5 * np.mean(square[both])))


@pytest.mark.parametrize("mirrored", [False, True])
@pytest.mark.parametrize(
    ("angle", "scale", "shift"),
    [
        (0.0, 1.0, (0.0, 0.0)),
        (-0.4, 1.0, (-221.0, 49.0)),
        (37.0, 1.0, (60.0, -80.0)),
        (180.0, 1.0, (15.0, 4.0)),
        (90.0, 0.8, (0.0, 30.0)),
        (-120.0, 1.3, (5.0, 5.0)),
    ],
)
def test_asterisms_find_any_similarity(rng, angle, scale, shift, mirrored):
    x, y, flux = sky(rng)
    move = similarity(angle, scale, mirrored, shift)
    alignment = run(star_list(x, y, flux, rng), star_list(*move(x, y), 0.7 * flux, rng))
    assert alignment.method == "asterisms"
    # Noise of both frames over some 200 stars, up to ten terms: 0.01 px.
    assert map_error(alignment, move) < 0.02
    assert alignment.rms_px == pytest.approx(ERROR_PX * np.hypot(1, scale), rel=0.2)


def test_matched_rows_are_the_same_star(rng):
    x, y, flux = sky(rng)
    move = similarity(10.0, 1.0, False, (30.0, -20.0))
    science, template = star_list(x, y, flux, rng), star_list(*move(x, y), flux, rng)
    alignment = run(science, template)
    one, two = alignment.science_index, alignment.template_index
    assert one.size == np.unique(one).size == np.unique(two).size > 100
    assert np.array_equal(science.flux[one], template.flux[two])


@pytest.mark.parametrize(
    "wrong",
    [
        {},
        {"dec": -30.0 + 60.0 / 3600.0},
        {"ra": 120.0 - 60.0 / 3600.0, "dec": -30.0 - 30.0 / 3600.0},
        {"angle": 0.2},
        {"angle": 25.0},
        {"flip": True},
        {"scale_arcsec": 0.39},
    ],
    ids=str,
)
def test_a_wrong_wcs_is_found_out(rng, wrong):
    x, y, flux = sky(rng)
    true = (tan_wcs(), tan_wcs(ra=120.01, angle=3.0))

    def move(x, y):
        return true[1].all_world2pix(*true[0].all_pix2world(x, y, 0), 0)

    told = tan_wcs(**{"ra": 120.01, "angle": 3.0} | wrong)
    if "angle" in wrong:
        told = tan_wcs(ra=120.01, angle=3.0 + wrong["angle"])
    alignment = run(
        star_list(x, y, flux, rng),
        star_list(*move(x, y), flux, rng),
        wcs=(true[0], told),
    )
    assert map_error(alignment, move) < 0.02
    guided = wrong.keys() <= {"ra", "dec"}
    assert alignment.method == "wcs" if guided else True


def test_a_perfect_wcs_leaves_a_shift_to_fit(rng):
    x, y, flux = sky(rng)
    wcs = (tan_wcs(), tan_wcs(ra=120.01, angle=3.0))

    def move(x, y):
        return wcs[1].all_world2pix(*wcs[0].all_pix2world(x, y, 0), 0)

    alignment = run(
        star_list(x, y, flux, rng), star_list(*move(x, y), flux, rng), wcs=wcs
    )
    assert alignment.method == "wcs"
    assert map_error(alignment, move) < 3 * ERROR_PX * np.sqrt(2 / 250) * np.sqrt(3)


def test_frames_that_overlap_by_a_third_align(rng):
    x, y, flux = sky(rng)
    # 400 rows of 0.4 arcsec.
    wcs = (tan_wcs(), tan_wcs(dec=-30.0 + 400 * 0.4 / 3600.0))

    def move(x, y):
        return wcs[1].all_world2pix(*wcs[0].all_pix2world(x, y, 0), 0)

    alignment = run(
        star_list(x, y, flux, rng), star_list(*move(x, y), flux, rng), wcs=wcs
    )
    assert alignment.method == "wcs"
    assert map_error(alignment, move) < 0.02


def test_swapping_the_frames_inverts_the_map(rng):
    x, y, flux = sky(rng)

    def move(x, y):
        u, v = x / 400 - 1, y / 300 - 1
        return x + 11.3 + 0.8 * u * v + 0.3 * u**3, y - 7.1 + 0.5 * v**2

    science, template = star_list(x, y, flux, rng), star_list(*move(x, y), flux, rng)
    there, back = run(science, template), run(template, science)
    px, py = np.meshgrid(np.linspace(30, 760, 20), np.linspace(30, 560, 20))
    qx, qy = evaluate(back.pixel_map, *evaluate(there.pixel_map, px, py))
    error = np.hypot(there.pixel_map.error_px, back.pixel_map.error_px)
    assert np.sqrt(np.mean((qx - px) ** 2 + (qy - py) ** 2) / 2) < 3 * error


def test_few_stars_suffice(rng):
    x, y, flux = sky(rng, n=4, margin=0)
    move = similarity(5.0, 1.0, True, (12.0, -9.0))
    science = star_list(x, y, flux, rng)
    assert len(science) == 16
    alignment = run(science, star_list(*move(x, y), flux, rng))
    assert alignment.science_index.size >= 10
    # An affine map of about 13 stars: sqrt(3 / 13) of the noise of both frames.
    assert map_error(alignment, move) < 4 * ERROR_PX * np.sqrt(2 * 3 / 13)


def test_outliers_and_movers_are_left_out(rng):
    x, y, flux = sky(rng)
    template_x, template_y = x.copy(), y.copy()
    moved = rng.random(x.size) < 0.15
    template_x[moved] += rng.uniform(-2.0, 2.0, moved.sum())
    alignment = run(
        star_list(x, y, flux, rng), star_list(template_x, template_y, flux, rng)
    )
    assert map_error(alignment, lambda x, y: (x, y)) < 0.015
    assert alignment.rms_px < 2 * ERROR_PX


def test_crowded_fields_match(rng):
    x, y = rng.uniform(0, 201, (2, 900))
    flux = 1e3 * rng.pareto(1.0, 900) + 1e3
    shape = (201, 201)
    alignment = align(
        star_list(x, y, flux, rng, shape=shape, error=0.2),
        star_list(x + 0.8, y - 1.1, flux, rng, shape=shape, error=0.2),
        None,
        None,
        science_shape=shape,
        template_shape=shape,
        settings=SETTINGS,
    )
    x, y = evaluate(alignment.pixel_map, 100.0, 100.0)
    assert x == pytest.approx(100.8, abs=0.05)
    assert y == pytest.approx(98.9, abs=0.05)


def test_too_few_stars_are_counted_in_the_error(rng):
    x, y, flux = sky(rng)
    full, few = star_list(x, y, flux, rng), star_list(x[:6], y[:6], flux[:6], rng)
    with pytest.raises(StageError, match=rf"science frame has {len(few)} usable stars"):
        run(few, full)
    with pytest.raises(StageError, match="template frame has"):
        run(full, few)
    with pytest.raises(StageError, match="alignment needs 6; lower registration"):
        run(few, few)


def test_saturated_stars_are_not_used(rng):
    x, y, flux = sky(rng)
    science, template = star_list(x, y, flux, rng), star_list(x, y, flux, rng)
    science.saturated[:20] = True
    assert run(science, template).science_index.min() >= 20


def test_frames_apart_by_their_wcs_do_not_overlap(rng):
    x, y, flux = sky(rng)
    stars = star_list(x, y, flux, rng)
    # 0.2 deg of declination = 1800 px of 0.4 arcsec; 600 of them are frame.
    with pytest.raises(StageError, match=r"do not overlap.* 1[12]\d\d px off.* 225 px"):
        run(stars, stars, wcs=(tan_wcs(), tan_wcs(dec=-29.8)))


def test_unrelated_fields_do_not_match(rng):
    one, two = star_list(*sky(rng), rng), star_list(*sky(rng), rng)
    with pytest.raises(StageError, match=r"no match: .* science and .* template stars"):
        run(one, two)
    with pytest.raises(StageError, match="offsets up to 225 px"):
        run(one, two, wcs=(tan_wcs(), tan_wcs()))


def test_lists_are_not_changed(rng):
    x, y, flux = sky(rng)
    stars = star_list(x, y, flux, rng)
    before = stars.x.copy()
    run(stars, stars)
    assert np.array_equal(stars.x, before)


def test_mutual_nearest_pairs_each_point_once():
    first = np.array([[0.0, 0.0], [0.4, 0.0], [10.0, 0.0], [50.0, 50.0]])
    second = np.array([[0.3, 0.0], [10.5, 0.0], [90.0, 90.0]])
    one, two = mutual_nearest(first, second, 2.0)
    assert one.tolist() == [1, 2]
    assert two.tolist() == [0, 1]
    assert mutual_nearest(first, second[:0], 2.0)[0].size == 0


def test_vote_needs_more_than_chance(rng):
    points = rng.uniform(0, 1000, (120, 2))
    moved = points + np.array([31.0, -57.0])
    assert vote_offset(points, moved, 100.0) == pytest.approx([31.0, -57.0], abs=0.1)
    assert vote_offset(points, moved, 40.0) is None
    assert vote_offset(points, rng.uniform(0, 1000, (120, 2)), 100.0) is None


def test_asterisms_of_too_few_or_collinear_stars_say_nothing():
    line = np.column_stack([np.arange(10.0) * 30.0, np.zeros(10)])
    assert match_asterisms(line[:3], line, radius=3.0) is None
    assert match_asterisms(line, line, radius=3.0) is None


def test_identity_map_reaches_beyond_the_frame():
    grid = identity_map((50, 70))
    assert grid.node_x[0] < 0 < 69 < grid.node_x[-1]
    x, y = evaluate(grid, [-0.5, 69.5], [0.0, 49.5])
    assert x == pytest.approx([-0.5, 69.5], abs=1e-9)
    assert y == pytest.approx([0.0, 49.5], abs=1e-9)
