"""Fields on the sky: their outlines, and how far they lie from a source."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.records import FloatArray
from latelight.sky import offset_position, position_angle, separation_deg

__all__ = ["PlannedField", "angles_from"]

_POINTS = 24


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedField:
    """A piece of sky that may be observed.

    Attributes
    ----------
    name : str
        Its name.
    ra, dec : float
        Its centre, degrees, ICRS.
    width_deg, height_deg : float
        Of a rectangle with its sides to the north and east of its tangent plane; 0
        for none.
    radius_deg : float
        Of a circle; 0 for none.
    """

    name: str
    ra: float
    dec: float
    width_deg: float = 0.0
    height_deg: float = 0.0
    radius_deg: float = 0.0

    def outline(self) -> tuple[FloatArray, FloatArray]:
        """Return RA and Dec along the field's edge, degrees; a point for a point."""
        if self.radius_deg > 0.0:
            pa = np.linspace(0.0, 360.0, 4 * _POINTS, endpoint=False)
            return offset_position(self.ra, self.dec, pa, self.radius_deg)
        east, north = self._rectangle()
        pa = np.degrees(np.arctan2(east, north))
        distance = np.degrees(np.arctan(np.hypot(east, north)))
        return offset_position(self.ra, self.dec, pa, distance)

    def holds(self, ra: float, dec: float) -> bool:
        """Whether a place lies in the field."""
        distance = float(separation_deg(self.ra, self.dec, ra, dec))
        if self.radius_deg > 0.0 or self.width_deg == 0.0:
            return distance <= self.radius_deg
        if distance >= 90.0:
            return False
        turn = np.radians(position_angle(self.ra, self.dec, ra, dec))
        away = np.tan(np.radians(distance))
        half = np.tan(np.radians([0.5 * self.width_deg, 0.5 * self.height_deg]))
        return bool(
            abs(away * np.sin(turn)) <= half[0] and abs(away * np.cos(turn)) <= half[1]
        )

    def _rectangle(self) -> tuple[FloatArray, FloatArray]:
        """Return the edge on the tangent plane, tangents of angles."""
        if self.width_deg == 0.0:
            return np.zeros(1), np.zeros(1)
        half = np.tan(np.radians([0.5 * self.width_deg, 0.5 * self.height_deg]))
        side = np.linspace(-1.0, 1.0, _POINTS, endpoint=False)
        one = np.ones(_POINTS)
        x = np.concatenate([side, one, -side, -one])
        y = np.concatenate([-one, side, one, -side])
        return half[0] * x, half[1] * y


def angles_from(field: PlannedField, ra: float, dec: float) -> tuple[float, float]:
    """Return the least and greatest angle of a field's places from a source, degrees.

    Parameters
    ----------
    field : PlannedField
        The field.
    ra, dec : float
        The source, degrees.
    """
    angles = separation_deg(ra, dec, *field.outline())
    least = 0.0 if field.holds(ra, dec) else float(angles.min())
    return least, float(angles.max())
