"""Open a FITS file, find its images, and hand over their pixels untouched."""

from __future__ import annotations

import math
import threading
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits

from latelight.errors import FrameError
from latelight.frames.settings import HeaderWords
from latelight.records import PixelArray

__all__ = [
    "ImageUnit",
    "find_images",
    "frame_stem",
    "open_fits",
    "pixels_of",
    "refuse_truncated",
]

# Extensions with such names go with an image and are none themselves.
PLANE_NAMES = frozenset(
    {"BADPIX", "BPM", "DQ", "ERR", "ERROR", "FLAGS", "MASK", "SIGMA", "VAR"}
    | {"VARIANCE", "WEIGHT", "WHT"}
)
MIN_SIDE_PX = 32
FITS_BLOCK = 2880  # bytes
# Damaged sizes must not ask for all the memory there is.
MAX_PIXELS = 2**30
# Filters of warnings belong to the process: one thread at a time changes them.
_ONE_AT_A_TIME = threading.Lock()


@dataclass(frozen=True, slots=True)
class ImageUnit:
    """One image of a file, with the planes that go with it.

    Attributes
    ----------
    chip : str
        Extension name, name and version, or number; empty for the only image.
    shape : (int, int)
        Rows and columns.
    hdu : astropy HDU
        The image.
    headers : tuple of astropy.io.fits.Header
        Its own, then the primary one it inherits from.
    mask, variance : astropy HDU or None
        The planes that go with it.
    """

    chip: str
    shape: tuple[int, int]
    hdu: Any
    headers: tuple[Any, ...]
    mask: Any = None
    variance: Any = None


@contextmanager
def open_fits(path: Path) -> Iterator[Any]:
    """Open a FITS file; whatever goes wrong inside becomes a FrameError.

    The reading library raises a dozen kinds of exceptions on damaged files and
    warns about most healthy ones, so both are dealt with in this one place.  Threads
    wait for one another here.

    Parameters
    ----------
    path : Path
        Plain, gzipped or tile-compressed file.

    Yields
    ------
    astropy.io.fits.HDUList

    Raises
    ------
    FrameError
        With the reason in plain words.
    """
    with _ONE_AT_A_TIME, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            # Opened here, as the library leaves a file open that it gives up on.
            with (
                path.open("rb") as stream,
                fits.open(stream, memmap=False, do_not_scale_image_data=True) as file,
            ):
                yield file
        except FrameError:
            raise
        except Exception as error:
            raise FrameError(path, _reason(path, error)) from error


def _reason(path: Path, error: Exception) -> str:
    """Say in plain words why a file cannot be read."""
    if isinstance(error, FileNotFoundError):
        return "no such file: check [night] frames"
    if isinstance(error, PermissionError):
        return "may not be read: change its rights"
    if isinstance(error, MemoryError):
        return "does not fit into memory: cut it into smaller frames"
    if path.is_file() and path.stat().st_size == 0:
        return "the file is empty: copy it again"
    if isinstance(error, EOFError):
        return "the file is truncated: copy it again"
    text = str(error).splitlines()[0] if str(error) else "no reason given"
    return (
        f"cannot be read as FITS ({type(error).__name__}: {text[:200]}): the file is "
        "damaged or of another kind; copy it again or leave it out"
    )


def frame_stem(path: Path) -> str:
    """Return a file's name without its FITS and compression suffixes."""
    name = path.name
    for suffix in (".gz", ".fz", ".bz2", ".fits", ".fit", ".fts"):
        if name.lower().endswith(suffix) and len(name) > len(suffix):
            name = name[: -len(suffix)]
    return name


def find_images(path: Path, file: Any, *, words: HeaderWords) -> tuple[ImageUnit, ...]:
    """Find the images of an open file and pair them with mask and variance.

    Masks and variances go with the images by EXTVER where every one has its
    own, else by their order in the file.

    Raises
    ------
    FrameError
        If there is no image, one has wrong dimensions or is tiny, or the planes
        cannot be paired.
    """
    units = list(file)
    images = _choose_images(path, units, words)
    masks = _planes(path, units, images, words.mask_hdu, "mask_hdu")
    variances = _planes(path, units, images, words.variance_hdu, "variance_hdu")
    chips = _chip_names(units, images)
    primary = units[0].header
    found = []
    for chip, hdu, mask, variance in zip(chips, images, masks, variances, strict=True):
        shape = _plane_shape(path, hdu)
        for plane, key in ((mask, "mask_hdu"), (variance, "variance_hdu")):
            if plane is not None and _plane_shape(path, plane) != shape:
                reason = (
                    f"[header] {key} must be as large as its image, {shape}, got "
                    f"{_plane_shape(path, plane)}: name another extension"
                )
                raise FrameError(path, reason)
        headers = (hdu.header,) if hdu is units[0] else (hdu.header, primary)
        found.append(ImageUnit(chip, shape, hdu, headers, mask, variance))
    return tuple(found)


def pixels_of(path: Path, hdu: Any) -> PixelArray:
    """Return an image as native, C-contiguous, writable float32, shape (ny, nx).

    BSCALE and BZERO are applied; BLANK becomes NaN; values too large for float32
    become infinite.

    Raises
    ------
    FrameError
        If the file ends before the image does.
    """
    refuse_truncated(path, hdu)
    raw = np.asarray(hdu.data)
    blank = hdu.header.get("BLANK")
    is_blank = raw == blank if raw.dtype.kind in "iu" and blank is not None else None
    with np.errstate(over="ignore", invalid="ignore"):
        pixels = np.array(raw.reshape(raw.shape[-2:]), dtype=np.float32, order="C")
        scale = float(hdu.header.get("BSCALE", 1.0))
        zero = float(hdu.header.get("BZERO", 0.0))
        if scale != 1.0:
            pixels *= np.float32(scale)
        if zero != 0.0:
            pixels += np.float32(zero)
    if is_blank is not None:
        pixels[is_blank.reshape(pixels.shape)] = np.nan
    return pixels


