"""Reading frames: every way pixels are stored, and every way planes are paired."""

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from latelight.errors import FrameError
from latelight.frames.digest import file_digest
from latelight.frames.headers import read_headers
from latelight.frames.reader import read_frames
from latelight.frames.settings import FrameSettings, HeaderWords
from latelight.masks import MaskBit

WORDS = {
    "MJD-OBS": 60000.25,
    "EXPTIME": 86.4,
    "FILTER": "r",
    "OBJECT": "Heron 7",
    "GAIN": 2.0,
    "RDNOISE": 6.0,
    "SATURATE": 50000.0,
    "MAGZERO": 27.5,
}
BARE = FrameSettings(edge_px=0)


def image_hdu(pixels, *, name="", ver=1, words=WORDS, kind=fits.ImageHDU):
    hdu = kind(pixels)
    if name:
        hdu.name = name
        hdu.ver = ver
    hdu.header.update(words)
    return hdu


def sky(rng, shape=(96, 120), level=400.0):
    """Integer counts with the noise that gain 2 and 6 electrons of read noise give."""
    return np.rint(rng.normal(level, np.sqrt(level / 2 + 9), shape))


def save(path, *hdus):
    with_primary = hdus
    if not isinstance(hdus[0], fits.PrimaryHDU):
        with_primary = (fits.PrimaryHDU(), *hdus)
    fits.HDUList(list(with_primary)).writeto(path)
    return Path(path)


def read(path, settings=BARE, **words):
    return read_frames(path, HeaderWords(**words), settings)


class TestPixels:
    @pytest.mark.parametrize("dtype", [">i2", ">u2", ">i4", ">f4", ">f8", "u1"])
    def test_every_stored_type_comes_back_as_native_float32(self, tmp_path, rng, dtype):
        pixels = sky(rng, level=120.0).astype(dtype)
        words = WORDS | {"SATURATE": 250.0}
        path = save(
            tmp_path / "a.fits", image_hdu(pixels, kind=fits.PrimaryHDU, words=words)
        )
        (frame,) = read(path)
        got = frame.plane.pixels
        assert got.dtype == np.float32
        assert got.dtype.isnative
        assert got.flags.c_contiguous
        assert got.flags.writeable
        assert np.array_equal(got, pixels.astype(float))

    @pytest.mark.parametrize("name", ["a.fits.gz", "a.fits.fz"])
    def test_compressed_files_equal_the_plain_one(self, tmp_path, rng, name):
        pixels = sky(rng).astype(np.uint16)
        if name.endswith("fz"):
            hdu = fits.CompImageHDU(pixels, compression_type="RICE_1")
            hdu.header.update(WORDS)
        else:
            hdu = image_hdu(pixels, kind=fits.PrimaryHDU)
        (frame,) = read(save(tmp_path / name, hdu))
        assert frame.name == "a"
        assert np.array_equal(frame.plane.pixels, pixels.astype(np.float32))

    def test_scaled_integers_and_blank(self, tmp_path, rng):
        stored = sky(rng).astype(np.int16)
        stored[40:45, 50:55] = -999
        hdu = fits.PrimaryHDU(stored)
        hdu.header.update(WORDS | {"BSCALE": 0.5, "BZERO": 100.0, "BLANK": -999})
        # Written as they are: the words say how to read them.
        path = tmp_path / "a.fits"
        hdu.writeto(path)
        with fits.open(path, mode="update", do_not_scale_image_data=True) as file:
            file[0].header["BSCALE"] = 0.5
            file[0].header["BZERO"] = 100.0
        (frame,) = read(path)
        blank = (frame.plane.mask & MaskBit.NO_DATA) != 0
        assert blank.sum() == 25
        assert blank[40:45, 50:55].all()
        good = ~blank
        assert np.allclose(frame.plane.pixels[good], stored[good] * 0.5 + 100.0)

    def test_nan_pixels_are_flagged_and_filled(self, tmp_path, rng):
        pixels = sky(rng).astype(np.float32)
        pixels[10, 20] = np.nan
        pixels[30:60, 30:60] = np.inf
        (frame,) = read(save(tmp_path / "a.fits", image_hdu(pixels)))
        bad = ~np.isfinite(pixels)
        assert np.array_equal((frame.plane.mask & MaskBit.NO_DATA) != 0, bad)
        assert np.isfinite(frame.plane.pixels).all()
        # Within 5 sigma of the sky, as the sky's own pixels are.
        assert np.abs(frame.plane.pixels[bad] - 400.0).max() < 5 * 14.5
        assert np.isfinite(frame.plane.variance).all()
        assert (frame.plane.variance > 0).all()

    def test_degenerate_third_axis_is_dropped(self, tmp_path, rng):
        pixels = sky(rng).astype(np.float32)
        (frame,) = read(save(tmp_path / "a.fits", image_hdu(pixels[None])))
        assert frame.plane.pixels.shape == pixels.shape

    def test_file_is_not_changed(self, tmp_path, rng):
        path = save(tmp_path / "a.fits", image_hdu(sky(rng).astype(np.uint16)))
        before = file_digest(path)
        read(path)
        read_headers(path, HeaderWords())
        assert file_digest(path) == before


