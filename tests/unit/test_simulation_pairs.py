"""Random pairs: reproducible, as asked for, and honest about their coordinates."""

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS

from latelight.errors import ProductError
from latelight.records import Source
from latelight.simulation.exposures import Patch
from latelight.simulation.scenes import random_pair
from latelight.simulation.truth import decoys
from latelight.simulation.writing import ImageExtension, write_extensions, write_image
from latelight.sky import position_angle, separation_deg, wrap_180


@pytest.fixture(scope="module")
def pair():
    return random_pair(21, size=384)


def test_one_seed_makes_one_pair(pair):
    again = random_pair(21, size=384)
    assert np.array_equal(pair.science.pixels, again.science.pixels)
    assert np.array_equal(pair.template.pixels, again.template.pixels)
    assert pair.truth.echoes == again.truth.echoes
    assert pair.science.header == again.science.header


def test_another_seed_makes_another_pair(pair):
    other = random_pair(22, size=384)
    assert not np.array_equal(pair.science.pixels, other.science.pixels)


def test_seeing_is_sharper_where_asked():
    sharp = random_pair(21, size=256, science_sharper=True).truth
    blunt = random_pair(21, size=256).truth
    assert sharp.science.fwhm_px < sharp.template.fwhm_px
    assert blunt.science.fwhm_px > blunt.template.fwhm_px


def test_template_may_be_the_later_one(pair):
    late = random_pair(21, size=384, template_later=True)
    assert pair.truth.later == "science"
    assert late.truth.later == "template"
    assert late.template.header["MJD-OBS"] > late.science.header["MJD-OBS"]
    for echo in late.truth.echoes:
        source = next(s for s in late.truth.sources if s.name == echo.source)
        inward = position_angle(echo.ra, echo.dec, source.ra, source.dec)
        # Earlier to later is away from the source whichever frame is the later.
        assert abs(wrap_180(echo.normal_pa - inward)) > 130.0


def test_echoes_are_as_ordered(pair):
    assert pair.truth.echoes
    for echo in pair.truth.echoes:
        assert 21.5 <= echo.surface_brightness <= 24.5
        assert 1.5 < echo.speed_arcsec_yr < 31.0
        assert 1.3 < echo.shift_arcsec < 16.0
        assert 18.0 < echo.length_arcsec < 75.0
        assert 0 < echo.x < 384
        assert 0 < echo.y < 384
        assert echo.shift_px == pytest.approx(echo.shift_arcsec / 0.4, rel=0.03)
        assert echo.shift_arcsec == pytest.approx(
            echo.speed_arcsec_yr * pair.truth.interval_yr
        )
    ra, dec = pair.truth.science.wcs.all_pix2world(192, 192, 0)
    for source in pair.truth.sources:
        assert separation_deg(ra, dec, source.ra, source.dec) > 0.2


def test_echo_position_is_one_place_on_sky_and_frame(pair):
    for echo in pair.truth.echoes:
        x, y = pair.truth.science.wcs.all_world2pix(echo.ra, echo.dec, 0)
        assert (x, y) == pytest.approx((echo.x, echo.y), abs=1e-4)
        height = pair.truth.science.echoes[round(echo.y), round(echo.x)]
        assert height > 0.2 * pair.truth.science.echoes.max() * 10.0 ** (
            -0.4
            * (
                echo.surface_brightness
                - min(e.surface_brightness for e in pair.truth.echoes)
            )
        )


def test_nuisance_pairs_hold_no_echo():
    truth = random_pair(5, size=256, kind="nuisances").truth
    assert truth.echoes == ()
    assert not truth.science.echoes.any()
    assert truth.science.cosmic_rays.any()
    assert truth.sources


def test_default_density_gives_hundreds_of_stars():
    import sep

    pixels = random_pair(3, kind="nuisances").science.pixels.astype(np.float32)
    background = sep.Background(pixels)
    found = sep.extract(pixels - background, 5.0, err=background.globalrms)
    assert 400 < len(found) < 1100


def test_number_of_stars_can_be_set():
    truth = random_pair(5, size=256, kind="nuisances", n_stars=40).truth
    stars = truth.science.stars
    inside = (np.abs(stars.x - 127.5) < 128) & (np.abs(stars.y - 127.5) < 128)
    # Poisson: 40 expected, four sigma.
    assert abs(inside.sum() - 40) < 4.0 * np.sqrt(40) + 3


