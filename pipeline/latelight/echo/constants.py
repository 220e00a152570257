"""Physical constants of light-echo geometry."""

from __future__ import annotations

import math

__all__ = [
    "ARCSEC_PER_RADIAN",
    "DAYS_PER_YEAR",
    "LIGHT_PC_PER_YEAR",
    "METRES_PER_PARSEC",
    "METRES_PER_SECOND",
]

METRES_PER_SECOND = 299_792_458.0
"""Speed of light (exact, SI)."""

METRES_PER_PARSEC = 3.0856775814913673e16
"""Parsec: 648000 / pi au (IAU 2015 Resolution B2)."""

DAYS_PER_YEAR = 365.25
"""Julian year."""

LIGHT_PC_PER_YEAR = METRES_PER_SECOND * DAYS_PER_YEAR * 86_400.0 / METRES_PER_PARSEC
"""Speed of light, pc per Julian year: one light year in pc."""

ARCSEC_PER_RADIAN = 648_000.0 / math.pi
"""Arcsec in a radian."""
