"""Cutouts, their files, and the pictures, on a small drawn scene."""

import io
from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS, Sip
from PIL import Image

from latelight.errors import ProductError
from latelight.masks import MaskBit
from latelight.products.captions import calendar_date, interval, measured
from latelight.products.cutouts import cut_out, template_offset_px, write_cutout
from latelight.products.difference import (
    draw_difference,
    write_difference,
    write_difference_picture,
)
from latelight.products.drawing import nice_step
from latelight.products.panels import (
    colour_epochs,
    difference_scale,
    diverging_colours,
    enlarge,
    smooth,
)
from latelight.products.picture import draw_picture, png_bytes, write_picture
from latelight.products.profile import measure_profile, ridge_offset
from latelight.products.rows import CandidateRow
from latelight.products.settings import ProductSettings
from latelight.records import ArcTrace, Difference, Plane

SIZE = 200
SIGMA = 10.0
SETTINGS = ProductSettings()


def make_wcs():
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN-SIP", "DEC--TAN-SIP"]
    wcs.wcs.crval = [161.0, -60.0]
    wcs.wcs.crpix = [90.0, 110.0]
    turn, scale = np.radians(25.0), 0.5 / 3600.0
    wcs.wcs.cd = scale * np.array(
        [[-np.cos(turn), np.sin(turn)], [np.sin(turn), np.cos(turn)]]
    )
    forward, backward = np.zeros((3, 3)), np.zeros((3, 3))
    forward[2, 0], forward[1, 1] = 3e-6, -2e-6
    backward[0, 2] = 2e-6
    wcs.sip = Sip(forward, backward, -forward, -backward, wcs.wcs.crpix)
    wcs.wcs.set()
    return wcs


def make_row(**changes):
    row = CandidateRow(
        id="J104412.12-601601.6",
        field="F1",
        filter="r",
        template="t",
        science="s",
        mjd_template=60000.0,
        mjd_science=60400.0,
        ra=161.0,
        dec=-60.0,
        snr=20.0,
        length=20.0,
        width=2.0,
        surface_brightness=22.5,
        normal_pa=30.0,
        normal_pa_err=2.0,
        speed=3.0,
        speed_err=0.3,
        source="Nova Ficta 1604",
        away_angle=8.0,
        score=1.2,
        dust_depth=120.0,
        dust_depth_err=10.0,
        verdict="arc",
        pair="t--s",
        x=100.0,
        y=100.0,
        normal_angle=0.0,
        normal_angle_err=2.0,
        shift_px=8.0,
        shift_err_px=0.5,
        length_px=40.0,
        width_px=3.0,
        width_err=0.1,
        width_err_px=0.2,
        surface_brightness_err=0.1,
        surface_brightness_counts=20.0,
        surface_brightness_err_counts=2.0,
        sense_odds=4.0,
        lobes=2,
        profile_chi2=1.0,
        curvature_radius=None,
        source_separation=0.5,
    )
    return replace(row, **changes)


class Scene:
    """A straight vertical ridge at x = 100 that stood at x = 92 before."""

    def __init__(self, *, x=100.0, y=100.0, wcs=True, **changes):
        rng = np.random.default_rng(5)
        rows, columns = np.mgrid[:SIZE, :SIZE].astype(float)
        along = np.exp(-((rows - y) ** 2) / (2 * 15.0**2))
        noise = rng.normal(0.0, SIGMA, (2, SIZE, SIZE))
        ridge = [20 * along * np.exp(-((columns - at) ** 2) / 8) for at in (x - 8, x)]
        self.mask = np.zeros((SIZE, SIZE), np.uint16)
        self.mask[:, 130] = MaskBit.BAD_COLUMN
        self.mask[60, 95] = MaskBit.NO_DATA
        pixels = [
            (500 + r + n).astype(np.float32) for r, n in zip(ridge, noise, strict=True)
        ]
        variance = np.full((SIZE, SIZE), SIGMA**2, np.float32)
        self.template, self.science = (Plane(p, variance, self.mask) for p in pixels)
        self.difference = Difference(
            np.where(self.mask == 0, pixels[1] - pixels[0], 0).astype(np.float32),
            2 * variance,
            self.mask,
            3.0,
            1.0,
            "kernel",
            (),
            0.0,
            0.0,
        )
        self.wcs = make_wcs() if wcs else None
        points = np.arange(y - 20.0, y + 21.0)
        self.trace = ArcTrace(
            np.full(points.size, x), points, np.full(points.size, 180.0)
        )
        self.row = make_row(x=x, y=y, **changes)

    def cut(self, settings=SETTINGS):
        return cut_out(
            self.row,
            science=self.science,
            template=self.template,
            difference=self.difference,
            wcs=self.wcs,
            trace=self.trace,
            settings=settings,
        )


