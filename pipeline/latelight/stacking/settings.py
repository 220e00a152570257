"""Settings of the stacking stage, table ``[stacking]``."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["StackingSettings"]


class StackingSettings(StageSettings):
    """Which epochs become a template, and how they are combined."""

    min_epochs: int = Field(
        3,
        ge=3,
        le=1000,
        description="Fewest epochs of a field for a stack, the one searched included; "
        "fields of fewer are compared pair by pair.",
    )
    max_epochs: int = Field(
        12, ge=3, le=200, description="Most epochs in a stack, the deepest."
    )
    max_seeing: float = Field(
        1.5,
        ge=1,
        le=10,
        description="Broadest seeing of an epoch in a stack, in that of the sharpest.",
    )
    min_weight: float = Field(
        0.1,
        gt=0,
        le=1,
        description="Least weight (1 / variance of a star's flux) of an epoch in a "
        "stack, in that of the deepest.",
    )
    min_overlap: float = Field(
        0.5,
        gt=0,
        le=1,
        description="Least part of a frame in a stack that must lie on the one in the "
        "middle, from their WCS [fraction].",
    )
    clip: float = Field(
        5.0,
        ge=2,
        le=100,
        description="Deviation from the median of the epochs beyond which a pixel is "
        "left out [sigma].",
    )
    tolerance: float = Field(
        0.05,
        ge=0,
        le=1,
        description="Part of the light of a star by which an epoch may deviate "
        "without being left out.",
    )
