"""Settings of the night: which frames, where the results go, how frames pair."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["TEMPLATE_CHOICES", "NightSettings", "PairSettings"]

TEMPLATE_CHOICES = ("earliest", "sharpest", "deepest", "stack")
"""Ways to choose the template of a group; anything else is a path."""


class NightSettings(StageSettings):
    """What to read and where to write."""

    frames: tuple[str, ...] = Field(
        min_length=1,
        examples=[["frames/*.fits*"]],
        description="FITS files: globs, relative to this file; ** goes into folders.",
    )
    output: str = Field(
        min_length=1,
        examples=["night"],
        description="Folder for the results, relative to this file.",
    )


class PairSettings(StageSettings):
    """Which frames of one field and filter are subtracted from which."""

    template: str = Field(
        "earliest",
        min_length=1,
        description="Template of each field and filter: earliest, sharpest, deepest, "
        "stack (of the other epochs, from the third epoch on), or the path of one "
        "frame, relative to this file.",
    )
    min_days: float = Field(
        0.5, gt=0, description="Least time between the epochs of a pair [day]."
    )
    min_overlap: float = Field(
        0.05,
        gt=0,
        le=1,
        description="Least part of a frame that must lie on the template, from their "
        "WCS, for frames without a field word [fraction].",
    )
