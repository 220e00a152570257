"""Settings of the search along trial velocities, table ``[velocity_stack]``."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["VelocityStackSettings"]


class VelocityStackSettings(StageSettings):
    """Which moving ridges are looked for in the sum of all epochs."""

    enabled: bool = Field(
        True,
        description="Whether to search along trial velocities for echoes too faint "
        "in every pair.",
    )
    least_epochs: int = Field(
        3,
        ge=3,
        le=100,
        description="Fewest epochs of a field with which to search.",
    )
    threshold: float = Field(
        6.7,
        ge=4.0,
        le=100.0,
        description="Least significance of a ridge in all epochs together [sigma].",
    )
    seed_threshold: float = Field(
        5.1,
        ge=3.0,
        le=100.0,
        description="Least response of the coarse filters worth a closer look [sigma].",
    )
    largest_shift_px: float = Field(
        80.0,
        ge=8.0,
        le=400.0,
        description="Greatest distance moved between the first and the last epoch "
        "[pixel].",
    )
    shortest_px: float = Field(
        50.0,
        ge=16.0,
        le=1000.0,
        description="Least length of a ridge [pixel].",
    )
    widest_px: float = Field(
        26.0,
        ge=4.0,
        le=200.0,
        description="Greatest full width of a ridge at half maximum [pixel].",
    )
