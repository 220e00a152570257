"""One shape of a ridge at all epochs, each with its own seeing.

The outburst's light laid out in space is the same at every epoch: a Gaussian of
sigma ``s`` (depth of the dust, rise of the light) and an exponential tail of scale
``t`` behind it.  The PSF of an epoch blurs it further.  Heights are in units of the
peak at the median seeing, so that a ridge of one dust column has one height at all
epochs, however blurred.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from latelight.motion.shapes import modified_gaussian
from latelight.records import FloatArray
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["Lobe"]

_RATIOS = np.concatenate([[0.0], np.geomspace(0.05, 60.0, 60)])
_NEGLIGIBLE = 1e-4


@lru_cache(maxsize=1)
def _standards() -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return peak's place, its height and full width, for sigma 1, by tail."""
    rows = []
    for ratio in _RATIOS:
        x = np.linspace(-6.0 - 4.0 * ratio, 4.0, 20_001)
        height = modified_gaussian(x, 1.0, float(ratio))
        top = int(np.argmax(height))
        # A parabola through the three highest samples.
        y0, y1, y2 = height[top - 1 : top + 2]
        shift = 0.5 * (y0 - y2) / (y0 - 2.0 * y1 + y2)
        half = 0.5 * y1
        front = np.interp(-half, -height[top:], x[top:])
        back = np.interp(half, height[: top + 1], x[: top + 1])
        rows.append((x[top] + shift * (x[1] - x[0]), y1, front - back))
    place, height, width = np.array(rows).T
    return place, height, width


@dataclass(frozen=True, slots=True)
class Lobe:
    """The shape of a ridge that moves towards positive offsets.

    Attributes
    ----------
    psf : float64 array, shape (n,)
        Sigma of each epoch's PSF, pixels.
    seeing : float
        Median of them.
    log_size : float
        ln of ``hypot(s, t)``, pixels.
    skew : float
        ``atan(t / s)``, 0 to pi / 2.
    """

    psf: FloatArray
    seeing: float
    log_size: float
    skew: float

    @property
    def tail(self) -> float:
        """Scale of the exponential, pixels."""
        return float(np.exp(self.log_size) * np.sin(self.skew))

    @property
    def sigma(self) -> float:
        """Sigma of the Gaussian before the PSF, pixels."""
        return float(np.exp(self.log_size) * np.cos(self.skew))

    @property
    def blurred(self) -> FloatArray:
        """Sigma of the Gaussian at each epoch, pixels."""
        return np.hypot(self.psf, self.sigma)

    @property
    def spread(self) -> FloatArray:
        """Standard deviation of the light at each epoch, pixels."""
        return np.hypot(self.psf, np.exp(self.log_size))

    @property
    def typical(self) -> float:
        """Sigma of the Gaussian at the median seeing, pixels."""
        return float(np.hypot(self.seeing, self.sigma))

    @property
    def full_width(self) -> float:
        """Full width at half maximum at the median seeing, pixels."""
        return float(self._standard(2) * self.typical)

    @property
    def own_width(self) -> float:
        """Full width at half maximum, PSF taken out, pixels."""
        sigma = max(self.sigma, 1e-3 * float(np.exp(self.log_size)))
        ratio = self.tail / sigma
        if ratio >= _RATIOS[-1]:  # hardly more than an exponential
            return self.tail * np.log(2.0)
        return float(np.interp(ratio, _RATIOS, _standards()[2]) * sigma)

    @property
    def front(self) -> float:
        """How far the Gaussian's centre lies ahead of the ridge, pixels."""
        return -self._standard(0) * self.typical

    @property
    def scale(self) -> float:
        """Area of a ridge of height 1 at the median seeing, pixels."""
        return self.typical / self._standard(1)

    def _standard(self, which: int) -> float:
        ratio = self.tail / self.typical
        return float(np.interp(ratio, _RATIOS, _standards()[which]))

    def heights(self, offset: FloatArray) -> FloatArray:
        """Return heights at offsets from the ridge.

        Parameters
        ----------
        offset : float64 array, shape (n, ...)
            Pixels along the motion, for each epoch its own; 0 is the ridge at the
            median seeing.
        """
        front, tail = self.front, self.tail
        out = np.array(
            [
                modified_gaussian(row - front, float(sigma), tail)
                for row, sigma in zip(offset, self.blurred, strict=True)
            ]
        )
        out *= self.scale
        out[out < _NEGLIGIBLE] = 0.0
        return out

    @classmethod
    def of_width(cls, psf: FloatArray, full_width: float, skew: float) -> Lobe:
        """Return the lobe of a full width, PSF included, and a skew."""
        seeing = float(np.median(psf))
        blur = FWHM_PER_SIGMA * seeing
        own = np.sqrt(max(full_width**2 - blur**2, (0.3 * blur) ** 2))
        lobe = cls(psf, seeing, 0.0, skew)
        return replace(lobe, log_size=float(np.log(own / lobe.own_width)))

    def in_one_seeing(self) -> Lobe:
        """Return the lobe with the median seeing at every epoch."""
        return replace(self, psf=np.full_like(self.psf, self.seeing))
