"""The arcs of a finished night that can be followed, from its tables."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from latelight.echo.constants import DAYS_PER_YEAR
from latelight.forecast.predict import MovingArc
from latelight.products.reading import (
    read_candidates,
    read_pairs,
    read_track_points,
    read_tracks,
)
from latelight.products.rows import CandidateRow, PairRow
from latelight.products.track_rows import TrackPointRow, TrackRow
from latelight.records import FloatArray
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["FollowedArc", "NightArcs", "arc_of_candidate", "arc_of_track", "read_arcs"]


@dataclass(frozen=True, slots=True, kw_only=True)
class FollowedArc:
    """An arc with a motion, from whichever table it stands in.

    Attributes
    ----------
    id, kind, field, filter, source : str
        As in the table; ``kind`` is ``"track"`` or ``"candidate"``.
    frame : str
        A frame that shows it.
    arc : MovingArc
        Its place and motion.
    mjd_last : float
        Last epoch at which it was measured, MJD.
    width : float or None
        FWHM across, PSF taken out, arcsec.
    seeing : float or None
        Arcsec.
    brightness : tuple of (float, float, float)
        MJD, surface brightness and 1 sigma, mag/arcsec^2, where it is known.
    sense_odds : float or None
        log10 of the odds that the sense of the motion is right.
    """

    id: str
    kind: str
    field: str
    filter: str
    source: str
    frame: str
    arc: MovingArc
    mjd_last: float
    width: float | None
    seeing: float | None
    brightness: tuple[tuple[float, float, float], ...]
    sense_odds: float | None


@dataclass(frozen=True, slots=True)
class NightArcs:
    """What can be followed, and what cannot.

    Attributes
    ----------
    arcs : tuple of FollowedArc
        Tracks first, then the candidates that are on none.
    left_out : dict of str to str
        Why an arc of the tables is not among them, by id.
    """

    arcs: tuple[FollowedArc, ...]
    left_out: dict[str, str]


def read_arcs(output: Path) -> NightArcs:
    """Read the tables of a night.

    Parameters
    ----------
    output : Path
        Output folder of ``latelight run``.

    Raises
    ------
    ProductError
        If the folder or its tables cannot be read.
    """
    candidates, pairs = read_candidates(output), read_pairs(output)
    tracks: tuple[TrackRow, ...] = ()
    points: tuple[TrackPointRow, ...] = ()
    # A night of pairs alone has no tracks.
    if (output / "tracks.ecsv").exists():
        tracks, points = read_tracks(output), read_track_points(output)
    arcs: list[FollowedArc] = []
    left_out: dict[str, str] = {}
    for row in tracks:
        if row.verdict != "track":
            left_out[row.id] = f"set aside as {row.verdict!r}"
        elif (followed := arc_of_track(row, points)) is None:
            left_out[row.id] = "its frames have no celestial WCS"
        else:
            arcs.append(followed)
    on_track = {
        name: row.id
        for row in tracks
        if row.verdict == "track"
        for name in row.candidates.split()
    }
    by_pair = {pair.pair: pair for pair in pairs}
    for candidate in candidates:
        if candidate.id in on_track:
            left_out[candidate.id] = f"is on track {on_track[candidate.id]}"
        elif (
            found := arc_of_candidate(candidate, by_pair.get(candidate.pair))
        ) is None:
            left_out[candidate.id] = _why_not(candidate)
        else:
            arcs.append(found)
    return NightArcs(tuple(arcs), left_out)


def arc_of_track(row: TrackRow, points: Sequence[TrackPointRow]) -> FollowedArc | None:
    """Return a track as an arc to follow; None when it has no place on the sky.

    Parameters
    ----------
    row : TrackRow
        The track.
    points : sequence of TrackPointRow
        Its epochs; those of other tracks are left aside.
    """
    if row.ra is None or row.dec is None or row.normal_pa is None:
        return None
    if not row.speed or not row.length:
        return None
    own = [point for point in points if point.track == row.id]
    epochs = tuple(p.mjd for p in own if p.offset is not None)
    return FollowedArc(
        id=row.id,
        kind="track",
        field=row.field,
        filter=row.filter,
        source=row.source,
        frame=row.grid,
        arc=MovingArc(
            ra=row.ra,
            dec=row.dec,
            mjd=row.mjd,
            pa=row.normal_pa,
            pa_err=row.normal_pa_err or 0.0,
            speed=row.speed,
            change=row.speed_change,
            covariance=_track_covariance(row),
            length=row.length,
            epochs=epochs or (row.mjd_first, row.mjd_last),
        ),
        mjd_last=max(epochs, default=row.mjd_last),
        width=row.width,
        seeing=row.seeing,
        brightness=tuple(
            (p.mjd, p.surface_brightness, p.surface_brightness_err)
            for p in own
            if p.surface_brightness is not None and p.surface_brightness_err is not None
        ),
        sense_odds=row.sense_odds,
    )


def arc_of_candidate(row: CandidateRow, pair: PairRow | None) -> FollowedArc | None:
    """Return a candidate as an arc to follow; None without place or speed.

    Parameters
    ----------
    row : CandidateRow
        The candidate.
    pair : PairRow or None
        Its pair, for the seeing.
    """
    if row.ra is None or row.dec is None or row.normal_pa is None:
        return None
    if not row.speed or not row.length:
        return None
    seeing = None if pair is None else pair.seeing_science
    brightness: tuple[tuple[float, float, float], ...] = ()
    if row.surface_brightness is not None and row.surface_brightness_err is not None:
        brightness = (
            (row.mjd_science, row.surface_brightness, row.surface_brightness_err),
        )
    return FollowedArc(
        id=row.id,
        kind="candidate",
        field=row.field,
        filter=row.filter,
        source=row.source,
        frame=row.science,
        arc=MovingArc(
            ra=row.ra,
            dec=row.dec,
            mjd=row.mjd_science,
            pa=row.normal_pa,
            pa_err=row.normal_pa_err or 0.0,
            speed=row.speed,
            change=None,
            covariance=_pair_covariance(row, seeing or 0.0),
            length=row.length,
            epochs=(row.mjd_template, row.mjd_science),
        ),
        mjd_last=max(row.mjd_template, row.mjd_science),
        width=row.width,
        seeing=seeing,
        brightness=brightness,
        sense_odds=row.sense_odds,
    )


def _track_covariance(row: TrackRow) -> FloatArray:
    place_speed, place_change = row.place_speed_cov or 0.0, row.place_change_cov or 0.0
    speed_change = row.speed_change_cov or 0.0
    place, speed, change = (
        (err or 0.0) ** 2
        for err in (row.place_err, row.speed_err, row.speed_change_err)
    )
    return np.array(
        [
            [place, place_speed, place_change],
            [place_speed, speed, speed_change],
            [place_change, speed_change, change],
        ]
    )


def _pair_covariance(row: CandidateRow, seeing: float) -> FloatArray:
    """Return the covariance of place and speed from two epochs.

    The place of a Gaussian profile of 1-sigma width s at a significance q is known to
    s / q, and each of the two lobes has 1 / sqrt(2) of the significance of both.  The
    distance moved is the difference of two such places, so the error of the science
    epoch's is also part of the speed's; it cannot be more than its share.
    """
    years = (row.mjd_science - row.mjd_template) / DAYS_PER_YEAR
    speed_err = row.speed_err or 0.0
    sigma = math.hypot(row.width or 0.0, seeing) / FWHM_PER_SIGMA
    place_err = min(
        sigma * math.sqrt(2.0) / row.snr, speed_err * abs(years) / math.sqrt(2.0)
    )
    covariance = np.zeros((3, 3))
    covariance[0, 0], covariance[1, 1] = place_err**2, speed_err**2
    covariance[0, 1] = covariance[1, 0] = place_err**2 / years
    return covariance


def _why_not(row: CandidateRow) -> str:
    if row.ra is None:
        return "its frames have no celestial WCS"
    return "no speed: only one lobe shows"
