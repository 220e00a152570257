"""Settings of a plan: the date, the outbursts, the dust, and the fields."""

from __future__ import annotations

from typing import Self

from pydantic import Field, model_validator

from latelight.settings import StageSettings

__all__ = ["FieldSettings", "LayerSettings", "PlanSettings"]


class PlanSettings(StageSettings):
    """Table ``[plan]``: for when, and for what outbursts, dust and seeing."""

    date: str | float | None = Field(
        None,
        description="Date of the plan: ISO date in UTC, in quotes, or MJD; the option "
        "--at comes first.",
    )
    peak_mag: float | None = Field(
        None,
        ge=-30.0,
        le=40.0,
        description="Apparent magnitude of an outburst at its peak, in the band of the "
        "plan, where its source has none [mag].",
    )
    duration_days: float = Field(
        60.0,
        gt=0.0,
        description="Width of an outburst's light curve, its fluence over its peak "
        "flux, where its source has none [day].",
    )
    wavelength_um: float = Field(
        0.62,
        ge=0.22,
        le=2.2,
        description="Wavelength of the band [micron].",
    )
    dust_av: float = Field(
        0.5,
        gt=0.0,
        le=10.0,
        description="Dust column for which the surface brightness is predicted: its "
        "visual extinction [mag].",
    )
    thickness_pc: float = Field(
        0.1,
        gt=0.0,
        description="Thickness of a dust sheet along the line of sight, FWHM [pc].",
    )
    seeing_arcsec: float = Field(1.0, gt=0.0, description="Seeing, FWHM [arcsec].")
    order: int = Field(
        9,
        ge=3,
        le=13,
        description="HEALPix order of the cells; 9 has cells of 6.9 arcmin, each step "
        "halves them.",
    )
    moc_probability: float = Field(
        0.95,
        gt=0.0,
        lt=1.0,
        description="Share of the probability that the listed cells hold together.",
    )


class FieldSettings(StageSettings):
    """One ``[[fields]]`` entry: a piece of sky that may be observed."""

    name: str = Field(min_length=1, description="Name of the field.")
    ra: float = Field(
        ge=0.0,
        lt=360.0,
        description="Right ascension of its centre, ICRS [degree, not hours].",
    )
    dec: float = Field(
        ge=-90.0, le=90.0, description="Declination of its centre, ICRS [degree]."
    )
    width_deg: float | None = Field(
        None,
        gt=0.0,
        le=60.0,
        description="Extent east to west of a rectangular field [degree].",
    )
    height_deg: float | None = Field(
        None,
        gt=0.0,
        le=60.0,
        description="Extent south to north of a rectangular field; width_deg when "
        "left out [degree].",
    )
    radius_deg: float | None = Field(
        None, gt=0.0, le=60.0, description="Radius of a round field [degree]."
    )

    @model_validator(mode="after")
    def _one_shape(self) -> Self:
        if self.radius_deg is not None and self.width_deg is not None:
            msg = "give radius_deg or width_deg, not both"
            raise ValueError(msg)
        if self.height_deg is not None and self.width_deg is None:
            msg = "height_deg needs width_deg; add it"
            raise ValueError(msg)
        return self


class LayerSettings(StageSettings):
    """One ``[[layers]]`` entry: a sheet of dust whose echo is to be found."""

    name: str = Field(min_length=1, description="Name of the layer.")
    depth_pc: float | None = Field(
        None,
        description="Depth from the source along the line of sight, positive towards "
        "the observer [pc].",
    )
    distance_pc: float | None = Field(
        None,
        gt=0.0,
        description="Distance from the observer, instead of depth_pc [pc].",
    )
    thickness_pc: float | None = Field(
        None,
        gt=0.0,
        description="Thickness along the line of sight, FWHM; that of [plan] when left "
        "out [pc].",
    )
    slope: float = Field(
        0.0,
        ge=0.0,
        le=10.0,
        description="Tangent of the tilt against the plane across the line to the "
        "source.",
    )
    slope_pa: float = Field(
        0.0,
        ge=0.0,
        lt=360.0,
        description="Position angle towards which the layer comes nearer to the "
        "observer [degree].",
    )
    source: str | None = Field(
        None, description="Name of the only source it is for; all when left out."
    )

    @model_validator(mode="after")
    def _one_place(self) -> Self:
        if (self.depth_pc is None) == (self.distance_pc is None):
            msg = "give depth_pc (from the source) or distance_pc (from the observer)"
            raise ValueError(msg)
        return self
