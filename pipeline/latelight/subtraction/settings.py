"""Settings of the subtraction stage, table ``[subtraction]``."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["SubtractionSettings"]


class SubtractionSettings(StageSettings):
    """How the difference is made and its noise described."""

    method: Literal["kernel", "proper"] = Field(
        "kernel",
        description='"kernel" (Alard & Lupton) or "proper" (Zackay, Ofek & Gal-Yam).',
    )
    background_mesh_px: int = Field(
        256,
        ge=128,
        description="Side of the cells of the smooth background, px; longer than arcs.",
    )
    ridge_sigma: float = Field(
        4.0,
        ge=2,
        le=20,
        description="Smoothed S/N above which a pixel is kept out of the background.",
    )
    compact_sigma: float = Field(
        5.0, ge=3, le=50, description="Least S/N of a compact residual."
    )
    compact_radius_fwhm: float = Field(
        1.5,
        ge=0.5,
        le=5,
        description="Radius masked about a faint compact residual, FWHM.",
    )
    star_noise_stars: int = Field(
        400,
        ge=20,
        le=5000,
        description="Most stars the star-residual noise is fitted to.",
    )
    block_px: int = Field(
        512,
        ge=128,
        le=4096,
        description="Side of the blocks of proper subtraction, px; one PSF each.",
    )
