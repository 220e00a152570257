"""The program ``latelight``: its commands, its exit codes, its talk.

Results go to standard output, talk to standard error.  Everything heavy is
imported inside a command, so that ``--help`` is instant.
"""

from __future__ import annotations

import argparse
import logging
import os
import sys
from collections.abc import Sequence
from typing import Any

import latelight
from latelight.commands import check, forecast, origins, plan, run
from latelight.commands.shared import (
    EXIT_CODES,
    INTERRUPTED,
    SOME_FAILED,
    UNUSABLE,
    complain,
)
from latelight.errors import LatelightError, ProductError, SettingsError
from latelight.threads import quiet_libraries

__all__ = ["main"]

_COMMANDS = (run, check, origins, forecast, plan)


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
        complain(str(error))
        return UNUSABLE
    except LatelightError as error:
        complain(str(error))
        return SOME_FAILED
    except KeyboardInterrupt:
        complain("interrupted")
        return INTERRUPTED
    except BrokenPipeError:
        # The reader of our output has gone; keep Python from complaining at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return SOME_FAILED


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="latelight",
        description="Find light echoes in survey frames, and where they came from.",
        epilog=EXIT_CODES,
    )
    parser.add_argument(
        "--version", action="version", version=f"latelight {latelight.__version__}"
    )
    commands = parser.add_subparsers(metavar="COMMAND", required=True)
    for command in _COMMANDS:
        command.add_to(commands)
    return parser


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