class TestRecord:
    def test_words_reach_the_frame(self, tmp_path, rng):
        path = save(tmp_path / "night1.fits", image_hdu(sky(rng).astype(np.float32)))
        (frame,) = read(path)
        assert (frame.name, frame.chip, frame.path) == ("night1", "", path)
        # 86.4 s are a thousandth of a day: the middle is half of it later.
        assert frame.mjd == pytest.approx(60000.2505, abs=1e-9)
        assert (frame.filter, frame.field) == ("r", "Heron 7")
        assert (frame.gain, frame.read_noise, frame.saturation) == (2.0, 6.0, 50000.0)
        assert (frame.exposure_s, frame.zero_point) == (86.4, 27.5)
        assert frame.wcs is None
        assert any("no WCS" in note for note in frame.notes)

    def test_headers_say_the_same_without_pixels(self, tmp_path, rng):
        path = save(tmp_path / "night1.fits", image_hdu(sky(rng).astype(np.float32)))
        (header,) = read_headers(path, HeaderWords())
        (frame,) = read(path)
        assert header.shape == frame.plane.pixels.shape
        for name in ("name", "chip", "mjd", "exposure_s", "filter", "field", "gain"):
            assert getattr(header, name) == getattr(frame, name)
        assert header.footprint is None

    def test_extensions_inherit_words_of_the_primary(self, tmp_path, rng):
        primary = fits.PrimaryHDU()
        primary.header.update(WORDS)
        own = image_hdu(sky(rng).astype(np.float32), words={"FILTER": "g"})
        (frame,) = read(save(tmp_path / "a.fits", primary, own))
        assert frame.field == "Heron 7"
        assert frame.filter == "g"

    def test_edge_is_flagged(self, tmp_path, rng):
        path = save(tmp_path / "a.fits", image_hdu(sky(rng).astype(np.float32)))
        (frame,) = read(path, FrameSettings(edge_px=3))
        edge = np.ones(frame.plane.mask.shape, dtype=bool)
        edge[3:-3, 3:-3] = False
        assert np.array_equal((frame.plane.mask & MaskBit.EDGE) != 0, edge)


