"""The commands: ``latelight run`` and ``latelight check``.

Results go to standard output, talk to standard error.  Everything heavy is
imported inside a command, so that ``--help`` is instant.
"""

from __future__ import annotations

import argparse
import logging
import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import latelight
from latelight.errors import LatelightError, ProductError, SettingsError
from latelight.threads import quiet_libraries

if TYPE_CHECKING:
    from latelight.config import NightConfig
    from latelight.night.run import NightResult, Progress
    from latelight.products.rows import CandidateRow, PairRow
    from latelight.records import Source

__all__ = ["main"]

DONE, SOME_FAILED, UNUSABLE, INTERRUPTED = 0, 1, 2, 130

_EXIT_CODES = (
    "exit codes: 0 all done; 1 a pair or frame failed (pairs.ecsv says why); "
    "2 settings, usage or output folder; 130 interrupted"
)


def main(argv: Sequence[str] | None = None) -> int:
    """Run a command and return its exit code.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments; those of the process by default.
    """
    arguments = _parser().parse_args(argv)
    quiet_libraries()
    _talk(arguments.verbose)
    try:
        return int(arguments.command(arguments))
    except SettingsError as error:
        print(error, file=sys.stderr)  # one line a fault, each with its file
        return UNUSABLE
    except ProductError as error:
        _complain(str(error))
        return UNUSABLE
    except LatelightError as error:
        _complain(str(error))
        return SOME_FAILED
    except KeyboardInterrupt:
        _complain("interrupted")
        return INTERRUPTED
    except BrokenPipeError:
        # The reader of our output has gone; keep Python from complaining at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return SOME_FAILED


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="latelight",
        description="Find light echoes in pairs of survey frames.",
        epilog=_EXIT_CODES,
    )
    parser.add_argument(
        "--version", action="version", version=f"latelight {latelight.__version__}"
    )
    commands = parser.add_subparsers(metavar="COMMAND", required=True)
    shared = argparse.ArgumentParser(add_help=False)
    shared.add_argument(
        "settings", type=Path, metavar="NIGHT.toml", help="settings of the night"
    )
    shared.add_argument(
        "--jobs",
        type=_positive,
        default=1,
        metavar="N",
        help="pairs worked on at a time, each in a process (default: 1)",
    )
    how_much = shared.add_mutually_exclusive_group()
    how_much.add_argument(
        "-v",
        "--verbose",
        action="count",
        default=0,
        help="tell more on standard error; twice: times of every stage",
    )
    how_much.add_argument(
        "-q",
        "--quiet",
        action="store_const",
        const=-1,
        dest="verbose",
        help="tell nothing but errors; the closing table stays",
    )
    run = commands.add_parser(
        "run",
        parents=[shared],
        help="take a night of frames to candidates and cutouts",
        epilog=_EXIT_CODES,
    )
    run.add_argument(
        "--output", type=Path, metavar="DIR", help="write here, not where [night] says"
    )
    run.set_defaults(command=_run)
    check = commands.add_parser(
        "check",
        parents=[shared],
        help="read settings and headers, list the pairs, write nothing",
        epilog=_EXIT_CODES,
    )
    check.set_defaults(command=_check)
    return parser


def _positive(text: str) -> int:
    try:
        number = int(text)
    except ValueError:
        number = 0
    if number < 1:
        msg = f"must be a whole number of at least 1, got {text!r}"
        raise argparse.ArgumentTypeError(msg)
    return number


def _talk(verbose: int) -> None:
    """Send the log of this process to standard error, as much as is asked for."""
    logger = logging.getLogger("latelight")
    logger.handlers.clear()
    handler = logging.StreamHandler()
    handler.setFormatter(_Spoken())
    handler.setLevel(
        {0: logging.CRITICAL, 1: logging.INFO}.get(max(verbose, 0), logging.DEBUG)
    )
    logger.addHandler(handler)
    logger.propagate = False
    logger.setLevel(logging.DEBUG)


