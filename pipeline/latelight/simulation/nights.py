"""Write simulated fields as a night that is ready to be run."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from latelight.errors import ProductError
from latelight.records import Source
from latelight.simulation.fields import SimulatedField
from latelight.simulation.tables import (
    frame_row,
    nuisance_rows,
    source_rows,
    track_point_rows,
    track_rows,
    write_table,
)

__all__ = ["SETTINGS", "write_night"]

SETTINGS = """\
[night]
frames = ["frames/*.fits"]
output = "night"

[origin]
source_table = "sources.ecsv"
"""


def write_night(
    folder: Path,
    fields: Sequence[SimulatedField],
    *,
    sources: Sequence[Source],
    events: Sequence[Source] = (),
) -> list[Path]:
    """Write frames, source list, settings and truth of one or more fields.

    Parameters
    ----------
    folder : Path
        Made if need be; files of the same names are replaced.  ``frames/`` takes the
        frames, ``FIELD_1.fits`` and so on; ``night.toml`` names them and
        ``sources.ecsv``, its results go to ``night/``; ``truth_*.ecsv`` hold what is
        exactly known, as far as there is any of it.
    fields : sequence of SimulatedField
        The fields, of different names.
    sources : sequence of Source
        The list an astronomer would use, at least one.
    events : sequence of Source
        What truly lit the echoes, for ``truth_events.ecsv``.

    Returns
    -------
    list of Path
        The files written.

    Raises
    ------
    ProductError
        If a file cannot be written.
    """
    folder = Path(folder)
    written: list[Path] = []
    frames, nuisances, tracks, points = [], [], [], []
    for field in fields:
        paths = field.write(folder / "frames", stem=field.name.lower())
        written += paths
        names = [path.stem for path in paths]
        truth = field.truth
        for name, mjd, frame in zip(names, truth.mjds, truth.frames, strict=True):
            frames.append(frame_row(frame, mjd=mjd, field=field.name, frame=name))
            nuisances += nuisance_rows(frame, frame=name)
        tracks += track_rows(truth, field=field.name, grid=names[truth.grid])
        points += track_point_rows(truth, names, field=field.name)
    tables = {
        "sources": source_rows(sources),
        "truth_events": source_rows(events),
        "truth_frames": frames,
        "truth_nuisances": nuisances,
        "truth_tracks": tracks,
        "truth_track_points": points,
    }
    for name, rows in tables.items():
        if rows:
            written.append(write_table(folder / f"{name}.ecsv", rows))
    return [*written, _write_settings(folder / "night.toml")]


def _write_settings(path: Path) -> Path:
    try:
        path.write_text(SETTINGS, encoding="utf-8")
    except OSError as error:
        reason = f"{error.strerror or error}; choose a folder that can be written"
        raise ProductError(path, reason) from None
    return path
