"""``latelight origins``: where the arcs of one or many nights came from."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from latelight.commands.shared import (
    DONE,
    EXIT_CODES,
    add_loudness,
    complain,
    count,
    load_settings,
    print_table,
)

if TYPE_CHECKING:
    from latelight.origin.settings import OriginSettings
    from latelight.products.origin_rows import OriginRow
    from latelight.records import Source
    from latelight.reports.origins import OriginsResult

__all__ = ["add_to"]


def add_to(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser."""
    parser = commands.add_parser(
        "origins",
        help="trace the arcs of nights back to common origins, listed or not",
        epilog=EXIT_CODES,
    )
    parser.add_argument(
        "nights",
        type=Path,
        nargs="+",
        metavar="OUTPUT",
        help="output folders of finished nights",
    )
    parser.add_argument(
        "--output",
        type=Path,
        metavar="DIR",
        help="write here, not into the first OUTPUT",
    )
    parser.add_argument(
        "--settings",
        type=Path,
        metavar="NIGHT.toml",
        help="take [origin] and [[sources]] from here, not from OUTPUT/run.json",
    )
    add_loudness(parser)
    parser.set_defaults(command=_origins)


def _origins(arguments: argparse.Namespace) -> int:
    settings: OriginSettings | None = None
    sources: tuple[Source, ...] = ()
    if arguments.settings is not None:
        config, sources = load_settings(arguments.settings)
        settings = config.origin
    from latelight.reports.origins import trace_origins

    result: OriginsResult = trace_origins(
        arguments.nights,
        folder=arguments.output,
        settings=settings,
        sources=sources,
    )
    _print_result(result)
    if arguments.verbose > 0:
        for name, why in result.left_out:
            complain(f"left out {name}: {why}")
    return DONE


def _print_result(result: OriginsResult) -> None:
    print_table(
        ("origin", "position", "95 % ellipse", "arcs", "score", "chance", "source"),
        [_cells(row) for row in result.origins],
    )
    for row in result.origins:
        if row.implied_age is not None:
            print(
                f"{row.name}: age of {row.source} {row.implied_age:.0f} yr "
                f"({row.implied_age_low:.0f} to {row.implied_age_high:.0f})"
            )
        if row.remark:
            print(f"{row.name}: {row.remark}")
    if not result.origins:
        print(_none_claimed(result))
    supporting = sum(bool(arc.origin) for arc in result.arcs)
    print(
        f"{count(len(result.origins), 'origin')} of {supporting} of "
        f"{count(len(result.arcs), 'arc')} ({count(result.n_rows, 'row')} read, "
        f"{len(result.left_out)} left out) in {result.files[0].parent}"
    )


def _none_claimed(result: OriginsResult) -> str:
    if len(result.arcs) < 2:
        return "no common origin: it takes at least two moving arcs"
    if result.rest is None:
        return "no common origin: no two arcs point back to one place"
    from latelight.origin.joint_region import Ridge

    region = result.rest.region
    if isinstance(region, Ridge):
        where = (
            "arcs all but parallel, so the best is no place but the great circle "
            f"through {region.from_ra:.4f} {region.from_dec:+.4f} towards position "
            f"angle {region.pa:.0f}°, {region.near:.2g}° away or more, whose score of"
        )
    else:
        where = f"at the best place, {region.ra:.4f} {region.dec:+.4f}, a score of"
    return (
        f"no common origin claimed: {where} {result.rest.score:.1f} is reached by "
        f"random directions with a chance of {result.rest.chance:.2g}"
    )


def _cells(row: OriginRow) -> tuple[str, ...]:
    if row.err_major is not None and row.err_minor is not None:
        sides = 2.448 * row.err_major, 2.448 * row.err_minor
        ellipse = f"{sides[0]:.3f}° x {sides[1]:.3f}° at {row.err_pa:.0f}°"
    else:
        ellipse = {"ridge": "ridge, see below"}.get(row.kind, "listed place")
    return (
        row.name,
        f"{row.ra:.4f} {row.dec:+.4f}",
        ellipse,
        f"{row.n_arcs}",
        f"{row.score:+.1f}",
        f"{row.chance:.1g}",
        row.source or "-",
    )
