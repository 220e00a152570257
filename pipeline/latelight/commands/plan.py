"""``latelight plan``: what fields would show, and where echoes lie, at a date."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from latelight.commands.forecast import read_date
from latelight.commands.shared import (
    DONE,
    EXIT_CODES,
    add_loudness,
    add_settings,
    count,
    in_settings,
    load_settings,
    print_table,
)

if TYPE_CHECKING:
    from latelight.products.plan_rows import PlanRingRow, PlanRow
    from latelight.reports.plan import PlanResult

__all__ = ["add_to"]


def add_to(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser."""
    parser = commands.add_parser(
        "plan",
        help="say what fields would show of the listed sources, before any frame",
        epilog=EXIT_CODES,
    )
    add_settings(parser)
    parser.add_argument(
        "--at",
        type=read_date,
        metavar="DATE",
        help="ISO date in UTC or MJD, instead of the settings' plan.date",
    )
    parser.add_argument(
        "--output", type=Path, metavar="DIR", help="write here, not in OUTPUT/plan"
    )
    add_loudness(parser)
    parser.set_defaults(command=_plan)


def _plan(arguments: argparse.Namespace) -> int:
    config, sources = load_settings(arguments.settings)
    from latelight.reports.plan import plan_fields

    result: PlanResult = in_settings(
        arguments.settings,
        lambda: plan_fields(config, sources, mjd=arguments.at, folder=arguments.output),
    )
    print_table(
        ("source", "field", "away", "depth pc", "turned", "arcsec/yr", "days", "mag"),
        [_field_cells(row) for row in result.fields],
    )
    print_table(
        ("source", "layer", "depth pc", "radius", "centre", "area deg2"),
        [_ring_cells(row) for row in result.rings],
    )
    for row in result.fields:
        if row.remark:
            print(f"{row.source}, {row.field}: {row.remark}")
    for ring in result.rings:
        if ring.remark:
            print(f"{ring.source}, {ring.layer}: {ring.remark}")
    print(f"{count(len(result.files), 'file')} in {result.folder}")
    return DONE


def _field_cells(row: PlanRow) -> tuple[str, ...]:
    return (
        row.source,
        row.field,
        f"{row.separation:.2f}°",
        _with_error(row.dust_depth, row.dust_depth_err, 1),
        _with_error(row.scattering_angle, None, 0, "°"),
        _with_error(row.flat_speed, row.flat_speed_err, 2),
        _with_error(row.baseline, row.baseline_err, 0),
        _with_error(row.surface_brightness, row.surface_brightness_err, 1),
    )


def _ring_cells(row: PlanRingRow) -> tuple[str, ...]:
    centre = "-"
    if row.ra is not None and row.dec is not None:
        centre = f"{row.ra:.3f} {row.dec:+.3f}"
    return (
        row.source,
        row.layer,
        _with_error(row.dust_depth, None, 1),
        _with_error(row.radius, row.radius_err, 3, "°"),
        centre,
        _with_error(row.area, None, 3),
    )


def _with_error(
    value: float | None, err: float | None, decimals: int, unit: str = ""
) -> str:
    if value is None:
        return "-"
    text = f"{value:.{decimals}f}{unit}"
    return text if err is None else f"{text} ± {err:.{decimals}f}{unit}"