class TestExtensions:
    def chips(self, tmp_path, rng, order=(1, 2)):
        hdus = [
            image_hdu(np.full((64, 80), 0.0) + sky(rng, (64, 80)), name="SCI", ver=ver)
            for ver in (1, 2)
        ]
        for ver in order:
            bad = np.zeros((64, 80), np.uint8)
            bad[10 * ver, 5] = 1
            hdus.append(fits.ImageHDU(bad, name="BADPIX", ver=ver))
        return save(tmp_path / "mosaic.fits", *hdus)

    @pytest.mark.parametrize("order", [(1, 2), (2, 1)])
    def test_masks_go_with_their_chip(self, tmp_path, rng, order):
        path = self.chips(tmp_path, rng, order)
        frames = read(path, mask_hdu="BADPIX", image_hdu="SCI")
        assert [frame.chip for frame in frames] == ["SCI-1", "SCI-2"]
        assert [frame.name for frame in frames] == ["mosaic_SCI-1", "mosaic_SCI-2"]
        for ver, frame in zip((1, 2), frames, strict=True):
            declared = np.argwhere(frame.plane.mask & MaskBit.DECLARED)
            assert declared.tolist() == [[10 * ver, 5]]

    def test_masks_without_versions_go_by_order(self, tmp_path, rng):
        first = np.zeros((64, 80), np.uint8)
        first[7, 7] = 1
        path = save(
            tmp_path / "a.fits",
            image_hdu(sky(rng, (64, 80)), name="EAST"),
            image_hdu(sky(rng, (64, 80)), name="WEST"),
            fits.ImageHDU(first, name="BAD"),
            fits.ImageHDU(first * 0, name="BAD"),
        )
        east, west = read(path, mask_hdu="BAD")
        assert (east.chip, west.chip) == ("EAST", "WEST")
        assert (east.plane.mask & MaskBit.DECLARED).any()
        assert not (west.plane.mask & MaskBit.DECLARED).any()

    def test_all_images_by_default_but_not_their_planes(self, tmp_path, rng):
        frames = read(self.chips(tmp_path, rng))
        assert len(frames) == 2
        assert not any((frame.plane.mask & MaskBit.DECLARED).any() for frame in frames)

    def test_one_chip_alone(self, tmp_path, rng):
        path = self.chips(tmp_path, rng)
        (frame,) = read_frames(path, HeaderWords(), BARE, chip="SCI-2")
        assert frame.chip == "SCI-2"
        with pytest.raises(FrameError, match="no chip 'SCI-3'"):
            read_frames(path, HeaderWords(), BARE, chip="SCI-3")

    def test_one_image_by_number(self, tmp_path, rng):
        (frame,) = read(self.chips(tmp_path, rng), image_hdu=2, mask_hdu=4)
        assert frame.chip == ""
        assert np.argwhere(frame.plane.mask & MaskBit.DECLARED).tolist() == [[20, 5]]

    def test_variance_plane_is_used_as_given(self, tmp_path, rng):
        given = np.full((64, 80), 300.0, np.float32)
        given[5, 5] = np.nan
        path = save(
            tmp_path / "a.fits",
            image_hdu(sky(rng, (64, 80)), name="SCI"),
            fits.ImageHDU(given, name="VAR"),
        )
        (frame,) = read(path, variance_hdu="VAR")
        unknown = np.argwhere(frame.plane.mask & MaskBit.NO_DATA).tolist()
        assert unknown == [[5, 5]]
        good = np.isfinite(given)
        assert np.array_equal(frame.plane.variance[good], given[good])
        assert frame.plane.variance[5, 5] > 0

    def test_unknown_extension_names_those_there_are(self, tmp_path, rng):
        path = self.chips(tmp_path, rng)
        with pytest.raises(FrameError, match=r"'NONE' .*image_hdu.*1 SCI, 2 SCI"):
            read(path, image_hdu="NONE")

    def test_planes_must_be_as_many_as_images(self, tmp_path, rng):
        path = save(
            tmp_path / "a.fits",
            image_hdu(sky(rng, (64, 80)), name="EAST"),
            image_hdu(sky(rng, (64, 80)), name="WEST"),
            fits.ImageHDU(np.zeros((64, 80), np.uint8), name="BAD"),
        )
        with pytest.raises(FrameError, match="finds 1 planes for 2 images"):
            read(path, mask_hdu="BAD")

    def test_planes_must_be_as_large_as_the_image(self, tmp_path, rng):
        path = save(
            tmp_path / "a.fits",
            image_hdu(sky(rng, (64, 80)), name="SCI"),
            fits.ImageHDU(np.zeros((64, 64), np.uint8), name="BAD"),
        )
        with pytest.raises(FrameError, match=r"mask_hdu must be as large.*\(64, 64\)"):
            read(path, mask_hdu="BAD")