def test_cutout_holds_copies_of_the_pixels():
    scene = Scene()
    cutout = scene.cut()
    side = cutout.science.shape[0]
    window = np.s_[cutout.y0 : cutout.y0 + side, cutout.x0 : cutout.x0 + side]
    bad = scene.mask[window] == MaskBit.NO_DATA
    assert bad.sum() == 1
    for piece, parent in (
        (cutout.science, scene.science.pixels),
        (cutout.template, scene.template.pixels),
        (cutout.difference, scene.difference.pixels),
    ):
        np.testing.assert_array_equal(piece[~bad], parent[window][~bad])
        assert np.isnan(piece[bad]).all()
        assert not np.shares_memory(piece, parent)
    np.testing.assert_array_equal(cutout.mask, scene.mask[window])
    np.testing.assert_allclose(
        cutout.snr[~bad], cutout.difference[~bad] / np.sqrt(2 * SIGMA**2), rtol=1e-6
    )


def test_cutout_holds_both_lobes_and_the_whole_arc():
    cutout = Scene().cut()
    side = cutout.science.shape[0]
    assert side % 2 == 1
    for x, y in ((100, 80), (100, 120), (92, 80), (92, 120)):
        assert 20 <= x - cutout.x0 < side - 20
        assert 20 <= y - cutout.y0 < side - 20
    np.testing.assert_array_equal(cutout.trace.x + cutout.x0, Scene().trace.x)


def test_an_edge_cutout_keeps_its_size_and_is_filled_with_no_data():
    inner, edge = Scene().cut(), Scene(x=4.0, y=197.0).cut()
    assert edge.science.shape == inner.science.shape
    rows, columns = np.indices(edge.mask.shape)
    x, y = columns + edge.x0, rows + edge.y0
    outside = (x < 0) | (y < 0) | (x >= SIZE) | (y >= SIZE)
    assert outside.any()
    for plane in (edge.science, edge.template, edge.difference, edge.snr):
        assert np.isnan(plane[outside]).all()
    assert (edge.mask[outside] == MaskBit.NO_DATA).all()
    assert np.isfinite(edge.science[~outside]).all()


def test_cutout_size_is_bounded():
    cutout = Scene().cut(ProductSettings(max_cutout_px=65))
    assert cutout.science.shape == (65, 65)


def test_planes_of_different_shapes_are_refused():
    scene = Scene()
    small = Plane(*(a[:50] for a in (scene.science.pixels,) * 2), scene.mask[:50])
    scene.science = small
    with pytest.raises(ValueError, match="one shape"):
        scene.cut()


@pytest.mark.parametrize("place", [{}, {"x": 4.0, "y": 197.0}])
def test_cutout_file(tmp_path, place):
    """Every image has the parent's sky within 1e-9 deg, and sound checksums."""
    scene = Scene(**place)
    cutout = scene.cut()
    path = tmp_path / "a.fits"
    write_cutout(path, cutout)
    side = cutout.science.shape[0]
    x, y = np.meshgrid([0.0, side / 3, side - 1.0], [0.0, side / 2, side - 1.0])
    parent = scene.wcs.all_pix2world(x + cutout.x0, y + cutout.y0, 0)
    np.testing.assert_allclose(
        cutout.wcs.all_pix2world(x, y, 0), parent, rtol=0, atol=1e-9
    )
    with fits.open(path, checksum=True) as hdus:
        names = [hdu.name for hdu in hdus][1:]
        assert names == ["TEMPLATE", "SCIENCE", "DIFFERENCE", "SNR", "MASK"]
        for hdu in hdus[1:]:
            sky = WCS(hdu.header).all_pix2world(x, y, 0)
            np.testing.assert_allclose(sky, parent, rtol=0, atol=1e-9)
            assert {"DATASUM", "CHECKSUM"} <= set(hdu.header)
        np.testing.assert_array_equal(hdus["SCIENCE"].data, cutout.science)
        np.testing.assert_array_equal(hdus["MASK"].data, cutout.mask)
        assert hdus["DIFFERENCE"].header["BUNIT"] == "count"
        assert hdus["MASK"].header["MBIT05"].startswith("BAD_COLUMN: bad column")
        header = hdus[0].header
    assert (header["ID"], header["SPEED"]) == ("J104412.12-601601.6", 3.0)
    assert header["SOURCE"] == "Nova Ficta 1604"
    assert header.comments["SPEED"] == "[arcsec/yr] along the normal"
    assert header["CURVRAD"] is None


