"""Settings of the matching stage, table ``[matching]``."""

from __future__ import annotations

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["MatchingSettings"]


class MatchingSettings(StageSettings):
    """How the two frames are brought to one PSF and one flux scale."""

    min_stars: int = Field(
        8, ge=4, le=1000, description="Fewest kernel stars for a fit."
    )
    max_stars: int = Field(
        320, ge=10, le=5000, description="Most kernel stars used, spread over cells."
    )
    min_snr: float = Field(
        20.0, gt=0, le=1e4, description="Least S/N of a kernel star in each frame."
    )
    held_out_fraction: float = Field(
        0.2, ge=0.05, le=0.5, description="Share of the stars kept out of the fit."
    )
    spatial_degree: int = Field(
        2,
        ge=0,
        le=3,
        description="Highest degree of the kernel's shape over the frame.",
    )
    scale_degree: int = Field(
        1, ge=0, le=2, description="Highest degree of the flux scale over the frame."
    )
    clip_sigma: float = Field(
        4.0, ge=2, le=20, description="Cut on a star's chi-square, robust sigmas."
    )
    sharpening: float = Field(
        0.05,
        ge=0,
        le=0.5,
        description="Share of the PSF's variance a kernel may take away unsmoothed.",
    )
    psf_degree: int = Field(
        2, ge=0, le=3, description="Highest degree of the PSF over the frame."
    )
    psf_stars: int = Field(
        300, ge=5, le=5000, description="Most stars stacked into a PSF."
    )
