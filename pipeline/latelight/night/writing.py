"""Name what a night found, and write its tables, cutouts and pictures."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from latelight.config import NightConfig
from latelight.night.chain import Outcome
from latelight.night.tracking import SeriesOutcome, TrackFinding
from latelight.products.atomic import write_bytes
from latelight.products.cutouts import Cutout, write_cutout
from latelight.products.designation import (
    pixel_designation,
    sky_designation,
    unique_ids,
)
from latelight.products.picture import write_picture
from latelight.products.rows import ArcRow, CandidateRow, PairRow
from latelight.products.series_rows import SERIES_COLUMNS, SeriesRow
from latelight.products.tables import make_table, to_ecsv, write_tables
from latelight.products.track_cutouts import write_track_cutout
from latelight.products.track_picture import write_track_picture
from latelight.products.track_rows import InterpretationRow, TrackRow
from latelight.products.track_tables import write_track_tables

__all__ = ["Named", "name_all", "write_products"]


@dataclass(frozen=True, slots=True)
class Named:
    """All that a night found, with its names.

    Attributes
    ----------
    arcs : tuple of ArcRow
        Every ridge.
    cutouts : tuple of Cutout
        The candidates, with their rows.
    tracks : tuple of TrackFinding
        The tracks, with their rows.
    interpretations : tuple of InterpretationRow
        Of candidates and tracks.
    """

    arcs: tuple[ArcRow, ...]
    cutouts: tuple[Cutout, ...]
    tracks: tuple[TrackFinding, ...]
    interpretations: tuple[InterpretationRow, ...]

    @property
    def candidates(self) -> tuple[CandidateRow, ...]:
        """The candidates' rows, best first."""
        rows = [cutout.row for cutout in self.cutouts]
        return tuple(sorted(rows, key=lambda row: (-row.snr, row.id)))

    @property
    def track_rows(self) -> tuple[TrackRow, ...]:
        """The rows of the tracks worth a look, best first."""
        rows = [t.row for t in self.tracks if t.row.verdict == "track"]
        return tuple(sorted(rows, key=lambda row: (-row.snr, row.id)))


def name_all(outcomes: Sequence[Outcome], series: Sequence[SeriesOutcome]) -> Named:
    """Name candidates and tracks over the whole night, and tie them together."""
    found = [
        (number, candidate)
        for number, outcome in enumerate(outcomes)
        for candidate in outcome.findings.candidates
    ]
    rows = [candidate.cutout.row for _, candidate in found]
    names = unique_ids(
        [_designation(row.pair, row.ra, row.dec, row.x, row.y) for row in rows],
        keys=[(row.pair, row.x, row.y) for row in rows],
    )
    of_arc = {
        (outcomes[number].row.pair, candidate.arc): name
        for (number, candidate), name in zip(found, names, strict=True)
    }
    tracks, track_of = _name_tracks(series, of_arc)
    arcs = [list(outcome.findings.arcs) for outcome in outcomes]
    cutouts: list[Cutout] = []
    meanings: list[InterpretationRow] = []
    for (number, candidate), row, name in zip(found, rows, names, strict=True):
        arc = arcs[number][candidate.arc]
        arcs[number][candidate.arc] = replace(arc, candidate=name)
        row = replace(row, id=name, track=track_of.get(name, ""))
        cutouts.append(replace(candidate.cutout, row=row))
        meanings += [replace(m, id=name) for m in candidate.interpretations]
    for track in tracks:
        meanings += track.interpretations
    return Named(
        tuple(arc for of_pair in arcs for arc in of_pair),
        tuple(cutouts),
        tuple(tracks),
        tuple(meanings),
    )


def _name_tracks(
    series: Sequence[SeriesOutcome], of_arc: dict[tuple[str, int], str]
) -> tuple[list[TrackFinding], dict[str, str]]:
    """Return the tracks with their names, and the track of each candidate on one."""
    found = [track for outcome in series for track in outcome.tracks]
    names = unique_ids(
        [
            # A track and a candidate may begin at one place.
            f"{_designation(t.row.grid, t.row.ra, t.row.dec, t.row.x, t.row.y)}_track"
            for t in found
        ],
        keys=[(t.row.grid, t.row.x, t.row.y, t.row.normal_angle) for t in found],
    )
    named: list[TrackFinding] = []
    track_of: dict[str, str] = {}
    for track, name in zip(found, names, strict=True):
        on_it = sorted(of_arc[arc] for arc in track.arcs if arc in of_arc)
        if track.row.verdict == "track":
            track_of.update(dict.fromkeys(on_it, name))
        row = replace(track.row, id=name, candidates=" ".join(on_it))
        named.append(track.named(row))
    return named, track_of


def _designation(
    frame: str, ra: float | None, dec: float | None, x: float, y: float
) -> str:
    if ra is None or dec is None:
        return pixel_designation(frame, x, y)
    return sky_designation(ra, dec)


def write_products(
    folder: Path,
    named: Named,
    *,
    outcomes: Sequence[Outcome],
    pairs: Sequence[PairRow],
    series: Sequence[SeriesRow],
    config: NightConfig,
) -> list[Path]:
    """Write everything that needs the whole night; return the files.

    Raises
    ------
    ProductError
        If a file cannot be written.
    """
    # One after the other: a FITS file turns the bytes of its arrays round, where they
    # stand, while it is written.
    written = [
        *_write_images(folder, named),
        *_write_pictures(folder, named, config),
    ]
    written += write_tables(
        folder,
        candidates=named.candidates,
        arcs=named.arcs,
        pairs=pairs,
        residuals=[r for outcome in outcomes for r in outcome.findings.residuals],
    )
    written += write_track_tables(
        folder,
        tracks=[track.row for track in named.tracks],
        points=[point for track in named.tracks for point in track.points],
        interpretations=named.interpretations,
    )
    ordered = sorted(series, key=lambda row: row.grid)
    table = folder / "series.ecsv"
    write_bytes(table, to_ecsv(make_table("series", ordered, SERIES_COLUMNS)))
    return [*written, table]


def _write_images(folder: Path, named: Named) -> list[Path]:
    """Write the FITS files of the cutouts."""
    written = []
    for cutout in named.cutouts:
        written.append(_file(folder, cutout.row.id, "fits"))
        write_cutout(written[-1], cutout)
    for track in named.tracks:
        if track.cutout is not None:
            written.append(_file(folder, track.row.id, "fits"))
            write_track_cutout(written[-1], track.cutout)
    return written


def _write_pictures(folder: Path, named: Named, config: NightConfig) -> list[Path]:
    """Draw the pictures of the cutouts."""
    written = []
    for cutout in named.cutouts:
        written.append(_file(folder, cutout.row.id, "png"))
        write_picture(written[-1], cutout, settings=config.products)
    for track in named.tracks:
        if track.cutout is not None:
            written.append(_file(folder, track.row.id, "png"))
            write_track_picture(written[-1], track.cutout, settings=config.products)
    return written


def _file(folder: Path, name: str, kind: str) -> Path:
    # A name may hold dots: with_suffix would cut them off.
    return folder / "cutouts" / f"{name}.{kind}"