@pytest.mark.parametrize(
    ("arguments", "text"),
    [({"kind": "galaxies"}, "kind must be"), ({"size": 200}, "at least 256")],
)
def test_wrong_orders_are_refused(arguments, text):
    with pytest.raises(ValueError, match=text):
        random_pair(1, **arguments)


def test_written_frames_read_back(pair, tmp_path):
    template, science = pair.write(tmp_path)
    with fits.open(science) as file:
        assert np.array_equal(file[0].data, pair.science.pixels)
        header = file[0].header
    assert header["BZERO"] == 32768
    for word in ("MJD-OBS", "EXPTIME", "FILTER", "OBJECT", "GAIN", "RDNOISE"):
        assert word in header
    # The stated coordinates are off by a few pixels at most, and not right.
    stated = WCS(header)
    x, y = np.array([10.0, 370.0]), np.array([350.0, 20.0])
    u, v = pair.truth.science.wcs.all_world2pix(*stated.all_pix2world(x, y, 0), 0)
    off = np.hypot(u - x, v - y)
    assert np.all(off < 12.0)
    assert np.all(off > 1e-4)
    assert template.name == "template.fits"


@pytest.mark.parametrize("suffix", [".fits", ".fits.gz", ".fits.fz"])
def test_writing_twice_gives_the_same_bytes(tmp_path, suffix):
    pixels = np.random.default_rng(1).poisson(200.0, (64, 80)).astype(np.uint16)
    header = fits.Header({"GAIN": 1.5})
    one = write_image(tmp_path / f"one{suffix}", pixels, header)
    two = write_image(tmp_path / "sub" / f"two{suffix}", pixels, header)
    assert one.read_bytes() == two.read_bytes()
    if suffix == ".fits.gz":
        # RFC 1952: flags and time of the gzip header, all zero.
        assert one.read_bytes()[3:8] == bytes(5)
    with fits.open(one) as file:
        image = next(hdu for hdu in file if hdu.data is not None)
        assert np.array_equal(image.data, pixels)
        assert image.header["GAIN"] == 1.5


def test_extensions_keep_name_and_number(tmp_path):
    pixels = np.arange(64 * 70, dtype=np.uint16).reshape(64, 70)
    chips = [ImageExtension("CHIP", n, pixels + n, fits.Header()) for n in (1, 2)]
    path = write_extensions(
        tmp_path / "two.fits.gz", chips, primary=fits.Header({"BAND": "r"})
    )
    with fits.open(path) as file:
        assert file[0].header["BAND"] == "r"
        assert np.array_equal(file["CHIP", 2].data, pixels + 2)


def test_a_folder_that_cannot_be_written_is_named(pair, tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("in the way")
    with pytest.raises(ProductError, match="choose a folder"):
        pair.write(blocked / "inside")


def test_decoys_keep_apart():
    source = Source("Bramble 1650", 10.0, 0.0, 5000.0, 0.0, 300.0, 0.0, 60_000.0)
    made = decoys(np.random.default_rng(2), (source,), ra=12.0, dec=1.0, count=4)
    angles = np.array(
        [float(position_angle(12.0, 1.0, s.ra, s.dec)) for s in (source, *made)]
    )
    apart = np.abs(wrap_180(angles[:, None] - angles[None, :]))
    assert np.all(apart[~np.eye(5, dtype=bool)] > 29.9)
    with pytest.raises(ValueError, match="ask for fewer"):
        decoys(np.random.default_rng(2), (source,), ra=12.0, dec=1.0, count=12)


@pytest.mark.parametrize("corner", [(-3, -4), (8, 7), (-30, 2), (20, 20)])
def test_patches_may_overhang(corner):
    image = np.zeros((10, 12))
    Patch(*corner, np.ones((6, 6), np.float32)).add_to(image)
    rows = max(0, min(10, corner[0] + 6) - max(0, corner[0]))
    cols = max(0, min(12, corner[1] + 6) - max(0, corner[1]))
    assert image.sum() == rows * cols
