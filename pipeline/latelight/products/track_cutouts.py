"""A track's neighbourhood at all epochs: cut out of a series, kept as one file."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from astropy import table as astropy_table
from astropy.io import fits

import latelight
from latelight.products.atomic import write_bytes
from latelight.products.coadding import part_moving
from latelight.products.fits_file import ascii_text, fits_bytes, row_card
from latelight.products.meaning_columns import MEANING_CARDS
from latelight.products.settings import ProductSettings
from latelight.products.track_columns import TRACK_COLUMNS
from latelight.products.track_rows import TrackRow
from latelight.products.windows import window_around
from latelight.records import EpochSeries, FloatArray, PixelArray, Track
from latelight.sky import pixel_angle_to_position_angle

__all__ = [
    "TRACK_CARDS",
    "TrackCutout",
    "cut_out_track",
    "moved_px",
    "write_track_cutout",
]

DAYS_PER_YEAR = 365.25

# Header keyword (8 letters at most) and comment of each field of the row.
TRACK_CARDS = {
    "id": ("ID", "designation of the track"),
    "field": ("FIELD", "field word"),
    "filter": ("FILTER", "filter word"),
    "grid": ("GRID", "frame whose pixels count"),
    "mjd": ("MJD-REF", "epoch of place and speed, UTC"),
    "mjd_first": ("MJD-FRST", "first epoch, UTC"),
    "mjd_last": ("MJD-LAST", "last epoch, UTC"),
    "n_epochs": ("NEPOCHS", "epochs that could be used"),
    "ra": ("RA", "middle of the ridge, ICRS"),
    "dec": ("DEC", "middle of the ridge, ICRS"),
    "place_err": ("PLACEERR", "1 sigma along the motion"),
    "snr": ("SNR", "significance"),
    "length": ("LENGTH", "along the ridge"),
    "width": ("WIDTH", "FWHM across, PSF taken out"),
    "width_err": ("WIDTHERR", "1 sigma"),
    "surface_brightness": ("SURFB", "at the last epoch that shows it"),
    "surface_brightness_err": ("SURFBERR", "1 sigma"),
    "normal_pa": ("MOVEPA", "position angle of the motion"),
    "normal_pa_err": ("MOVEPAER", "1 sigma"),
    "speed": ("SPEED", "along the normal"),
    "speed_err": ("SPEEDERR", "1 sigma"),
    "speed_change": ("SPEEDCHG", "change of the speed"),
    "speed_change_err": ("SPEEDCER", "1 sigma"),
    "place_speed_cov": ("COVPS", "covariance, place and speed"),
    "place_change_cov": ("COVPC", "covariance, place and change"),
    "speed_change_cov": ("COVSC", "covariance, speed and change"),
    "source": ("SOURCE", "best listed source"),
    "away_angle": ("AWAYANG", "motion minus away from source"),
    "score": ("SCORE", "log10 likelihood ratio of source"),
    "dust_depth": ("DEPTH", "dust, + towards observer"),
    "dust_depth_err": ("DEPTHERR", "1 sigma"),
    "found_in": ("FOUNDIN", "pairs, stack or both"),
    "candidates": ("CANDIDAT", "candidates that lie on it"),
    "verdict": ("VERDICT", "what the track is taken for"),
    "x": ("XPIX", "column on the grid, first 0"),
    "y": ("YPIX", "row on the grid, first 0"),
    "normal_angle": ("MOVEANG", "motion from +x towards +y"),
    "normal_angle_err": ("MOVEANER", "1 sigma"),
    "length_px": ("LENPIX", "along the ridge"),
    "width_px": ("WIDPIX", "FWHM across"),
    "sense_odds": ("SENSEODD", "log10 odds of the sense"),
    "chi2": ("CHI2", "reduced chi-square of the fit"),
    "seeing": ("SEEING", "median FWHM of the epochs"),
    "speed_px": ("SPEEDPX", "along the normal"),
    "speed_err_px": ("SPEEDPXE", "1 sigma"),
    "source_separation": ("SRCSEP", "track to source"),
    **MEANING_CARDS,
}


@dataclass(frozen=True, slots=True)
class TrackCutout:
    """Copies of a track's pixels at n epochs, all of one shape.

    Attributes
    ----------
    row : TrackRow
        The track.
    track : Track
        The same in pixels; trace and place are those of the cutout.
    epochs : float32 array, shape (n, m, m)
        Each epoch's difference, counts; NaN where masked.
    moving, still : float32 array, shape (m, m)
        What moves in them, co-added along the motion as at the track's ``mjd``, and
        what stands still: the sky less the template, the arc on that included;
        counts, NaN without value.
    noise : float64 array, shape (n,)
        Median 1 sigma of one pixel of each epoch, counts.
    names : tuple of str
        Names of the frames.
    fwhm_px : float
        Median PSF width, pixels.
    wcs : astropy.wcs.WCS or None
        Celestial WCS of the cutout.
    x0, y0 : int
        Pixel of the grid that is the cutout's first.
    scale : float or None
        Arcsec per pixel along the motion; None without a WCS.
    """

    row: TrackRow
    track: Track
    epochs: PixelArray
    moving: PixelArray
    still: PixelArray
    noise: FloatArray
    names: tuple[str, ...]
    fwhm_px: float
    wcs: Any
    x0: int
    y0: int
    scale: float | None

    @property
    def mjd(self) -> FloatArray:
        """Epochs, MJD."""
        return np.array([point.mjd for point in self.track.points])

    def offsets(self, mjd: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return how far the ridge has moved at some dates, and 1 sigma, pixels."""
        return moved_px(self.track, mjd)