def test_a_flipped_bit_fails_the_checksum(tmp_path):
    path = tmp_path / "a.fits"
    write_cutout(path, Scene().cut())
    with fits.open(path) as hdus:
        place = hdus["SNR"].fileinfo()["datLoc"] + 1000
    stored = bytearray(path.read_bytes())
    stored[place] ^= 1
    path.write_bytes(stored)
    with (
        pytest.warns(match="Checksum verification failed"),
        pytest.warns(match="Datasum verification failed"),
        fits.open(path, checksum=True) as hdus,
    ):
        assert len(hdus) == 6


def test_a_cutout_without_wcs_and_with_odd_letters_is_written(tmp_path):
    scene = Scene(wcs=False, ra=None, dec=None, source="\N{GREEK SMALL LETTER ETA} X")
    write_cutout(tmp_path / "a.fits", scene.cut())
    with fits.open(tmp_path / "a.fits", checksum=True) as hdus:
        assert "CRVAL1" not in hdus["SCIENCE"].header
        assert hdus[0].header["SOURCE"] == r"\u03b7 X"


@pytest.mark.parametrize("length", [20, 45, 62, 66, 120])
def test_long_names_stay_whole_in_the_header(tmp_path, length):
    name = ("a'b" * length)[:length]
    write_cutout(tmp_path / "cut.fits", Scene(pair=name).cut())
    assert fits.getheader(tmp_path / "cut.fits")["PAIR"] == name


def test_files_are_the_same_each_time(tmp_path):
    for name in ("a", "b"):
        write_cutout(tmp_path / f"{name}.fits", Scene().cut())
        write_picture(tmp_path / f"{name}.png", Scene().cut(), settings=SETTINGS)
        write_difference(tmp_path / f"{name}.fz", Scene().difference, wcs=Scene().wcs)
    for kind in ("fits", "png", "fz"):
        first, second = (tmp_path / f"{name}.{kind}" for name in "ab")
        assert first.read_bytes() == second.read_bytes()


@pytest.mark.parametrize(("mjd_science", "ahead"), [(60400.0, -8.0), (59600.0, 8.0)])
def test_the_earlier_ridge_lies_behind(mjd_science, ahead):
    assert template_offset_px(make_row(mjd_science=mjd_science)) == ahead


def test_profile_shows_both_lobes_where_they_are():
    """Heights within 5 sigma of the mean over 41 points; offsets along the motion."""
    profile = measure_profile(Scene().cut(), reach_px=15.0)
    mean = 20.0 * np.exp(-(np.arange(-20, 21) ** 2) / (2 * 15.0**2)).mean()
    err = np.sqrt(2 * SIGMA**2 / 41)
    np.testing.assert_allclose(profile.err, err, rtol=1e-6)
    at = {
        float(o): float(v) for o, v in zip(profile.offset, profile.value, strict=True)
    }
    overlap = mean * np.exp(-64 / 8)
    assert at[0.0] == pytest.approx(mean - overlap, abs=5 * err)
    assert at[-8.0] == pytest.approx(overlap - mean, abs=5 * err)
    assert (profile.offset[0], profile.offset[-1]) == (-19.0, 11.0)


def test_profile_is_the_same_whichever_lobe_was_traced():
    """Both traces run through the same columns: 8 pixels apart, same offsets."""
    scene = Scene()
    expected = measure_profile(scene.cut(), reach_px=15.0)
    scene.trace = replace(scene.trace, x=scene.trace.x - 8.0)
    profile = measure_profile(scene.cut(), reach_px=15.0)
    np.testing.assert_allclose(profile.value, expected.value, atol=1e-9)


