"""Settings of the origin stage: the listed sources and what scores them."""

from __future__ import annotations

from typing import Self

from pydantic import Field, model_validator

from latelight.settings import StageSettings

__all__ = ["OriginSettings", "SourceSettings"]


class OriginSettings(StageSettings):
    """Table ``[origin]``: how arcs are traced back to the listed sources."""

    source_table: str | None = Field(
        None,
        min_length=1,
        description="Table file of more sources, ECSV or CSV, with the keys of "
        "[[sources]] as columns; relative to this file.",
    )
    tilt_scale: float = Field(
        0.35,
        gt=0.0,
        le=10.0,
        description="Typical slope of dust sheets against the plane of the sky "
        "(tangent of the tilt); 1 is random orientation.",
    )
    direction_scatter_deg: float = Field(
        15.0,
        gt=0.0,
        le=90.0,
        description="Angle from the line away from a source within which half of "
        "its arcs move, where age or distance is unknown [degree].",
    )
    outlier_fraction: float = Field(
        0.02,
        gt=0.0,
        le=0.5,
        description="Share of arcs taken to move in any direction whatever their "
        "source.",
    )
    wrong_speed_fraction: float = Field(
        0.1,
        ge=0.0,
        le=1.0,
        description="Share of measured speeds taken to be wrong; their direction still "
        "counts.",
    )
    speed_decades: float = Field(
        3.0,
        gt=0.0,
        le=10.0,
        description="Decades over which the speeds of random arcs spread evenly.",
    )
    min_score: float = Field(
        0.0,
        ge=-3.0,
        le=10.0,
        description="Least score at which a source is named as the origin [dex].",
    )
    chance_level: float = Field(
        0.01,
        gt=0.0,
        le=0.5,
        description="Chance that arcs without a common origin point to one by "
        "accident, below which `latelight origins` claims it.",
    )
    further_chance_level: float = Field(
        0.03,
        gt=0.0,
        le=0.5,
        description="The same for a second and every further origin beside one that is "
        "claimed.",
    )
    random_skies: int = Field(
        48,
        ge=8,
        le=10_000,
        description="Skies of random directions that are searched at most to find that "
        "chance.",
    )
    tilt_correlation_arcmin: float = Field(
        1.0,
        ge=0.0,
        le=600.0,
        description="Distance over which arcs of one filament share their tilt, so "
        "that they count as fewer; 0 when all are independent [arcmin].",
    )
    max_origins: int = Field(
        8, ge=1, le=100, description="Origins that are searched for at most."
    )


class SourceSettings(StageSettings):
    """One ``[[sources]]`` entry: a past outburst that may have lit an echo."""

    name: str = Field(min_length=1, description="Name of the source.")
    ra: float = Field(
        ge=0.0, lt=360.0, description="Right ascension, ICRS [degree, not hours]."
    )
    dec: float = Field(ge=-90.0, le=90.0, description="Declination, ICRS [degree].")
    distance_pc: float | None = Field(
        None, gt=0.0, description="Distance from the observer [pc]."
    )
    distance_err_pc: float | None = Field(
        None, ge=0.0, description="1-sigma error of the distance [pc]."
    )
    age_yr: float | None = Field(
        None,
        gt=0.0,
        description="Time since the outburst's light arrived [Julian year].",
    )
    age_at_mjd: float | None = Field(
        None, description="Date at which age_yr holds [MJD]."
    )
    age_err_yr: float | None = Field(
        None, ge=0.0, description="1-sigma error of the age or year [Julian year]."
    )
    outburst_year: float | None = Field(
        None,
        description="Year in which the outburst's light arrived, instead of age_yr "
        "[Julian year, AD].",
    )
    peak_mag: float | None = Field(
        None,
        ge=-30.0,
        le=40.0,
        description="Apparent magnitude of the outburst at its peak, for plans [mag].",
    )
    duration_days: float | None = Field(
        None,
        gt=0.0,
        description="Width of its light curve, its fluence over its peak flux, for "
        "plans [day].",
    )

    @model_validator(mode="after")
    def _keys_belong_together(self) -> Self:
        if self.age_yr is not None and self.outburst_year is not None:
            msg = "give age_yr with age_at_mjd, or outburst_year, not both"
            raise ValueError(msg)
        if (self.age_yr is None) != (self.age_at_mjd is None):
            msg = "age_yr and age_at_mjd belong together; give both or neither"
            raise ValueError(msg)
        if self.distance_err_pc is not None and self.distance_pc is None:
            msg = "distance_err_pc needs distance_pc; add it"
            raise ValueError(msg)
        if self.age_err_yr is not None and not self.has_age:
            msg = "age_err_yr needs age_yr with age_at_mjd, or outburst_year; add it"
            raise ValueError(msg)
        return self

    @property
    def has_age(self) -> bool:
        """Whether the age of the outburst is known."""
        return self.age_yr is not None or self.outburst_year is not None