class _Spoken(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        event: Any = getattr(record, "event", None)
        text = record.getMessage()
        if event is None:
            return text
        if event.seconds is not None:
            text += f" ({event.seconds:.2f} s)"
        return f"{event.pair}: {text}" if event.pair else text


def _complain(message: str) -> None:
    print(f"latelight: {message}", file=sys.stderr)


def _load(path: Path) -> tuple[NightConfig, tuple[Source, ...]]:
    """Read the settings and the sources they name."""
    from latelight.config import load_config
    from latelight.origin.sources import gather_sources

    config = load_config(path)
    table = config.origin.source_table
    try:
        sources = gather_sources(config.sources, table=Path(table) if table else None)
    except SettingsError as error:
        raise SettingsError(error.path or path, error.faults) from None
    return config, sources


# --- check -------------------------------------------------------------------


def _check(arguments: argparse.Namespace) -> int:
    config, sources = _load(arguments.settings)
    from latelight.night.scan import plan_night

    night = _in_settings(
        arguments.settings, lambda: plan_night(config, jobs=arguments.jobs)
    )
    plan = night.plan
    _print_table(
        ("field", "filter", "template", "science", "days"),
        [
            (
                pair.science.field or "-",
                pair.science.filter or "-",
                pair.template.name,
                pair.science.name,
                f"{pair.science.mjd - pair.template.mjd:+.2f}",
            )
            for pair in plan.pairs
        ],
    )
    for remark in plan.remarks:
        print(f"left out  {remark}")
    for header in night.headers if arguments.verbose > 0 else ():
        for note in header.notes:
            print(f"note      {header.name}: {note}")
    for row in plan.failed:
        print(f"unusable  {row.pair}: {row.reason}")
    print(
        f"{_count(len(night.headers), 'frame')} in {_count(len(plan.pairs), 'pair')}, "
        f"{len(plan.failed)} unusable; {_count(len(sources), 'source')} listed"
    )
    return SOME_FAILED if plan.failed else DONE


# --- run ---------------------------------------------------------------------


def _run(arguments: argparse.Namespace) -> int:
    config, sources = _load(arguments.settings)
    if arguments.output is not None:
        night = config.night.model_copy(update={"output": str(arguments.output)})
        config = config.model_copy(update={"night": night})
    from latelight.night.run import run_night

    result: NightResult = _in_settings(
        arguments.settings,
        lambda: run_night(
            config, sources, jobs=arguments.jobs, progress=_progress(arguments.verbose)
        ),
    )
    _print_result(result, Path(config.night.output))
    if result.interrupted:
        _complain("interrupted; the pairs that were finished are written")
        return INTERRUPTED
    return SOME_FAILED if result.n_failed else DONE


def _in_settings(path: Path, work: Any) -> Any:
    """Name the settings file in faults that are found after it was read."""
    try:
        return work()
    except SettingsError as error:
        raise SettingsError(error.path or path, error.faults) from None


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


class _Lines(_Silence):
    """Writes one plain line a pair, for logs of scheduled runs."""

    def begin(self, total: int) -> None:
        self._total, self._done = total, 0

    def step(self, row: PairRow) -> None:
        self._done += 1
        where = f"[{self._done}/{self._total}] {row.pair}"
        if row.status == "done":
            text = f"{_count(row.n_candidates or 0, 'candidate')}, {row.seconds:.1f} s"
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
    """Print the closing table: candidates best first, what failed, the totals."""
    _print_table(
        ("candidate", "position", "S/N", "arcsec/yr", "towards", "source", "score"),
        [_candidate_cells(row) for row in result.candidates],
    )
    for row in result.pairs:
        if row.status == "failed":
            print(f"failed  {row.pair}: {row.reason}")
    done = len(result.pairs) - result.n_failed
    print(
        f"{_count(done, 'pair')} done, {result.n_failed} failed; "
        f"{_count(len(result.candidates), 'candidate')} in {folder}"
    )


def _candidate_cells(row: CandidateRow) -> tuple[str, ...]:
    if row.ra is None or row.dec is None:
        position = f"x {row.x:.1f} y {row.y:.1f}"
    else:
        position = f"{row.ra:.5f} {row.dec:+.5f}"
    speed = "-"
    if row.speed is not None and row.speed_err is not None:
        speed = f"{row.speed:.1f} ± {row.speed_err:.1f}"
    towards = "-"
    if row.normal_pa is not None and row.normal_pa_err is not None:
        towards = f"{row.normal_pa:.1f}° ± {row.normal_pa_err:.1f}°"
    score = "-" if row.score is None else f"{row.score:+.1f}"
    snr = f"{row.snr:.1f}"
    return row.id, position, snr, speed, towards, row.source or "-", score


def _print_table(heads: tuple[str, ...], rows: list[tuple[str, ...]]) -> None:
    """Print aligned columns, and a blank line; nothing when there are no rows."""
    if not rows:
        return
    widths = [max(map(len, column)) for column in zip(heads, *rows, strict=True)]
    for cells in (heads, *rows):
        padded = (c.ljust(w) for c, w in zip(cells, widths, strict=True))
        print("  ".join(padded).rstrip())
    print()


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