def moved_px(track: Track, mjd: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return how far along its motion a track is at some dates, and 1 sigma.

    Parameters
    ----------
    track : Track
        The fit.
    mjd : float64 array, shape (n,)
        Dates, MJD.

    Returns
    -------
    offset, err : float64 array, shape (n,)
        Pixels from the ridge at the track's ``mjd``.
    """
    years = (np.asarray(mjd, dtype=float) - track.mjd) / DAYS_PER_YEAR
    change = track.change_px_yr2 if np.isfinite(track.change_px_yr2) else 0.0
    terms = np.stack([np.ones_like(years), years, 0.5 * years**2], axis=-1)
    offset = terms[..., 1] * track.speed_px_yr + terms[..., 2] * change
    variance = np.einsum("...i,ij,...j->...", terms, track.covariance, terms)
    return offset, np.sqrt(np.maximum(variance, 0.0))


def cut_out_track(
    row: TrackRow,
    *,
    track: Track,
    series: EpochSeries,
    wcs: Any,
    settings: ProductSettings,
) -> TrackCutout:
    """Cut a track out of its series.

    The square holds the whole ridge at all epochs and some sky; at the edge of the
    grid it keeps its size and is filled with NaN.

    Parameters
    ----------
    row : TrackRow
        The track.
    track : Track
        The same in pixels of the series' grid.
    series : EpochSeries
        What it was found in.
    wcs : astropy.wcs.WCS or None
        WCS of the grid; distortions in lookup tables are not kept.
    settings : ProductSettings
        Table ``[products]``.

    Raises
    ------
    ValueError
        If the track's points are not those of the series.
    """
    if len(track.points) != len(series):
        msg = (
            f"track must have one point for each of the {len(series)} epochs of the "
            f"series, got {len(track.points)}"
        )
        raise ValueError(msg)
    offsets, _ = moved_px(track, series.mjd)
    angle = np.radians(track.direction_angle)
    ends = np.array([offsets.min(), offsets.max(), 0.0])
    fwhm_px = float(np.median(series.fwhm_px))
    window = window_around(
        (track.trace.x[:, None] + ends * np.cos(angle)).ravel(),
        (track.trace.y[:, None] + ends * np.sin(angle)).ravel(),
        fwhm_px=fwhm_px,
        reach_px=0.0,
        longest_px=settings.max_cutout_px,
    )
    pixels = np.stack([window.cut(image, 0.0) for image in series.pixels])
    variance = np.stack([window.cut(image, 1.0) for image in series.variance])
    good = np.stack([window.cut(mask, 1) == 0 for mask in series.mask])
    moving, still = part_moving(
        pixels,
        np.where(good, 1.0 / np.maximum(variance, 1e-30), 0.0),
        step_x=offsets * np.cos(angle),
        step_y=offsets * np.sin(angle),
    )
    return TrackCutout(
        row=row,
        track=replace(
            track,
            trace=replace(
                track.trace, x=track.trace.x - window.x0, y=track.trace.y - window.y0
            ),
            x=track.x - window.x0,
            y=track.y - window.y0,
        ),
        epochs=np.where(good, pixels, np.float32(np.nan)),
        moving=moving,
        still=still,
        noise=np.array(
            [
                np.sqrt(np.median(v[g])) if g.any() else 0.0
                for v, g in zip(variance, good, strict=True)
            ]
        ),
        names=series.names,
        fwhm_px=fwhm_px,
        wcs=window.wcs(wcs),
        x0=window.x0,
        y0=window.y0,
        scale=None if wcs is None else _scale(wcs, track),
    )


def write_track_cutout(path: Path, cutout: TrackCutout) -> None:
    """Write a track's cutout: the row in the primary header, images and tables.

    MOVING (the epochs co-added along the motion), STILL (what does not move in them)
    and EPOCH1, EPOCH2... (differences, counts), each with its WCS;
    PROFILES (brightness along the motion, a column an epoch: the position-time
    picture), POINTS (the track at each epoch) and TRACE (the ridge at MJD-REF, pixels
    of the cutout).

    Raises
    ------
    ProductError
        If the file cannot be written.
    """
    primary = fits.PrimaryHDU()
    primary.header["CREATOR"] = f"latelight {latelight.__version__}"
    for column in TRACK_COLUMNS:
        value = getattr(cutout.row, column.name)
        primary.header.append(
            row_card(column, value, *TRACK_CARDS[column.name]), end=True
        )
    primary.header["CUTX0"] = (cutout.x0, "grid column of the first pixel, from 0")
    primary.header["CUTY0"] = (cutout.y0, "grid row of the first pixel, from 0")
    header = None if cutout.wcs is None else cutout.wcs.to_header(relax=True)
    hdus: list[Any] = [primary]
    for name, image, meaning in (
        ("MOVING", cutout.moving, "epochs co-added along the motion, as at MJD-REF"),
        ("STILL", cutout.still, "what stands still in the epochs"),
    ):
        hdu = fits.ImageHDU(image, header=header, name=name)
        hdu.header["BUNIT"] = "count"
        hdu.header.add_comment(meaning)
        hdus.append(hdu)
    for number, point in enumerate(cutout.track.points):
        hdu = fits.ImageHDU(
            cutout.epochs[number], header=header, name=f"EPOCH{number + 1}"
        )
        hdu.header["BUNIT"] = "count"
        hdu.header["FRAME"] = ascii_text(cutout.names[number])
        hdu.header["MJD-AVG"] = (round(point.mjd, 6), "middle of the exposure, UTC")
        hdu.header["NOISE"] = (
            float(f"{cutout.noise[number]:.6g}"),
            "[count] median 1 sigma of one pixel",
        )
        hdu.header.add_comment("epoch minus template; NaN where masked")
        hdus.append(hdu)
    for name, table in (
        ("PROFILES", _profile_table(cutout)),
        ("POINTS", _point_table(cutout)),
        ("TRACE", _trace_table(cutout)),
    ):
        hdu = fits.table_to_hdu(table)
        hdu.name = name
        hdus.append(hdu)
    write_bytes(path, fits_bytes(hdus))


def _scale(wcs: Any, track: Track) -> float:
    """Return arcsec per pixel along the motion."""
    _, scale = pixel_angle_to_position_angle(
        wcs, track.x, track.y, track.direction_angle
    )
    return scale


def _profile_table(cutout: TrackCutout) -> astropy_table.Table:
    offset = cutout.track.profile_offsets
    table = astropy_table.Table()
    table["offset_px"] = astropy_table.Column(offset, unit="pix")
    if cutout.scale is not None:
        table["offset"] = astropy_table.Column(offset * cutout.scale, unit="arcsec")
    for number, profile in enumerate(cutout.track.profiles, start=1):
        table[f"epoch{number}"] = astropy_table.Column(
            profile.astype(np.float32), unit="ct/pix"
        )
    return table


def _point_table(cutout: TrackCutout) -> astropy_table.Table:
    points = cutout.track.points
    fitted, fitted_err = cutout.offsets(cutout.mjd)
    table = astropy_table.Table()
    table["frame"] = [ascii_text(name) for name in cutout.names]
    table["mjd"] = astropy_table.Column(cutout.mjd, unit="d")
    for name, values, unit in (
        ("fitted_px", fitted, "pix"),
        ("fitted_err_px", fitted_err, "pix"),
        ("offset_px", [p.offset_px for p in points], "pix"),
        ("offset_err_px", [p.offset_err_px for p in points], "pix"),
        ("height_counts", [p.height_counts for p in points], "ct/pix"),
        ("height_err_counts", [p.height_err_counts for p in points], "ct/pix"),
    ):
        table[name] = astropy_table.Column(np.asarray(values, dtype=float), unit=unit)
    return table


def _trace_table(cutout: TrackCutout) -> astropy_table.Table:
    trace = cutout.track.trace
    table = astropy_table.Table()
    table["x"] = astropy_table.Column(trace.x, unit="pix")
    table["y"] = astropy_table.Column(trace.y, unit="pix")
    if cutout.wcs is not None:
        ra, dec = cutout.wcs.all_pix2world(trace.x, trace.y, 0)
        table["ra"] = astropy_table.Column(ra, unit="deg")
        table["dec"] = astropy_table.Column(dec, unit="deg")
    table["normal_angle"] = astropy_table.Column(trace.normal_angle, unit="deg")
    return table
