"""The row and the columns of the table of series: the epochs of one field together."""

from __future__ import annotations

from dataclasses import dataclass

from latelight.products.column import integer, real, text

__all__ = ["SERIES_COLUMNS", "SeriesRow"]


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesRow:
    """All epochs of one field, filter and chip: what was done, and how it went.

    Attributes
    ----------
    grid : str
        Name of the frame whose pixels they share.
    field, filter : str
        Words of the frames.
    n_epochs : int
        Epochs in it.
    mjd_first, mjd_last : float
        MJD (UTC).
    status : str
        ``"done"`` or ``"failed"``.
    reason : str
        Why it failed, or empty.
    n_from_pairs, n_from_stack : int or None
        First guesses: arcs of pairs, and ridges of the search along velocities.
    n_tracks : int or None
        Tracks worth a look.
    seconds, peak_memory : float or None
        Time, and peak memory of the process in MB (1e6 bytes).
    """

    grid: str
    field: str
    filter: str
    n_epochs: int
    mjd_first: float
    mjd_last: float
    status: str
    reason: str
    n_from_pairs: int | None = None
    n_from_stack: int | None = None
    n_tracks: int | None = None
    seconds: float | None = None
    peak_memory: float | None = None


SERIES_COLUMNS = (
    text("grid", "meta.id;meta.main", "Name of the frame whose pixels are shared."),
    text("field", "meta.id;obs.field", "Field word of the frames."),
    text("filter", "meta.id;instr.filter", "Filter word of the frames."),
    integer("n_epochs", "meta.number;time.epoch", "Epochs in the series."),
    real("mjd_first", ".6f", "d", "time.start", "First epoch, MJD (UTC)."),
    real("mjd_last", ".6f", "d", "time.end", "Last epoch, MJD (UTC)."),
    text("status", "meta.code.status", "done or failed."),
    text("reason", "meta.note", "Why it failed; empty when it did not."),
    integer("n_from_pairs", "meta.number", "Arcs of single pairs that were followed."),
    integer(
        "n_from_stack", "meta.number", "Ridges found by stacking along velocities."
    ),
    integer("n_tracks", "meta.number", "Tracks worth a look."),
    real("seconds", ".2f", "s", "time.duration;meta.software", "Wall-clock time."),
    real(
        "peak_memory",
        ".1f",
        "Mbyte",
        "phys.size;meta.software",
        "Peak resident memory of the process so far.",
    ),
)
