"""Remake the sample night, or write one random pair to try things on.

::

    python -m latelight.simulation sample_frames
    python -m latelight.simulation --pair 7 --kind nuisances --size 1024 FOLDER
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from latelight.errors import ProductError
from latelight.simulation.sample import write_sample
from latelight.simulation.scenes import random_pair
from latelight.simulation.tables import echo_rows, source_rows, write_table


def main(arguments: list[str] | None = None) -> int:
    """Run the command; return 0, or 2 when it cannot be done."""
    options = _parser().parse_args(arguments)
    try:
        if options.pair is None:
            written = write_sample(options.folder)
        else:
            written = _write_pair(options)
    except (ProductError, ValueError) as error:
        sys.stderr.write(f"{error}\n")
        return 2
    for path in written:
        sys.stdout.write(f"{path}  {path.stat().st_size / 1e6:.2f} MB\n")
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m latelight.simulation",
        description="Remake the sample night in FOLDER, or write one random pair.",
    )
    parser.add_argument("folder", metavar="FOLDER", type=Path)
    parser.add_argument("--pair", metavar="SEED", type=int, help="one random pair")
    parser.add_argument("--kind", choices=("echoes", "nuisances"), default="echoes")
    parser.add_argument("--size", type=int, default=1024, help="pixels a side")
    parser.add_argument("--stars", type=int, help="stars of 13 to 23 mag on a frame")
    parser.add_argument(
        "--science-sharper", action="store_true", help="better seeing in the science"
    )
    parser.add_argument(
        "--template-later", action="store_true", help="template taken after the science"
    )
    return parser


def _write_pair(options: argparse.Namespace) -> list[Path]:
    pair = random_pair(
        options.pair,
        kind=options.kind,
        size=options.size,
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


if __name__ == "__main__":
    sys.exit(main())
