"""Settings of the tracks, table ``[tracks]``."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["TrackSettings"]


class TrackSettings(StageSettings):
    """How arcs are followed over the epochs, and which tracks are worth a look."""

    min_snr: float = Field(
        5.5,
        ge=3.0,
        le=100.0,
        description="Least significance of a track in all epochs together [sigma].",
    )
    largest_shift_px: float = Field(
        160.0,
        ge=8.0,
        le=1000.0,
        description="Greatest distance an arc may move between the first and the last "
        "epoch [pixel].",
    )
    least_motion: float = Field(
        0.3,
        ge=0.0,
        le=10.0,
        description="Least distance moved between the first and the last epoch, in "
        "widths of the PSF: residues of stars, which stay, are set aside.",
    )
    largest_residual: float = Field(
        5.0,
        ge=3.0,
        le=100.0,
        description="How far one epoch may lie off the place that the others foretell "
        "[sigma].",
    )
    dust_contrast: float = Field(
        0.5,
        gt=0.0,
        le=5.0,
        description="Scatter of the dust's density along the motion, 1 sigma over its "
        "mean.",
    )
    dust_length_px: float = Field(
        14.0,
        ge=2.0,
        le=500.0,
        description="Distance along the motion over which that changes [pixel].",
    )
    pull: float = Field(
        0.05,
        ge=0.0,
        le=1.0,
        description="How far finer dust pulls the ridge of an echo to one side, "
        "1 sigma as a fraction of its width.",
    )
    roll_px: float = Field(
        0.85,
        ge=0.0,
        le=20.0,
        description="How far the hills of a dust sheet carry an echo ahead of even "
        "motion or behind it, 1 sigma [pixel].",
    )
    roll_length_px: float = Field(
        35.0,
        gt=0.0,
        le=1000.0,
        description="Distance an echo moves over which that changes [pixel].",
    )
    turn_deg: float = Field(
        0.37,
        ge=0.0,
        le=45.0,
        description="How far the hills of a dust sheet turn the line through an echo "
        "off its mean normal, 1 sigma [degree].",
    )
    crest: float = Field(
        0.045,
        ge=0.0,
        le=1.0,
        description="How far the brightest line of an echo lies off its front's place "
        "for patchy dust and light curves of any shape, 1 sigma as a fraction of its "
        "width.",
    )
