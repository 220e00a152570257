"""Light curves of outbursts: how brightness rises and falls.

Shapes are schematic (no published template): what matters to an echo is the
fast rise, the slow decay and how long the light lasts.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from latelight.records import FloatArray

__all__ = ["LIGHT_CURVES", "LightCurve", "LightCurveShape"]

LightCurveShape = Literal["flash", "plateau", "relapse"]
LIGHT_CURVES: tuple[LightCurveShape, ...] = ("flash", "plateau", "relapse")

DAYS_PER_YEAR = 365.25


@dataclass(frozen=True, slots=True)
class LightCurve:
    """Brightness of an outburst against time, peak 1.

    Attributes
    ----------
    shape : {"flash", "plateau", "relapse"}
        A fast rise and an exponential decay; a long flat top and a drop; a flash
        followed by a second, weaker one.
    duration_d : float
        Fluence over peak brightness, days.
    rise : float
        Rise time over decay time, 0.02-0.5.
    """

    shape: LightCurveShape
    duration_d: float
    rise: float

    def sampled(self, step_d: float) -> FloatArray:
        """Return the brightness every ``step_d`` days from the first light on."""
        # Shape on a fine grid of arbitrary time, then stretched to the duration.
        time = np.linspace(0.0, 12.0, 12001)
        value = self._raw(time)
        value /= value.max()
        unit_duration = float(np.trapezoid(value, time))
        scale = self.duration_d / unit_duration
        days = np.arange(0.0, 12.0 * scale + step_d, step_d)
        return np.interp(days, time * scale, value, right=0.0)

    def cumulative(self, step_d: float) -> FloatArray:
        """Return the running integral, years, at each sample of :meth:`sampled`."""
        value = self.sampled(step_d)
        steps = 0.5 * (value[1:] + value[:-1]) * step_d / DAYS_PER_YEAR
        return np.concatenate([[0.0], np.cumsum(steps)])

    def _raw(self, time: FloatArray) -> FloatArray:
        if self.shape == "flash":
            return _flash(time, self.rise)
        if self.shape == "plateau":
            top = -np.expm1(-time / self.rise)
            drop = 1.0 / (1.0 + np.exp((time - 2.0) / 0.12))
            return top * (0.9 * drop * (1.0 - 0.1 * time) + 0.1 * np.exp(-time / 2.0))
        return _flash(time, self.rise) + 0.55 * _flash(time - 1.8, 1.5 * self.rise)


def _flash(time: FloatArray, rise: float) -> FloatArray:
    later = np.maximum(time, 0.0)
    # The rise is smooth at first light: a shock takes time to break out.
    return (-np.expm1(-((later / rise) ** 1.5))) * np.exp(-later)
