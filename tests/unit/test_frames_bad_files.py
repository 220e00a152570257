"""Files that cannot be used: one clear FrameError, and never anything else."""

import gzip
import io

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from latelight.errors import FrameError
from latelight.frames.digest import file_digest
from latelight.frames.headers import read_headers
from latelight.frames.reader import read_frames
from latelight.frames.settings import FrameSettings, HeaderWords

WORDS = {"MJD-OBS": 60000.0, "EXPTIME": 60.0, "FILTER": "r"}
TAN = {
    "CTYPE1": "RA---TAN-SIP",
    "CTYPE2": "DEC--TAN-SIP",
    "CRVAL1": 120.0,
    "CRVAL2": 20.0,
    "CRPIX1": 20.0,
    "CRPIX2": 20.0,
    "CD1_1": -1e-4,
    "CD2_2": 1e-4,
    "A_ORDER": 2,
    "B_ORDER": 2,
    "A_2_0": 1e-6,
    "B_0_2": 1e-6,
}


def noise(shape=(40, 48), level=300.0):
    return np.random.default_rng(3).normal(level, 15.0, shape).astype(np.float32)


def file_bytes(pixels, words=WORDS | TAN, kind=fits.PrimaryHDU):
    hdu = kind(pixels)
    hdu.header.update(words)
    first = [] if kind is fits.PrimaryHDU else [fits.PrimaryHDU()]
    stream = io.BytesIO()
    fits.HDUList([*first, hdu]).writeto(stream)
    return stream.getvalue()


GOOD = file_bytes(np.rint(noise()).astype(np.uint16))
PACKED = file_bytes(np.rint(noise()).astype(np.uint16), kind=fits.CompImageHDU)


def refusal(tmp_path, content, name="a.fits", **words):
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(FrameError) as caught:
        read_frames(path, HeaderWords(**words), FrameSettings())
    assert caught.value.path == path
    return caught.value.reason


