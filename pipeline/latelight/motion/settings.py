"""Settings of the motion stage, table ``[motion]``."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["MotionSettings"]


class MotionSettings(StageSettings):
    """How far an arc may move, and what is known of echoes beforehand."""

    max_shift_px: float = Field(
        60.0,
        ge=4.0,
        le=300.0,
        description="Greatest distance between the two lobes of an arc [pixel].",
    )
    lobe_threshold: float = Field(
        4.0,
        ge=2.0,
        le=20.0,
        description="Significance from which a second lobe counts as seen [sigma].",
    )
    max_turn_deg: float = Field(
        12.0,
        ge=1.0,
        le=45.0,
        description="Largest correction of the direction of a traced ridge [degree].",
    )
    ratio_scatter: float = Field(
        0.6,
        gt=0.0,
        le=3.0,
        description="Scatter of the brightness ratio of two lobes on different dust, "
        "1 sigma of its natural logarithm.",
    )
    texture: float = Field(
        0.06,
        ge=0.0,
        le=1.0,
        description="How far patchy dust pulls the ridge of an echo to one side, "
        "1 sigma as a fraction of its width.",
    )
    relief_px: float = Field(
        0.25,
        ge=0.0,
        le=10.0,
        description="How far hills of a dust sheet push an echo's front to and fro, "
        "1 sigma; it bends the front but leaves the shift alone [pixel].",
    )
    texture_length_px: float = Field(
        40.0,
        gt=0.0,
        le=1000.0,
        description="Length along an arc over which texture and relief stay the same "
        "[pixel].",
    )
