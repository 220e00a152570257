"""Remake the sample night, or write a random pair, field or sky to try things on.

::

    python -m latelight.simulation sample_frames
    python -m latelight.simulation --pair 7 --kind nuisances --size 1024 FOLDER
    python -m latelight.simulation --field 7 --epochs 5 FOLDER
    python -m latelight.simulation --sky 7 --events two FOLDER
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path
from typing import get_args

from latelight.errors import ProductError
from latelight.simulation.backdrop import Kind
from latelight.simulation.fields import random_field
from latelight.simulation.nights import write_night
from latelight.simulation.sample import write_sample
from latelight.simulation.scenes import random_pair
from latelight.simulation.skies import Events, random_sky
from latelight.simulation.tables import echo_rows, source_rows, write_table


def main(arguments: list[str] | None = None) -> int:
    """Run the command; return 0, or 2 when it cannot be done."""
    options = _parser().parse_args(arguments)
    try:
        written = _write(options)
    except (ProductError, ValueError) as error:
        sys.stderr.write(f"{error}\n")
        return 2
    for path in written:
        sys.stdout.write(f"{path}  {path.stat().st_size / 1e6:.2f} MB\n")
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m latelight.simulation",
        description="Remake the sample night in FOLDER, or write something random.",
    )
    parser.add_argument("folder", metavar="FOLDER", type=Path)
    what = parser.add_mutually_exclusive_group()
    what.add_argument("--pair", metavar="SEED", type=int, help="one random pair")
    what.add_argument(
        "--field", metavar="SEED", type=int, help="several epochs of one random field"
    )
    what.add_argument(
        "--sky", metavar="SEED", type=int, help="six fields around a random event"
    )
    parser.add_argument(
        "--kind", choices=get_args(Kind), default="echoes", help="of a pair or field"
    )
    parser.add_argument(
        "--events", choices=get_args(Events), default="one", help="of a sky"
    )
    parser.add_argument(
        "--list-event", action="store_true", help="a sky's list holds its events too"
    )
    parser.add_argument(
        "--epochs", type=int, help="of a field (5 if not given) or sky (2)"
    )
    parser.add_argument(
        "--size", type=int, help="pixels a side (1024 if not given, 768 for a sky)"
    )
    parser.add_argument("--stars", type=int, help="stars of 13 to 23 mag on a frame")
    parser.add_argument(
        "--brightness",
        type=float,
        nargs=2,
        metavar=("BRIGHT", "FAINT"),
        default=(21.5, 24.5),
        help="range of the echoes of a field or sky, mag/arcsec^2",
    )
    parser.add_argument(
        "--science-sharper", action="store_true", help="a pair's better seeing"
    )
    parser.add_argument(
        "--template-later", action="store_true", help="a pair's later frame"
    )
    return parser


def _write(options: argparse.Namespace) -> list[Path]:
    if options.pair is not None:
        return _write_pair(options)
    if options.field is not None:
        return _write_field(options)
    if options.sky is not None:
        return _write_sky(options)
    return write_sample(options.folder)


def _write_pair(options: argparse.Namespace) -> list[Path]:
    pair = random_pair(
        options.pair,
        kind=options.kind,
        size=options.size or 1024,
        science_sharper=options.science_sharper,
        template_later=options.template_later,
        n_stars=options.stars,
    )
    folder = options.folder
    written = list(pair.write(folder))
    if pair.truth.echoes:
        written.append(write_table(folder / "truth_echoes.ecsv", echo_rows(pair.truth)))
    rows = source_rows(pair.truth.sources)
    written.append(write_table(folder / "sources.ecsv", rows))
    return written


def _write_field(options: argparse.Namespace) -> list[Path]:
    field = random_field(
        options.field,
        epochs=options.epochs or 5,
        size=options.size or 1024,
        kind=options.kind,
        brightness=tuple(options.brightness),
        n_stars=options.stars,
    )
    sources = field.truth.sources
    return write_night(
        options.folder, [field], sources=sources + field.decoys, events=sources
    )


def _write_sky(options: argparse.Namespace) -> list[Path]:
    sky = random_sky(
        options.sky,
        events=options.events,
        epochs=options.epochs or 2,
        size=options.size or 768,
        brightness=tuple(options.brightness),
        n_stars=options.stars,
    )
    return sky.write(options.folder, list_event=options.list_event)


if __name__ == "__main__":
    sys.exit(main())
