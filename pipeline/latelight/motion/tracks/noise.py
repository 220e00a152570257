"""How noisy a ridge is at each epoch.

Resampling and convolution correlate the noise of neighbouring pixels.  A sum over
a ridge then has another variance than the sum of its pixels' variances; the ratio
is measured on the series itself, once for a field.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from latelight.motion.strip import noise_correlation
from latelight.records import BoolArray, Difference, EpochSeries, FloatArray
from latelight.statistics import robust_sigma

__all__ = ["SeriesNoise", "measure_noise"]

_TILE_PX = 220
_LEAST_EXCESS = 0.05
# Light is told from noise by means over boxes, and cut out with a rim.
_BOX_PX = 9
_LIGHT_SIGMA = 3.0
_RIM_PX = 12
# Measured: with this the variance of blank noise comes out 4 % low, and beside a ridge
# of 90 sigma 2 % high.
_LEAST_SHARE = 0.12


@dataclass(frozen=True, slots=True)
class SeriesNoise:
    """Correlation of the noise of each epoch.

    Attributes
    ----------
    correlation : float64 array, shape (n, k, k)
        By lag in rows and columns, k odd: product of two pixels, each over its
        predicted sigma.
    """

    correlation: FloatArray

    def excess(self, normal_angle: float, full_width: float) -> FloatArray:
        """Return the variance of a ridge's height over that of independent pixels.

        Parameters
        ----------
        normal_angle : float
            Pixel angle of its normal, degrees.
        full_width : float
            Full width at half maximum, pixels.

        Returns
        -------
        float64 array, shape (n,)
            ``sum_lag R(lag) rho(lag . normal)``, rho being the autocorrelation of a
            Gaussian across a ridge that is long against the lags.
        """
        reach = self.correlation.shape[1] // 2
        lags = np.arange(-reach, reach + 1)
        angle = np.radians(normal_angle)
        along_normal = np.add.outer(lags * np.sin(angle), lags * np.cos(angle))
        # Gaussians of full width w overlap as one of full width sqrt(2) w.
        overlap = np.exp(-2.0 * np.log(2.0) * (along_normal / full_width) ** 2)
        return np.maximum((self.correlation * overlap).sum(axis=(1, 2)), _LEAST_EXCESS)


def measure_noise(series: EpochSeries) -> SeriesNoise:
    """Measure the correlation of the noise in up to four places of a field.

    What all epochs share is taken out first; epochs with a large part of the weight
    are left with little of their own noise, and that of the others shows instead.
    """
    ny, nx = series.pixels.shape[1:]
    places = [(row, col) for row in _tiles(ny) for col in _tiles(nx)]
    found = [_tile_correlation(series, row, col) for row, col in places]
    return SeriesNoise(np.mean(found, axis=0))


def _tiles(size: int) -> tuple[slice, ...]:
    """Return one tile in the middle, or two where there is room."""
    if size < 2 * _TILE_PX:
        first = max(0, (size - _TILE_PX) // 2)
        return (slice(first, min(size, first + _TILE_PX)),)
    quarter = size // 4
    return tuple(
        slice(middle - _TILE_PX // 2, middle + _TILE_PX // 2)
        for middle in (quarter, size - quarter)
    )


def _tile_correlation(series: EpochSeries, rows: slice, cols: slice) -> FloatArray:
    pixels, variance, mask = (
        cube[:, rows, cols] for cube in (series.pixels, series.variance, series.mask)
    )
    weight = np.where((mask == 0) & (variance > 0.0), 1.0 / variance, 0.0)
    total = weight.sum(axis=0)
    mean = (weight * pixels).sum(axis=0) / np.maximum(total, 1e-30)
    out = []
    for i in range(len(series)):
        # The mean takes part of an epoch's own noise with it.
        left = variance[i] - 1.0 / np.maximum(total, 1e-30)
        alone = left <= 0.02 * variance[i]
        bad = (weight[i] == 0.0) | alone
        sigma = np.sqrt(np.where(bad, 1.0, left))
        bad |= _light(np.where(bad, 0.0, (pixels[i] - mean) / sigma))
        residue = Difference(
            pixels=np.where(bad, 0.0, pixels[i] - mean).astype(np.float32),
            variance=np.where(bad, 1.0, left).astype(np.float32),
            mask=bad.astype(np.uint16),
            fwhm_px=float(series.fwhm_px[i]),
            noise_ratio=float(series.noise_ratio[i]),
            method="kernel",
            compact=(),
            star_scatter=0.0,
            star_shift_px=0.0,
        )
        if (~bad).mean() < 0.05:
            out.append(_white(float(series.noise_ratio[i])))
            continue
        middle = 0.5 * np.array(residue.pixels.shape)
        out.append(noise_correlation(residue, middle[1], middle[0]))
    return np.array(out)


def _light(z: FloatArray) -> BoolArray:
    """Return where echoes, or what is left of stars, shine: they are no noise."""
    box = ndimage.uniform_filter(z, _BOX_PX)
    bright = np.abs(box) > _LIGHT_SIGMA * robust_sigma(box, center=0.0)
    near = ndimage.uniform_filter(bright.astype(np.float32), 2 * _RIM_PX + 1)
    # Pure noise stands out too, in patches smaller than these.
    return near * (2 * _RIM_PX + 1) ** 2 > _LEAST_SHARE * _BOX_PX**2


def _white(ratio: float) -> FloatArray:
    """Return the correlation of white noise, of the size noise_correlation gives."""
    correlation = np.zeros((15, 15))
    correlation[7, 7] = ratio**2
    return correlation
