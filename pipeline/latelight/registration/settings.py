"""Settings of registration: finding stars, aligning and resampling frames."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["RegistrationSettings"]


class RegistrationSettings(StageSettings):
    """Table ``[registration]``."""

    sky_mesh_px: int = Field(
        128, ge=16, description="Side of the boxes the sky level is measured in, px."
    )
    detect_sigma: float = Field(
        2.5,
        gt=0.0,
        description="Height of a detected pixel, 3 x 3 smoothed, over the noise of "
        "one pixel, sigma.",
    )
    min_area_px: int = Field(
        5, ge=1, description="Fewest connected pixels of a detection, px."
    )
    clean_snr: float = Field(
        10.0, gt=0.0, description="Lowest S/N of a star fit for alignment and PSF."
    )
    wcs_error_arcsec: float = Field(
        90.0,
        ge=0.0,
        description="Largest offset between two frames' WCS searched for, arcsec.",
    )
    match_radius_px: float = Field(
        3.0,
        gt=0.0,
        description="Largest distance of a star from its predicted place, px.",
    )
    min_stars: int = Field(
        6, ge=4, description="Fewest matched stars an alignment may rest on."
    )
    max_stars: int = Field(
        3000, ge=20, description="Most stars used for alignment, the brightest."
    )
    asterism_stars: int = Field(
        80, ge=6, description="Bright stars the asterisms are made of."
    )
    max_degree: int = Field(
        3,
        ge=1,
        le=5,
        description="Highest degree of the polynomial between the two frames.",
    )
    clip_sigma: float = Field(
        4.0, ge=2.0, description="Stars off the fit by more are left out, sigma."
    )
    error_floor_px: float = Field(
        0.003,
        gt=0.0,
        description="Position error no star is believed to be better than, px.",
    )
    interpolation: Literal["least-squares", "lanczos4", "lanczos3"] = Field(
        "least-squares", description="Kernel that resamples the template."
    )
    bad_weight: float = Field(
        0.1,
        gt=0.0,
        le=1.0,
        description="Share of interpolation weight on bad pixels that flags a pixel.",
    )
