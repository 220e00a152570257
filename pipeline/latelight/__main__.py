"""Run the command line with ``python -m latelight``."""

from latelight.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