class TestFiles:
    def test_missing(self, tmp_path):
        for act in (
            lambda path: read_frames(path, HeaderWords(), FrameSettings()),
            lambda path: read_headers(path, HeaderWords()),
        ):
            with pytest.raises(FrameError, match=r"none\.fits: no such file"):
                act(tmp_path / "none.fits")
        with pytest.raises(FrameError, match="cannot be read"):
            file_digest(tmp_path / "none.fits")

    def test_empty(self, tmp_path):
        assert "empty" in refusal(tmp_path, b"")

    def test_not_fits(self, tmp_path):
        assert "cannot be read as FITS" in refusal(tmp_path, b"hello" * 1000)

    @pytest.mark.parametrize("length", [len(GOOD) - 2880, 5760 + 100, 2900])
    def test_truncated(self, tmp_path, length):
        pixels = np.rint(noise((96, 96))).astype(np.uint16)
        reason = refusal(tmp_path, file_bytes(pixels)[:length])
        assert "truncated" in reason or "cannot be read as FITS" in reason

    def test_truncated_inside_the_pixels_counts_the_loss(self, tmp_path):
        whole = file_bytes(np.rint(noise((96, 96))).astype(np.uint16))
        assert "truncated" in refusal(tmp_path, whole[:-6000])

    def test_missing_padding_is_no_loss(self, tmp_path):
        start = GOOD.index(b"END     ")
        data = (start // 2880 + 1) * 2880
        path = tmp_path / "a.fits"
        path.write_bytes(GOOD[: data + 40 * 48 * 2])
        assert len(read_frames(path, HeaderWords(), FrameSettings())) == 1

    def test_truncated_gzip(self, tmp_path):
        packed = gzip.compress(file_bytes(noise((96, 96))))
        reason = refusal(tmp_path, packed[: len(packed) // 2], "a.fits.gz")
        assert "truncated" in reason or "damaged" in reason

    def test_a_directory(self, tmp_path):
        with pytest.raises(FrameError):
            read_frames(tmp_path, HeaderWords(), FrameSettings())


class TestImages:
    def test_no_image(self, tmp_path):
        content = file_bytes(None)
        assert "no image" in refusal(tmp_path, content)

    @pytest.mark.parametrize("shape", [(4000,), (3, 40, 48)])
    def test_wrong_dimensions(self, tmp_path, shape):
        reason = refusal(tmp_path, file_bytes(noise(shape), words=WORDS))
        assert "two axes" in reason
        assert str(shape) in reason

    def test_tiny(self, tmp_path):
        assert "at least 32" in refusal(tmp_path, file_bytes(noise((31, 200))))

    def test_all_nan(self, tmp_path):
        assert "NaN" in refusal(tmp_path, file_bytes(np.full((40, 48), np.nan, "f4")))

    def test_constant(self, tmp_path):
        reason = refusal(tmp_path, file_bytes(np.full((40, 48), 7, "i2")))
        assert "every pixel is 7" in reason

    def test_nearly_constant(self, tmp_path):
        pixels = np.full((40, 48), 100, "i2")
        pixels[::7, ::7] = 101
        assert "constant" in refusal(tmp_path, file_bytes(pixels))

    def test_all_saturated(self, tmp_path):
        words = WORDS | {"SATURATE": 200.0}
        reason = refusal(tmp_path, file_bytes(noise(), words))
        assert "saturated" in reason
        assert "200" in reason

    def test_all_at_the_ceiling(self, tmp_path):
        pixels = np.full((40, 48), 65535, np.uint16)
        pixels[:5] = np.rint(noise((5, 48)))
        assert "saturated" in refusal(tmp_path, file_bytes(pixels))

    def test_everything_declared_bad(self, tmp_path):
        hdus = fits.HDUList(
            [
                fits.PrimaryHDU(),
                fits.ImageHDU(noise(), fits.Header(WORDS), name="SCI"),
                fits.ImageHDU(np.ones((40, 48), "u1"), name="BAD"),
            ]
        )
        stream = io.BytesIO()
        hdus.writeto(stream)
        reason = refusal(tmp_path, stream.getvalue(), mask_hdu="BAD")
        assert "hardly any pixel is good" in reason


def only_frame_errors(content, name, folder):
    path = folder / name
    path.write_bytes(content)
    words, levels = HeaderWords(), FrameSettings()
    for act in (read_headers, lambda p, w: read_frames(p, w, levels)):
        try:
            act(path, words)
        except FrameError as error:
            assert error.reason  # noqa: PT017


DAMAGE = st.lists(st.tuples(st.integers(0, 2**16), st.integers(0, 255)), max_size=12)
FUZZ = settings(
    max_examples=60,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)


@FUZZ
@given(damage=DAMAGE, packed=st.booleans(), length=st.floats(0.2, 1.5))
def test_damaged_bytes_never_raise_anything_else(tmp_path, damage, packed, length):
    content = bytearray(PACKED if packed else GOOD)
    content = content[: int(len(content) * length)]
    for place, value in damage:
        content[place % len(content)] = value
    only_frame_errors(bytes(content), "a.fits", tmp_path)


KEYS = st.sampled_from([*WORDS, *TAN, "NAXIS", "NAXIS1", "BITPIX", "BSCALE", "BZERO"])
VALUES = st.one_of(
    st.integers(-3, 70000),
    st.floats(-1e6, 1e6),
    st.booleans(),
    st.text("ABC -.0123456789'/E+", max_size=12),
)


@FUZZ
@example(key="NAXIS1", value=60000)
@example(key="BITPIX", value=17)
@example(key="CD2_2", value=0.0)
@example(key="A_ORDER", value=1e5)
@given(key=KEYS, value=VALUES)
def test_damaged_headers_never_raise_anything_else(tmp_path, key, value):
    text = repr(value) if isinstance(value, str) else str(value)
    if isinstance(value, bool):
        text = "T" if value else "F"
    card = f"{key:8s}= {text:>20s}"[:80].ljust(80).encode("ascii", "replace")
    place = GOOD.index(f"{key:8s}".encode()) if f"{key:8s}".encode() in GOOD else 0
    place -= place % 80
    content = GOOD[:place] + card + GOOD[place + 80 :]
    only_frame_errors(content, "a.fits", tmp_path)
