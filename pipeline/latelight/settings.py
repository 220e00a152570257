"""The shape of every settings table.

Each stage keeps its own model in its ``settings.py``; :mod:`latelight.config`
joins them into one file.  Kept free of heavy imports so that ``--help`` is
instant.
"""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict

__all__ = ["StageSettings"]


class StageSettings(BaseModel):
    """A frozen table of settings; unknown keys and wrong types are errors."""

    model_config = ConfigDict(
        extra="forbid",
        frozen=True,
        strict=True,
        validate_default=True,
        allow_inf_nan=False,
    )
