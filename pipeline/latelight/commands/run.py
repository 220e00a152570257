"""``latelight run``: a night of frames to candidates, tracks and cutouts."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

from latelight.commands.shared import (
    DONE,
    EXIT_CODES,
    INTERRUPTED,
    SOME_FAILED,
    add_loudness,
    add_settings,
    complain,
    count,
    in_settings,
    load_settings,
    positive,
    print_table,
)

if TYPE_CHECKING:
    from latelight.night.run import NightResult, Progress
    from latelight.products.rows import CandidateRow, PairRow
    from latelight.products.series_rows import SeriesRow
    from latelight.products.track_rows import TrackRow

__all__ = ["add_to"]


def add_to(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser."""
    parser = commands.add_parser(
        "run",
        help="take a night of frames to candidates, tracks and cutouts",
        epilog=EXIT_CODES,
    )
    add_settings(parser)
    parser.add_argument(
        "--jobs",
        type=positive,
        default=1,
        metavar="N",
        help="pairs worked on at a time, each in a process (default: 1)",
    )
    add_loudness(parser)
    parser.add_argument(
        "--output", type=Path, metavar="DIR", help="write here, not where [night] says"
    )
    parser.set_defaults(command=_run)


def _run(arguments: argparse.Namespace) -> int:
    config, sources = load_settings(arguments.settings)
    if arguments.output is not None:
        night = config.night.model_copy(update={"output": str(arguments.output)})
        config = config.model_copy(update={"night": night})
    from latelight.night.run import run_night

    result: NightResult = in_settings(
        arguments.settings,
        lambda: run_night(
            config, sources, jobs=arguments.jobs, progress=_progress(arguments.verbose)
        ),
    )
    _print_result(result, Path(config.night.output))
    if result.interrupted:
        complain("interrupted; the pairs that were finished are written")
        return INTERRUPTED
    return SOME_FAILED if result.n_failed else DONE


def _progress(verbose: int) -> Progress:
    if verbose < 0:
        return _Silence()
    if verbose == 0 and sys.stderr.isatty():
        return _Bar()
    return _Lines()


class _Silence:
    """Shows nothing."""

    def begin(self, total: int) -> None:
        """Show nothing."""

    def step(self, row: PairRow) -> None:
        """Show nothing."""

    def end(self) -> None:
        """Show nothing."""

    def followed(self, row: SeriesRow) -> None:
        """Show nothing."""


class _Lines(_Silence):
    """Writes one plain line a pair, for logs of scheduled runs."""

    def begin(self, total: int) -> None:
        self._total, self._done = total, 0

    def step(self, row: PairRow) -> None:
        self._done += 1
        where = f"[{self._done}/{self._total}] {row.pair}"
        if row.status == "done":
            text = f"{count(row.n_candidates or 0, 'candidate')}, {row.seconds:.1f} s"
        else:
            text = f"failed: {row.reason}"
        print(f"{where}: {text}", file=sys.stderr, flush=True)

    def followed(self, row: SeriesRow) -> None:
        where = f"{row.field or row.grid} {row.filter}".strip()
        if row.status == "done":
            tracks = count(row.n_tracks or 0, "track")
            text = f"{count(row.n_epochs, 'epoch')}, {tracks}, {row.seconds:.1f} s"
        else:
            text = f"failed: {row.reason}"
        print(f"{where}: {text}", file=sys.stderr, flush=True)


class _Bar(_Silence):
    """Draws a bar on a terminal."""

    def begin(self, total: int) -> None:
        from tqdm import tqdm

        self._bar: Any = tqdm(total=total, unit="pair", desc="pairs", leave=False)

    def step(self, row: PairRow) -> None:
        if row.status != "done":
            self._bar.write(f"{row.pair} failed: {row.reason}", file=sys.stderr)
        self._bar.update()

    def end(self) -> None:
        self._bar.close()


def _print_result(result: NightResult, folder: Path) -> None:
    """Print the closing tables, best first, what failed, and the totals."""
    motion = ("arcsec/yr", "towards", "source", "score")
    print_table(
        ("candidate", "position", "S/N", *motion),
        [
            (row.id, _position(row), f"{row.snr:.1f}", *_motion(row))
            for row in result.candidates
        ],
    )
    print_table(
        ("track", "epochs", "position", "S/N", *motion),
        [
            (row.id, str(row.n_epochs), _position(row), f"{row.snr:.1f}", *_motion(row))
            for row in result.tracks
        ],
    )
    for pair in result.pairs:
        if pair.status == "failed":
            print(f"failed  {pair.pair}: {pair.reason}")
    for series in result.series:
        if series.status == "failed":
            print(f"failed  epochs of {series.grid}: {series.reason}")
    print(
        f"{count(result.n_pairs_done, 'pair')} done, {result.n_failed} failed; "
        f"{count(len(result.candidates), 'candidate')} and "
        f"{count(len(result.tracks), 'track')} in {folder}"
    )


def _position(row: CandidateRow | TrackRow) -> str:
    if row.ra is None or row.dec is None:
        return f"x {row.x:.1f} y {row.y:.1f}"
    return f"{row.ra:.5f} {row.dec:+.5f}"


def _motion(row: CandidateRow | TrackRow) -> tuple[str, str, str, str]:
    """Return speed, direction, source and score."""
    speed = towards = "-"
    if row.speed is not None and row.speed_err is not None:
        speed = f"{row.speed:.1f} ± {row.speed_err:.1f}"
    if row.normal_pa is not None and row.normal_pa_err is not None:
        towards = f"{row.normal_pa:.1f}° ± {row.normal_pa_err:.1f}°"
    score = "-" if row.score is None else f"{row.score:+.1f}"
    return speed, towards, row.source or "-", score
