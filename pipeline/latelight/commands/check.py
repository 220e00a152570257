"""``latelight check``: what a night would do, without touching anything."""

from __future__ import annotations

import argparse

from latelight.commands.shared import (
    DONE,
    EXIT_CODES,
    SOME_FAILED,
    add_loudness,
    add_settings,
    count,
    in_settings,
    load_settings,
    positive,
    print_table,
)

__all__ = ["add_to"]


def add_to(commands: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser."""
    parser = commands.add_parser(
        "check",
        help="read settings and headers, list the pairs, write nothing",
        epilog=EXIT_CODES,
    )
    add_settings(parser)
    parser.add_argument(
        "--jobs",
        type=positive,
        default=1,
        metavar="N",
        help="frames measured at a time, each in a process (default: 1)",
    )
    add_loudness(parser)
    parser.set_defaults(command=_check)


def _check(arguments: argparse.Namespace) -> int:
    config, sources = load_settings(arguments.settings)
    from latelight.night.scan import plan_night

    night = in_settings(
        arguments.settings, lambda: plan_night(config, jobs=arguments.jobs)
    )
    plan = night.plan
    comparisons = plan.comparisons
    print_table(
        ("field", "filter", "template", "science", "days"),
        [
            (
                pair.science.field or "-",
                pair.science.filter or "-",
                pair.template.name,
                pair.science.name,
                f"{pair.science.mjd - pair.template.mjd:+.2f}",
            )
            for pair in comparisons
        ],
    )
    for remark in plan.remarks:
        print(f"remark    {remark}")
    for header in night.headers if arguments.verbose > 0 else ():
        for note in header.notes:
            print(f"note      {header.name}: {note}")
    for row in plan.failed:
        print(f"unusable  {row.pair}: {row.reason}")
    print(
        f"{count(len(night.headers), 'frame')} in {count(len(comparisons), 'pair')}, "
        f"{len(plan.failed)} unusable; {count(len(sources), 'source')} listed"
    )
    return SOME_FAILED if plan.failed else DONE