def test_profile_leaves_masked_pixels_out():
    scene = Scene()
    scene.mask[:, 100] = MaskBit.BAD_COLUMN
    profile = measure_profile(scene.cut(), reach_px=15.0)
    assert np.isnan(profile.value[profile.offset == 0.0]).all()
    assert np.isfinite(profile.value[profile.offset == -2.0]).all()


def test_ridge_offset_is_signed_along_the_direction():
    trace = Scene().trace
    assert ridge_offset(trace, x=103.0, y=95.0, angle=0.0) == pytest.approx(3.0)
    assert ridge_offset(trace, x=103.0, y=95.0, angle=180.0) == pytest.approx(-3.0)


def test_both_epochs_share_one_grey_scale():
    rng = np.random.default_rng(1)
    noise = rng.normal(0.0, 5.0, (2, 64, 64)).astype(np.float32)
    noise[:, 10, 10] = 40.0
    # Another sky must not change a grey: it is taken out of each epoch.
    low, high = colour_epochs(noise[0] + 100, noise[0] + 900)
    np.testing.assert_allclose(low.astype(int), high, atol=1)
    assert low[10, 10].mean() < low.mean()  # dark is bright


def test_difference_colours_are_symmetric_about_a_light_zero():
    luma = diverging_colours(np.linspace(-1, 1, 21)) @ np.array([0.299, 0.587, 0.114])
    assert luma.argmax() == 10
    assert (np.diff(luma[:11]) > 0).all()
    assert (np.diff(luma[10:]) < 0).all()
    blue, orange = diverging_colours(np.array([-0.6, 0.6])).astype(int)
    assert blue[2] > blue[0]
    assert orange[0] > orange[2]


def test_smoothing_skips_masked_pixels():
    pixels = np.full((20, 20), 7.0, np.float32)
    mask = np.zeros((20, 20), np.uint16)
    mask[8:12, 8:12] = MaskBit.SATURATED
    pixels[mask != 0] = np.nan
    for sigma in (0.0, 1.5):
        smoothed = smooth(pixels, mask, sigma_px=sigma)
        np.testing.assert_allclose(smoothed[mask == 0], 7.0)
        assert (smoothed[mask != 0] == 0.0).all()


def test_scale_of_a_fully_masked_difference_is_usable():
    pixels, mask = np.zeros((9, 9), np.float32), np.ones((9, 9), np.uint16)
    assert difference_scale(pixels, mask, smoothing_px=1.0).limit == 1.0


def test_panels_have_y_upwards_and_hatch_bad_pixels():
    colours = np.full((4, 4, 3), 255, np.uint8)
    colours[0, 0] = 0  # the first pixel belongs in the lower left corner
    hatched = np.zeros((4, 4), bool)
    hatched[3, 3] = True
    panel = np.asarray(enlarge(colours, hatched, width=40, height=40, smooth=False))
    assert (panel[30:, :10] == 0).all()
    assert (panel[:10, :10] == 255).all()
    assert len(np.unique(panel[:10, 30:].reshape(-1, 3), axis=0)) == 2


VARIANTS = {
    "plain": {},
    "no_wcs": {
        "wcs": False,
        "ra": None,
        "dec": None,
        "length": None,
        "width": None,
        "surface_brightness": None,
        "normal_pa": None,
        "normal_pa_err": None,
        "speed": None,
        "source": "",
        "away_angle": None,
        "score": None,
        "dust_depth": None,
    },
    "one_lobe": {"shift_px": None, "speed": None, "speed_err": None, "lobes": 1},
    "corner": {"x": 3.0, "y": 3.0},
    "outside": {"x": -60.0, "y": 500.0},
    "later_template": {"mjd_science": 59600.0},
    "long_words": {"source": "Nova " * 20, "field": "f" * 80, "score": None},
}


