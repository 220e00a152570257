"""Settings of the files a night leaves behind."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["ProductSettings"]


class ProductSettings(StageSettings):
    """Table ``[products]``."""

    differences: bool = Field(
        default=False,
        description="Also write each pair's difference, as FITS and as a picture.",
    )
    max_cutout_px: int = Field(
        default=401,
        ge=65,
        le=2001,
        description="Longest side of a cutout [pixels]; longer arcs are cut off.",
    )
    smoothing_px: float = Field(
        default=1.0,
        ge=0.0,
        le=5.0,
        description=(
            "Least sigma of the Gaussian that smooths differences in pictures, never "
            "in FITS files; wide arcs get more [pixels]; 0 for none."
        ),
    )
