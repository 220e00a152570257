"""The rows of the tables of common origins, as frozen records.

As in :mod:`latelight.products.rows`: a value that is not known is None here and
masked in the table, never NaN; text is never missing.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["OriginArcRow", "OriginRow"]


@dataclass(frozen=True, slots=True, kw_only=True)
class OriginRow:
    """One common origin of many arcs.

    Attributes
    ----------
    ra, dec : float
        Middle of the region where it lies, degrees, ICRS.
    err_major, err_minor : float or None
        Semi-axes of the error ellipse, 1 sigma, degrees; the major one is None on a
        ridge, both at the place of a listed source.
    err_pa : float or None
        Position angle of the major axis, or of the ridge, 0-180 degrees.
    n_arcs : int
        Arcs that more likely come from it than not.
    score : float
        log10 likelihood ratio of all arcs with it and without it.
    source : str
        Listed source that fits, or empty.
    name : str
        ``"O1"``, ``"O2"``, ... in order of the table.
    kind : str
        ``"peak"``, ``"ridge"`` or ``"listed"``.
    chance : float
        Probability that arcs without it score as high by accident.
    scatter : float
        Angle from the away direction within which half of its arcs are thought to
        move, degrees.
    away_rms : float or None
        RMS of motion minus away direction of its arcs, degrees.
    near, far : float or None
        Distances from its arcs between which it lies, degrees; of a ridge only.
    source_score : float or None
        Sum of the scores of its arcs for ``source``, speeds included, each times the
        probability that it belongs.
    source_separation : float or None
        From (ra, dec) to the listed source, degrees.
    implied_age, implied_age_low, implied_age_high : float or None
        Age of the source from place and motion of its arcs, and the ends of the 68 %
        interval, Julian years; where its distance is known and its age is not.
    remark : str
        What to know before believing it.
    """

    ra: float
    dec: float
    err_major: float | None
    err_minor: float | None
    err_pa: float | None
    n_arcs: int
    score: float
    source: str
    name: str
    kind: str
    chance: float
    scatter: float
    away_rms: float | None
    near: float | None
    far: float | None
    source_score: float | None
    source_separation: float | None
    implied_age: float | None
    implied_age_low: float | None
    implied_age_high: float | None
    remark: str


@dataclass(frozen=True, slots=True, kw_only=True)
class OriginArcRow:
    """One arc, and the origin it supports.

    Attributes
    ----------
    id : str
        Designation of the track or candidate that stands for it.
    kind : str
        ``"track"`` or ``"candidate"``.
    output : str
        Folder of its night.
    field : str
        Field word.
    mjd : float
        Epoch of the place, MJD (UTC).
    ra, dec : float
        Degrees, ICRS.
    normal_pa, normal_pa_err : float
        Direction of the motion and 1 sigma, degrees.
    speed, speed_err : float or None
        arcsec per Julian year.
    sense_odds : float or None
        log10 of the odds that the sense of the motion is right.
    weight : float
        Share of an independent arc that it counts as.
    origin : str
        Name of the origin it most likely belongs to, or empty.
    membership : float or None
        Probability that it belongs there; None without an origin.
    away_angle : float or None
        Motion minus the direction away from that origin, +-180 degrees.
    separation : float or None
        From that origin, degrees.
    same : str
        Ids of other rows of the tables that are the same arc, separated by blanks.
    """

    id: str
    kind: str
    output: str
    field: str
    mjd: float
    ra: float
    dec: float
    normal_pa: float
    normal_pa_err: float
    speed: float | None
    speed_err: float | None
    sense_odds: float | None
    weight: float
    origin: str
    membership: float | None
    away_angle: float | None
    separation: float | None
    same: str