@pytest.mark.parametrize("name", list(VARIANTS))
def test_pictures_of_every_kind_are_drawn(name):
    cutout = Scene(**VARIANTS[name]).cut()
    picture = draw_picture(cutout, settings=SETTINGS)
    shown = Image.open(io.BytesIO(png_bytes(picture)))
    assert shown.format == "PNG"
    assert shown.size == picture.size
    # Fewer colours, but none that the eye could tell from the first.
    error = np.asarray(shown.convert("RGB"), int) - np.asarray(picture, int)
    assert np.abs(error).max() <= 16


def test_motion_arrow_is_drawn_ahead_of_the_ridge():
    """The arrow's ink appears to the right for a motion in +x, to the left in -x."""
    scenes = (
        Scene(normal_angle=0.0, source=""),
        Scene(normal_angle=180.0, mjd_science=59600.0, source=""),
    )
    pictures = [draw_picture(scene.cut(), settings=SETTINGS) for scene in scenes]
    ink = [
        (np.abs(np.asarray(p, int)[140:476, 718:1054] - (28, 32, 38)).max(axis=2) < 20)
        for p in pictures
    ]
    centre = [np.nonzero(i)[1].mean() for i in ink]
    assert centre[0] > 200 > 136 > centre[1]


def test_difference_file(tmp_path):
    scene = Scene()
    path = tmp_path / "a.fits"
    write_difference(path, scene.difference, wcs=scene.wcs)
    x, y = np.meshgrid([0.0, 99.0, 199.0], [0.0, 99.0, 199.0])
    with fits.open(path, checksum=True) as hdus:
        image, mask = hdus["DIFFERENCE"], hdus["MASK"]
        np.testing.assert_array_equal(mask.data, scene.mask)
        assert mask.data.dtype == np.uint16
        # Quantised to a sixteenth of the noise, zeros exact.
        error = image.data - scene.difference.pixels
        assert np.abs(error).max() < np.sqrt(2) * SIGMA / 16
        assert (image.data[scene.mask != 0] == 0.0).all()
        assert image.header["NOISERAT"] == 1.0
        np.testing.assert_allclose(
            WCS(image.header).all_pix2world(x, y, 0),
            scene.wcs.all_pix2world(x, y, 0),
            rtol=0,
            atol=1e-9,
        )
    write_difference(path, scene.difference, wcs=None)


@pytest.mark.parametrize("shape", [(200, 200), (200, 60)])
def test_difference_picture(tmp_path, shape):
    scene = Scene()
    part = np.s_[: shape[0], : shape[1]]
    difference = replace(
        scene.difference,
        pixels=scene.difference.pixels[part],
        variance=scene.difference.variance[part],
        mask=scene.difference.mask[part],
    )
    rows = [scene.row, replace(scene.row, x=2.0, y=198.0, snr=9.0)]
    picture = draw_difference(difference, pair="t--s", rows=rows, settings=SETTINGS)
    assert max(picture.size) >= 1000
    path = tmp_path / "a.png"
    write_difference_picture(
        path, difference, pair="t--s", rows=rows, settings=SETTINGS
    )
    with Image.open(path) as shown:
        assert shown.size == picture.size
    with pytest.raises(ProductError):
        write_picture(tmp_path / "no" / "a.png", scene.cut(), settings=SETTINGS)


@pytest.mark.parametrize(
    ("value", "err", "text"),
    [
        (12.3456, 0.084, "12.35 ± 0.08"),
        (12.3456, 0.025, "12.346 ± 0.025"),
        (123.4, 17.2, "123 ± 17"),
        (3.28, 0.4, "3.3 ± 0.4"),
        (12.34, None, "12.3"),
        (5.0, 0.0, "5.0000 ± 0.0000"),
    ],
)
def test_numbers_are_shown_to_the_digits_their_error_supports(value, err, text):
    assert measured(value, err) == text


def test_dates_and_intervals():
    # MJD 0 is 1858-11-17; 51544.5 is J2000.0, noon of 2000-01-01.
    assert calendar_date(0.0) == "1858-11-17"
    assert calendar_date(51544.5) == "2000-01-01"
    assert interval(365.25 * 2) == "2.00 yr later"
    assert interval(-30.0) == "30.0 d earlier"


@pytest.mark.parametrize(
    ("largest", "step"), [(1.0, 1.0), (4.99, 2.0), (5.0, 5.0), (0.03, 0.02), (700, 500)]
)
def test_nice_steps(largest, step):
    assert nice_step(largest) == pytest.approx(step)