def refuse_truncated(path: Path, hdu: Any) -> None:
    """Refuse an image that a plain file ends before; the headers suffice to tell.

    Raises
    ------
    FrameError
        If the file is shorter than its header says.  A gzipped file shows that
        only when it is read.
    """
    place = hdu.fileinfo()
    if place is None or path.suffix.lower() in {".gz", ".bz2", ".zip", ".z"}:
        return
    # A tile-compressed image tells its size in whole FITS blocks only, and the
    # filling of the last block may be missing without harm.
    compressed = isinstance(hdu, fits.CompImageHDU)
    size = place["datSpan"] - FITS_BLOCK + 1 if compressed else hdu.size
    missing = place["datLoc"] + size - path.stat().st_size
    if missing > 0:
        reason = f"the file is truncated, {missing} bytes are missing: copy it again"
        raise FrameError(path, reason)


def _choose_images(path: Path, units: list[Any], words: HeaderWords) -> list[Any]:
    """Return the images the settings ask for, or every 2-D image."""
    if words.image_hdu is not None:
        return _named(path, units, words.image_hdu, "image_hdu")
    planes = {
        id(hdu)
        for name, key in (
            (words.mask_hdu, "mask_hdu"),
            (words.variance_hdu, "variance_hdu"),
        )
        if name is not None
        for hdu in _named(path, units, name, key)
    }
    holding = [
        hdu
        for hdu in units
        if _is_image(hdu) and id(hdu) not in planes and hdu.name not in PLANE_NAMES
    ]
    images = [hdu for hdu in holding if len(_squeezed(hdu.shape)) == 2]
    if images:
        return images
    if holding:
        _plane_shape(path, holding[0])
    reason = "holds no image: check the file, or name one in [header] image_hdu"
    raise FrameError(path, reason)


def _is_image(hdu: Any) -> bool:
    return bool(hdu.is_image and hdu.shape and math.prod(hdu.shape) > 0)


def _named(path: Path, units: list[Any], name: str | int, key: str) -> list[Any]:
    """Return the images with a number or a name; at least one."""
    if isinstance(name, int):
        found = units[name : name + 1] if 0 <= name < len(units) else []
    else:
        found = [hdu for hdu in units if hdu.name.upper() == name.strip().upper()]
    found = [hdu for hdu in found if _is_image(hdu)]
    if not found:
        have = ", ".join(
            f"{number} {hdu.name}".strip()
            for number, hdu in enumerate(units)
            if _is_image(hdu)
        )
        reason = (
            f"no image extension {name!r} ([header] {key}); the file has: "
            f"{have or 'none'}"
        )
        raise FrameError(path, reason)
    return found


def _planes(
    path: Path, units: list[Any], images: list[Any], name: str | int | None, key: str
) -> list[Any]:
    """Return the plane that goes with each image, or None for each."""
    if name is None:
        return [None] * len(images)
    planes = _named(path, units, name, key)
    if len(planes) != len(images):
        reason = (
            f"[header] {key} {name!r} finds {len(planes)} planes for {len(images)} "
            "images: there must be one for each"
        )
        raise FrameError(path, reason)
    of_version = {plane.ver: plane for plane in planes}
    versions = [image.ver for image in images]
    if len(of_version) == len(planes) and set(of_version) == set(versions):
        return [of_version[version] for version in versions]
    return planes


def _chip_names(units: list[Any], images: list[Any]) -> list[str]:
    """Name each image of a file: nothing, name, name-version, or number."""
    if len(images) == 1:
        return [""]
    names = [hdu.name for hdu in images]
    if all(names) and len(set(names)) == len(names):
        return names
    versioned = [f"{hdu.name}-{hdu.ver}" for hdu in images]
    if all(names) and len(set(versioned)) == len(names):
        return versioned
    return [str(units.index(hdu)) for hdu in images]


def _squeezed(shape: tuple[int, ...]) -> tuple[int, ...]:
    """Drop leading axes of length one, down to two axes."""
    while len(shape) > 2 and shape[0] == 1:
        shape = shape[1:]
    return tuple(shape)


def _plane_shape(path: Path, hdu: Any) -> tuple[int, int]:
    """Return an image's rows and columns; refuse what is no 2-D image."""
    shape = _squeezed(hdu.shape)
    if len(shape) != 2:
        reason = (
            f"the image must have two axes, got {len(shape)} {tuple(hdu.shape)}: "
            "name a 2-D image in [header] image_hdu"
        )
        raise FrameError(path, reason)
    if min(shape) < MIN_SIDE_PX:
        reason = (
            f"the image must be at least {MIN_SIDE_PX} pixels a side, got {shape}: "
            "name another in [header] image_hdu"
        )
        raise FrameError(path, reason)
    if math.prod(shape) > MAX_PIXELS:
        reason = f"the image must have at most {MAX_PIXELS} pixels, got {shape}"
        raise FrameError(path, reason)
    return shape[0], shape[1]
