"""Settings of the search for arcs."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["ArcSettings"]


class ArcSettings(StageSettings):
    """Table ``[arcs]``: which ridges are looked for, and which count as arcs."""

    threshold: float = Field(
        7.5,
        ge=4.0,
        le=100.0,
        description="Least significance of an arc, both lobes together [sigma].",
    )
    seed_threshold: float = Field(
        5.0,
        ge=3.0,
        le=100.0,
        description="Least response of the coarse filters worth a closer look [sigma].",
    )
    shortest_px: float = Field(
        45.0,
        ge=16.0,
        le=1000.0,
        description="Least length of an arc [pixels].",
    )
    longest_px: float = Field(
        250.0,
        ge=40.0,
        le=2000.0,
        description="Length beyond which a straight ridge is a trail [pixels].",
    )
    widest_px: float = Field(
        30.0,
        ge=4.0,
        le=200.0,
        description="Greatest full width of one lobe at half maximum [pixels].",
    )
    least_radius_px: float = Field(
        150.0,
        ge=30.0,
        le=10000.0,
        description="Radius of curvature below which a ridge is a ring, not an arc "
        "[pixels].",
    )
    largest_shift_px: float = Field(
        40.0,
        ge=4.0,
        le=200.0,
        description="Greatest distance between the two lobes of an echo [pixels].",
    )
    bright_star_snr: float = Field(
        300.0,
        gt=0.0,
        description="Signal-to-noise ratio from which a star may cast spikes, ghosts "
        "and haloes.",
    )
