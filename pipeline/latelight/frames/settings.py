"""Settings of the frames stage: the observatory's header words, and the flags."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from latelight.settings import StageSettings

__all__ = ["FrameSettings", "HeaderWords"]


class HeaderWords(StageSettings):
    """Which header words and extensions hold what (table ``[header]``).

    An empty word says that the headers have none: gain, read noise and
    saturation are then estimated from the pixels, filter and field left empty.
    """

    mjd: str = Field(
        "MJD-OBS",
        min_length=1,
        description="start of the exposure: MJD, JD or a date; falls back to DATE-OBS",
    )
    exposure: str = Field("EXPTIME", min_length=1, description="exposure time, seconds")
    filter: str = Field("FILTER", description="filter name")
    field: str = Field("OBJECT", description="name of the field")
    gain: str = Field("GAIN", description="electrons per count")
    read_noise: str = Field("RDNOISE", description="read noise, electrons")
    saturation: str = Field("SATURATE", description="saturation level, counts")
    zero_point: str = Field("MAGZERO", description="magnitude of one count")
    image_hdu: str | int | None = Field(
        None, description="extension with the image; all 2-D images by default"
    )
    mask_hdu: str | int | None = Field(
        None, description="extension with bad pixels, non-zero = bad"
    )
    variance_hdu: str | int | None = Field(
        None, description="extension with the variance, counts squared"
    )


class FrameSettings(StageSettings):
    """What is flagged in a frame, and from which level on (table ``[frames]``)."""

    edge_px: int = Field(4, ge=0, description="width of the flagged edge, pixels")
    sky_cell_px: int = Field(
        64, ge=16, le=512, description="cell of the coarse sky map, pixels"
    )
    saturation_rim_px: int = Field(
        2, ge=0, le=20, description="rim flagged round saturated pixels, pixels"
    )
    readout: Literal["columns", "rows"] = Field(
        "columns", description="along which saturated stars bleed"
    )
    core_factor: float = Field(
        2.0,
        ge=1.0,
        le=10.0,
        description="flagged radius of a saturated star, in radii of its "
        "saturated area",
    )
    cosmic_ray_sigma: float = Field(
        4.5, ge=3.0, description="height of a cosmic ray over its sides, sigma"
    )
    cosmic_ray_margin: float = Field(
        1.2,
        ge=1.0,
        le=3.0,
        description="how much sharper than the sharpest stars a cosmic ray must be",
    )
    bad_column_sigma: float = Field(
        6.0, ge=3.0, description="offset of a bad column or row, sigma of its mean"
    )
    trail_sigma: float = Field(
        5.5, ge=5.0, description="summed significance of a trail, sigma"
    )
    trail_min_length: float = Field(
        0.4,
        gt=0.0,
        le=1.0,
        description="shortest trail, as a fraction of the frame's shorter side",
    )
