"""A frame's world coordinates, trusted only after they were checked."""

from __future__ import annotations

import re
import warnings
from pathlib import Path
from typing import Any

import numpy as np

from latelight.errors import FrameError
from latelight.records import FloatArray

__all__ = ["checked_wcs", "footprint"]

ROUND_TRIP_PX = 0.01
GRID_NODES = 7
# Of the SIP convention (Shupe et al. 2005, ASP Conf. Ser. 347, 491).
MAX_SIP_ORDER = 9
# Axes that say nothing of the sky: plain pixels.
PIXEL_AXES = frozenset({"", "LINEAR", "PIXEL"})
SIP_WORD = re.compile(r"[AB]_\d+_\d+|[AB]_ORDER")
NUMBER_WORD = re.compile(
    r"CR(?:VAL|PIX)[12]|CDELT[12]|CD[12]_[12]|PC[12]_[12]|" + SIP_WORD.pattern
)
# PVi_0 to PVi_4 of the longitude axis tell the projection's native pole
# (Calabretta & Greisen 2002, A&A 395, 1077, section 2.5); the rest distorts.
DISTORTING_PV = re.compile(r"PV1_(?:[5-9]|\d\d)|PV2_\d+")


def checked_wcs(
    path: Path, headers: tuple[Any, ...], *, shape: tuple[int, int]
) -> tuple[Any, tuple[str, ...]]:
    """Read an image's celestial WCS and try it on a grid over the frame.

    Parameters
    ----------
    path : Path
        The file, for messages.
    headers : tuple of astropy.io.fits.Header
        The image's own, then the primary one (reference system only).
    shape : (int, int)
        Rows and columns.

    Returns
    -------
    wcs : astropy.wcs.WCS or None
        None when the header has no world coordinates.
    notes : tuple of str
        What was found missing.

    Raises
    ------
    FrameError
        If there is a WCS and it cannot be trusted: not RA and Dec, a singular
        matrix, SIP words without ``-SIP``, both SIP and PV distortions, or pixels
        that do not come back to within 0.01 px.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            return _checked(path, headers, shape)
        except FrameError:
            raise
        except Exception as error:
            text = (str(error).strip().splitlines() or [""])[-1]
            if "Singular" in type(error).__name__:
                text = "the CD matrix is singular"
            reason = (
                f"broken WCS ({type(error).__name__}: {text}): solve the frame again, "
                "or remove its WCS words"
            )
            raise FrameError(path, reason) from error


def footprint(wcs: Any, *, shape: tuple[int, int]) -> FloatArray | None:
    """Return the four outer corners on the sky, shape (4, 2): RA and Dec, degrees.

    They go round the frame from the first pixel along x; None without a WCS.
    """
    if wcs is None:
        return None
    ny, nx = shape
    x = np.array([-0.5, nx - 0.5, nx - 0.5, -0.5])
    y = np.array([-0.5, -0.5, ny - 0.5, ny - 0.5])
    ra, dec = wcs.all_pix2world(x, y, 0)
    return np.column_stack([ra % 360.0, dec])


def _checked(
    path: Path, headers: tuple[Any, ...], shape: tuple[int, int]
) -> tuple[Any, tuple[str, ...]]:
    header = headers[0]
    types = [str(header.get(f"CTYPE{axis}", "")).strip().upper() for axis in (1, 2)]
    if all(axis in PIXEL_AXES for axis in types):
        return None, (_no_wcs_note(headers),)
    _refuse_axes(path, types)
    _refuse_text(path, header)
    _refuse_distortions(path, header, types)
    notes = _refuse_system(path, headers)
    # Imported here because it takes longer than reading a frame does.
    from astropy.wcs import WCS

    merged = header.copy(strip=False)
    for word in ("RADESYS", "RADECSYS", "EQUINOX"):
        if word not in merged and word in headers[-1]:
            merged[word] = headers[-1][word]
    wcs = WCS(merged, naxis=2)
    _refuse_matrix(path, wcs)
    _refuse_round_trip(path, wcs, shape)
    return wcs, notes


def _no_wcs_note(headers: tuple[Any, ...]) -> str:
    pointing = any("RA" in header and "DEC" in header for header in headers)
    extra = "; RA and DEC words alone do not place pixels" if pointing else ""
    return f"no WCS: sky positions are left empty{extra}"


def _refuse_axes(path: Path, types: list[str]) -> None:
    if types[0].startswith("RA--") and types[1].startswith("DEC-"):
        return
    reason = (
        f"broken WCS: CTYPE1 and CTYPE2 must be right ascension and declination, got "
        f"{types[0]!r} and {types[1]!r}: solve the frame again in RA and Dec"
    )
    raise FrameError(path, reason)


def _refuse_text(path: Path, header: Any) -> None:
    """Refuse words that must be numbers and are not: they would count as zero."""
    for word in header:
        if NUMBER_WORD.fullmatch(word) and not isinstance(header[word], int | float):
            reason = (
                f"broken WCS: {word} must be a number, got {header[word]!r}: solve the "
                "frame again"
            )
            raise FrameError(path, reason)


def _refuse_distortions(path: Path, header: Any, types: list[str]) -> None:
    """Refuse distortions that one reader would apply and another would not."""
    words = list(header)
    for word in ("A_ORDER", "B_ORDER", "AP_ORDER", "BP_ORDER"):
        if word in header and not 0 <= header[word] <= MAX_SIP_ORDER:
            reason = (
                f"broken WCS: {word} must be 0 to {MAX_SIP_ORDER}, got "
                f"{header[word]!r}: solve the frame again"
            )
            raise FrameError(path, reason)
    has_sip = any(SIP_WORD.fullmatch(word) for word in words)
    says_sip = [axis.endswith("-SIP") for axis in types]
    if has_sip and not all(says_sip):
        reason = (
            "broken WCS: SIP coefficients need -SIP at the end of CTYPE1 and CTYPE2, "
            f"got {types[0]!r} and {types[1]!r}: add it, or remove the coefficients"
        )
        raise FrameError(path, reason)
    if has_sip and any(DISTORTING_PV.fullmatch(word) for word in words):
        reason = (
            "broken WCS: both SIP and PV distortions, of which only one can be meant: "
            "remove one of them"
        )
        raise FrameError(path, reason)


def _refuse_system(path: Path, headers: tuple[Any, ...]) -> tuple[str, ...]:
    """Refuse coordinates that are not of J2000; note an odd equinox."""
    found: dict[str, Any] = {}
    for word in ("RADESYS", "RADECSYS", "EQUINOX"):
        for header in headers:
            found.setdefault(word, header.get(word))
            if found[word] is None:
                del found[word]
    system = str(found.get("RADESYS", found.get("RADECSYS", ""))).strip().upper()
    equinox = found.get("EQUINOX")
    year = float(equinox) if isinstance(equinox, int | float) else 2000.0
    if system.startswith("FK4") or (not system and year < 1984.0):
        reason = (
            f"the WCS must be of ICRS or J2000, got {system or 'no RADESYS'} "
            f"equinox {year:g}: solve the frame again"
        )
        raise FrameError(path, reason)
    if year != 2000.0 and system != "ICRS":
        return (f"WCS of equinox {year:g} taken as J2000",)
    return ()


def _refuse_matrix(path: Path, wcs: Any) -> None:
    matrix = np.asarray(wcs.pixel_scale_matrix, dtype=float)
    scale = np.hypot(matrix[0], matrix[1]).prod()
    if not np.isfinite(matrix).all() or abs(np.linalg.det(matrix)) <= 1e-6 * scale:
        reason = (
            f"broken WCS: the CD matrix is singular, {matrix.tolist()}: solve the "
            "frame again"
        )
        raise FrameError(path, reason)


def _refuse_round_trip(path: Path, wcs: Any, shape: tuple[int, int]) -> None:
    """Take a grid of pixels to the sky and back."""
    ny, nx = shape
    y, x = np.meshgrid(
        np.linspace(0, ny - 1, GRID_NODES), np.linspace(0, nx - 1, GRID_NODES)
    )
    ra, dec = wcs.all_pix2world(x.ravel(), y.ravel(), 0)
    back_x, back_y = wcs.all_world2pix(ra, dec, 0)
    error = np.max(np.hypot(back_x - x.ravel(), back_y - y.ravel()))
    if not error <= ROUND_TRIP_PX:
        reason = (
            f"broken WCS: pixels must come back from the sky to {ROUND_TRIP_PX} px, "
            f"got {error:.3g} px: solve the frame again"
        )
        raise FrameError(path, reason)
