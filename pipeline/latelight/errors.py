"""What can go wrong, and which exception says so.

::

    LatelightError            everything this package raises on purpose
    ├── SettingsError         the settings file: every fault at once      (exit 2)
    ├── FrameError            one input file cannot be used               (a failed row)
    ├── StageError            one pair cannot go on                       (a failed row)
    └── ProductError          a product cannot be written or read back    (exit 2)

Wrong *arguments* of a function (shapes, ranges) are a plain ``ValueError``.
A message names the file, key or argument, the rule, the value received, and
the cure.
"""

from __future__ import annotations

from pathlib import Path

__all__ = [
    "FrameError",
    "LatelightError",
    "ProductError",
    "SettingsError",
    "StageError",
]


class LatelightError(Exception):
    """Base of every error raised on purpose."""


class SettingsError(LatelightError):
    """The settings are unusable.

    Parameters
    ----------
    path : Path or None
        The settings file, or None for settings made in memory.
    faults : sequence of str
        One line a fault, each beginning with the dotted key.
    """

    def __init__(self, path: Path | None, faults: list[str] | tuple[str, ...]) -> None:
        self.path = path
        self.faults = tuple(faults)
        where = str(path) if path is not None else "settings"
        super().__init__("\n".join(f"{where}: {fault}" for fault in self.faults))

    def __reduce__(self) -> tuple[object, ...]:
        return (type(self), (self.path, self.faults))


class _PathError(LatelightError):
    """Something is wrong with one file or folder."""

    def __init__(self, path: Path, reason: str) -> None:
        self.path = path
        self.reason = reason
        super().__init__(f"{path}: {reason}")

    def __reduce__(self) -> tuple[object, ...]:
        return (type(self), (self.path, self.reason))


class FrameError(_PathError):
    """One frame cannot be used.

    Parameters
    ----------
    path : Path
        The file.
    reason : str
        What is wrong with it, with the value received and the cure.
    """


class StageError(LatelightError):
    """One pair cannot go on.

    Parameters
    ----------
    stage : str
        The stage that gave up, for example ``"registration"``.
    reason : str
        Why, with the value received and the cure.
    """

    def __init__(self, stage: str, reason: str) -> None:
        self.stage = stage
        self.reason = reason
        super().__init__(f"{stage}: {reason}")

    def __reduce__(self) -> tuple[object, ...]:
        return (type(self), (self.stage, self.reason))


class ProductError(_PathError):
    """A product cannot be written, or read back.

    Parameters
    ----------
    path : Path
        The file or folder.
    reason : str
        What the system said, and the cure.
    """
