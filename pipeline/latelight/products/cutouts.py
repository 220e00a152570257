"""A candidate's neighbourhood: cut out of a pair, and kept as one FITS file."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits

import latelight
from latelight.masks import MASK_MEANINGS, MaskBit
from latelight.products.atomic import write_bytes
from latelight.products.candidate_columns import CANDIDATE_COLUMNS
from latelight.products.fits_file import fits_bytes, row_card
from latelight.products.meaning_columns import MEANING_CARDS
from latelight.products.rows import CandidateRow
from latelight.products.settings import ProductSettings
from latelight.products.windows import Window, window_around
from latelight.records import ArcTrace, Difference, MaskArray, PixelArray, Plane

__all__ = ["Cutout", "cut_out", "mask_cards", "template_offset_px", "write_cutout"]

# Header keyword (8 letters at most) and comment of each field of the row.
CARDS = {
    "id": ("ID", "designation of the candidate"),
    "field": ("FIELD", "field word"),
    "filter": ("FILTER", "filter word"),
    "template": ("TEMPLATE", "name of the template frame"),
    "science": ("SCIENCE", "name of the science frame"),
    "mjd_template": ("MJD-TMPL", "middle of the template exposure, UTC"),
    "mjd_science": ("MJD-SCI", "middle of the science exposure, UTC"),
    "ra": ("RA", "bright ridge, science epoch, ICRS"),
    "dec": ("DEC", "bright ridge, science epoch, ICRS"),
    "snr": ("SNR", "significance"),
    "length": ("LENGTH", "along the arc"),
    "width": ("WIDTH", "FWHM across, PSF taken out"),
    "surface_brightness": ("SURFB", "surface brightness"),
    "normal_pa": ("MOVEPA", "position angle of the motion"),
    "normal_pa_err": ("MOVEPAER", "1 sigma"),
    "speed": ("SPEED", "along the normal"),
    "speed_err": ("SPEEDERR", "1 sigma"),
    "source": ("SOURCE", "best listed source"),
    "away_angle": ("AWAYANG", "motion minus away from source"),
    "score": ("SCORE", "log10 likelihood ratio of source"),
    "dust_depth": ("DEPTH", "dust, + towards observer"),
    "dust_depth_err": ("DEPTHERR", "1 sigma"),
    "verdict": ("VERDICT", "what the ridge is taken for"),
    "pair": ("PAIR", "name of the pair"),
    "x": ("XPIX", "science frame column, first 0"),
    "y": ("YPIX", "science frame row, first 0"),
    "normal_angle": ("MOVEANG", "motion from +x towards +y"),
    "normal_angle_err": ("MOVEANER", "1 sigma"),
    "shift_px": ("SHIFT", "distance moved"),
    "shift_err_px": ("SHIFTERR", "1 sigma"),
    "length_px": ("LENPIX", "along the arc"),
    "width_px": ("WIDPIX", "FWHM across"),
    "width_err": ("WIDTHERR", "1 sigma"),
    "width_err_px": ("WIDPIXER", "1 sigma"),
    "surface_brightness_err": ("SURFBERR", "1 sigma"),
    "surface_brightness_counts": ("SURFCNT", "surface brightness"),
    "surface_brightness_err_counts": ("SURFCNTE", "1 sigma"),
    "sense_odds": ("SENSEODD", "log10 odds of the sense"),
    "lobes": ("LOBES", "lobes seen"),
    "profile_chi2": ("PROFCHI2", "reduced chi-square of profile"),
    "curvature_radius": ("CURVRAD", "radius of the arc"),
    "source_separation": ("SRCSEP", "arc to source"),
    **MEANING_CARDS,
    "track": ("TRACK", "track on which it lies"),
}


@dataclass(frozen=True, slots=True)
class Cutout:
    """Copies of a candidate's pixels, all of one shape.

    Attributes
    ----------
    row : CandidateRow
        The candidate.
    template, science : float32 array, shape (n, n)
        The two epochs on one grid and flux scale, counts; NaN without value.
    difference : float32 array, shape (n, n)
        Science minus template, counts; NaN without value.
    variance : float32 array, shape (n, n)
        Variance of one pixel of the difference; 1 outside the frame.
    mask : uint16 array, shape (n, n)
        Bits of the difference; NO_DATA outside the frame.
    wcs : astropy.wcs.WCS or None
        Celestial WCS of the cutout.
    x0, y0 : int
        Science pixel of the cutout's first pixel.
    trace : ArcTrace
        Centre line of the arc, in pixels of the cutout.
    fwhm_px : float
        PSF width, pixels.
    """

    row: CandidateRow
    template: PixelArray
    science: PixelArray
    difference: PixelArray
    variance: PixelArray
    mask: MaskArray
    wcs: Any
    x0: int
    y0: int
    trace: ArcTrace
    fwhm_px: float

    @property
    def snr(self) -> PixelArray:
        """Difference over its 1 sigma, pixel by pixel."""
        return np.divide(self.difference, np.sqrt(self.variance), dtype=np.float32)


def template_offset_px(row: CandidateRow) -> float:
    """Return how far the template's ridge lies ahead of the science's, pixels.

    Along the motion, so negative when the template is the earlier epoch; 0 when
    only one lobe shows.
    """
    shift = row.shift_px or 0.0
    return -shift if row.mjd_science >= row.mjd_template else shift


def cut_out(
    row: CandidateRow,
    *,
    science: Plane,
    template: Plane,
    difference: Difference,
    wcs: Any,
    trace: ArcTrace,
    settings: ProductSettings,
) -> Cutout:
    """Cut a candidate out of its pair.

    The square is centred between the places of the arc at the two epochs and
    holds the whole arc, both lobes and some sky; at the edge of the frame it
    keeps its size and is filled with NaN, mask NO_DATA.

    Parameters
    ----------
    row : CandidateRow
        The candidate.
    science, template : Plane
        Both on the science grid, PSF and flux scale (a ``MatchedPair``'s).
    difference : Difference
        Their difference.
    wcs : astropy.wcs.WCS or None
        WCS of the science frame; distortions in lookup tables are not kept.
    trace : ArcTrace
        Centre line of the arc, science pixels.
    settings : ProductSettings
        Table ``[products]``.

    Raises
    ------
    ValueError
        If the shapes of the planes differ.
    """
    shapes = {a.shape for a in (science.pixels, template.pixels, difference.pixels)}
    if len(shapes) != 1:
        msg = f"science, template and difference must have one shape, got {shapes}"
        raise ValueError(msg)
    window = _window(row, trace, difference.fwhm_px, settings.max_cutout_px)

    def values(pixels: PixelArray, mask: MaskArray) -> PixelArray:
        piece: PixelArray = window.cut(pixels, np.nan)
        piece[(window.cut(mask, MaskBit.NO_DATA) & MaskBit.NO_DATA) != 0] = np.nan
        return piece

    return Cutout(
        row=row,
        template=values(template.pixels, template.mask),
        science=values(science.pixels, science.mask),
        difference=values(difference.pixels, difference.mask),
        variance=window.cut(difference.variance, 1.0),
        mask=window.cut(difference.mask, MaskBit.NO_DATA),
        wcs=window.wcs(wcs),
        x0=window.x0,
        y0=window.y0,
        trace=replace(trace, x=trace.x - window.x0, y=trace.y - window.y0),
        fwhm_px=difference.fwhm_px,
    )


def write_cutout(path: Path, cutout: Cutout) -> None:
    """Write a cutout: the row in the primary header, then five images.

    TEMPLATE, SCIENCE and DIFFERENCE (counts), SNR (difference over 1 sigma) and
    MASK (bits, explained in its header), each with its WCS and checksums.

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    primary = fits.PrimaryHDU()
    primary.header["CREATOR"] = f"latelight {latelight.__version__}"
    for column in CANDIDATE_COLUMNS:
        value = getattr(cutout.row, column.name)
        primary.header.append(row_card(column, value, *CARDS[column.name]), end=True)
    primary.header["CUTX0"] = (cutout.x0, "science column of the first pixel, from 0")
    primary.header["CUTY0"] = (cutout.y0, "science row of the first pixel, from 0")
    images = [
        ("TEMPLATE", cutout.template, "count", "on the science grid, PSF and scale"),
        ("SCIENCE", cutout.science, "count", "at the matched PSF"),
        ("DIFFERENCE", cutout.difference, "count", "science minus template"),
        ("SNR", cutout.snr, "", "difference over 1 sigma of one pixel"),
        ("MASK", cutout.mask, "", "non-zero: do not use; MBITnn explains 2^nn"),
    ]
    header = None if cutout.wcs is None else cutout.wcs.to_header(relax=True)
    hdus: list[Any] = [primary]
    for name, pixels, unit, meaning in images:
        hdu = fits.ImageHDU(pixels, header=header, name=name)
        if unit:
            hdu.header["BUNIT"] = unit
        hdu.header.add_comment(meaning)
        if name == "MASK":
            hdu.header.extend(mask_cards(), end=True)
        hdus.append(hdu)
    write_bytes(path, fits_bytes(hdus))


def mask_cards() -> list[tuple[str, str]]:
    """Return header cards that explain a mask: MBITnn says what 2^nn means."""
    return [
        (f"MBIT{line.bit.bit_length() - 1:02d}", f"{line.bit.name}: {line.meaning}")
        for line in MASK_MEANINGS
    ]


def _window(row: CandidateRow, trace: ArcTrace, fwhm_px: float, longest: int) -> Window:
    """Return the square that holds the arc at both epochs."""
    radians = np.radians(row.normal_angle)
    shift = template_offset_px(row)
    return window_around(
        np.append(trace.x, [row.x, row.x + shift * np.cos(radians)]),
        np.append(trace.y, [row.y, row.y + shift * np.sin(radians)]),
        fwhm_px=fwhm_px,
        reach_px=abs(shift),
        longest_px=longest,
    )
