"""``latelight forecast``: where the arcs of a night will be at a date."""

from __future__ import annotations

import argparse
import math
from pathlib import Path
from typing import TYPE_CHECKING

from latelight.commands.shared import (
    DONE,
    EXIT_CODES,
    add_loudness,
    complain,
    count,
    print_table,
)

if TYPE_CHECKING:
    from latelight.products.forecast_rows import ForecastRow
    from latelight.reports.forecast import ForecastResult

__all__ = ["add_to", "read_date"]


def add_to(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser."""
    parser = commands.add_parser(
        "forecast",
        help="say where arcs will be at a date, and draw finder charts",
        epilog=EXIT_CODES,
    )
    parser.add_argument(
        "night", type=Path, metavar="OUTPUT", help="output folder of a finished night"
    )
    parser.add_argument(
        "--at",
        type=read_date,
        required=True,
        metavar="DATE",
        help="ISO date and time in UTC (2027-03-14T05:30) or MJD",
    )
    parser.add_argument(
        "--id",
        nargs="+",
        default=(),
        metavar="ID",
        help="tracks and candidates to forecast (default: all that move)",
    )
    parser.add_argument(
        "--output",
        type=Path,
        metavar="DIR",
        help="write forecast.ecsv and forecast/ here, not in OUTPUT",
    )
    for name, default in (("width", 1.0), ("length", 30.0)):
        parser.add_argument(
            f"--slit-{name}",
            type=_arcsec,
            default=default,
            metavar="ARCSEC",
            help=f"{name} of the slit (default: {default:g})",
        )
    add_loudness(parser)
    parser.set_defaults(command=_forecast)


def _forecast(arguments: argparse.Namespace) -> int:
    from latelight.reports.forecast import forecast_arcs

    result: ForecastResult = forecast_arcs(
        arguments.night,
        mjd=arguments.at,
        ids=arguments.id,
        folder=arguments.output,
        slit_width=arguments.slit_width,
        slit_length=arguments.slit_length,
    )
    print_table(
        (
            "arc",
            "slit centre",
            "along",
            "moved",
            "arcsec/yr",
            "mag/arcsec2",
            "in field",
        ),
        [_cells(row) for row in result.rows],
    )
    for row in result.rows:
        if row.remark:
            print(f"{row.id}: {row.remark}")
    if arguments.verbose >= 0:
        for name, why in result.no_chart.items():
            complain(f"no chart of {name}: {why}")
    if arguments.verbose > 0:
        for name, why in result.left_out.items():
            complain(f"left out {name}: {why}")
    print(
        f"{count(len(result.rows), 'arc')} in {result.table}, "
        f"{count(len(result.charts), 'chart')}, {len(result.left_out)} left out"
    )
    return DONE


def _cells(row: ForecastRow) -> tuple[str, ...]:
    from latelight.reports.finder import sexagesimal

    brightness = "-"
    if row.surface_brightness is not None:
        brightness = f"{row.surface_brightness:.1f} ± {row.surface_brightness_err:.1f}"
    return (
        row.id,
        " ".join(sexagesimal(row.ra, row.dec)),
        f"{row.slit_pa_along:.1f}°",
        f'{row.offset:.1f}" ± {row.offset_err:.1f}"',
        f"{row.speed:.1f} ± {row.speed_err:.1f}",
        brightness,
        row.in_field,
    )


def read_date(text: str) -> float:
    """Read a date of the command line as MJD."""
    from latelight.reports.dates import mjd_of

    try:
        return mjd_of(text)
    except ValueError as error:
        raise argparse.ArgumentTypeError(str(error)) from None


def _arcsec(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = 0.0
    if not (value > 0.0 and math.isfinite(value)):
        msg = f"must be a number of arcsec above 0, got {text!r}"
        raise argparse.ArgumentTypeError(msg)
    return value
