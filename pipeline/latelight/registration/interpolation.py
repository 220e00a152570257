"""Interpolation kernels: the weights of eight pixels for every sub-pixel phase.

Lanczos kernels (Duchon 1979, J. Appl. Meteorol. 18, 1016,
doi:10.1175/1520-0450(1979)018<1016:LFIOAT>2.0.CO;2) are windowed sincs: they do
not reproduce a slope (4 lobes move it by up to 0.015 px) and so leave some 0.3 %
of the peak of any star, however broad.  Least-squares weights (Rybicki & Press
1992, ApJ 398, 169, doi:10.1086/171845) have the smallest mean square error for
stars of about the widths they are made for.  Largest error in one axis, in units
of the peak, for Gaussian stars at all phases (computed):

============== ======= ======= ======= ======= =======
FWHM, px          1.8     2.5     3.0     4.0     6.0
============== ======= ======= ======= ======= =======
lanczos3         0.052  0.0110  0.0070  0.0046  0.0034
lanczos4         0.048  0.0072  0.0037  0.0027  0.0021
least-squares    0.046  0.0047  0.0015  0.0008  0.0007
============== ======= ======= ======= ======= =======
"""

from __future__ import annotations

import numpy as np

from latelight.records import FloatArray, PixelArray

__all__ = ["AFTER", "BEFORE", "PHASES", "TAPS", "kernel_weights"]

# Positions rounded to 1/4096 px: an error of 0.00007 px rms.
PHASES = 4096
TAPS, BEFORE, AFTER = 8, 3, 4
_LOBES = {"lanczos3": 3, "lanczos4": 4}
# Widths (FWHM, px) the least-squares weights are made for: narrower ones would
# cost the broad stars, and no eight pixels can carry stars below 2 px.
_STAR_FWHM_PX = (2.5, 3.5)


def kernel_weights(interpolation: str) -> PixelArray:
    """Return the taps of a kernel for every sub-pixel phase.

    Parameters
    ----------
    interpolation : {"least-squares", "lanczos4", "lanczos3"}
        The kernel.

    Returns
    -------
    float32 array, shape (4097, 8)
        Row p: weights of the pixels at -3 ... 4 from the floor of a position
        whose fraction is p / 4096; each row sums to 1, so that a constant stays
        one.
    """
    fraction = np.arange(PHASES + 1)[:, None] / PHASES
    distance = np.arange(-BEFORE, AFTER + 1)[None, :] - fraction
    if interpolation in _LOBES:
        taps = _lanczos(distance, _LOBES[interpolation])
    else:
        taps = _least_squares(distance)
    return taps.astype(np.float32)


def _lanczos(distance: FloatArray, lobes: int) -> FloatArray:
    taps = np.sinc(distance) * np.sinc(distance / lobes)
    taps[np.abs(distance) >= lobes] = 0.0
    return taps / taps.sum(axis=1, keepdims=True)


def _least_squares(distance: FloatArray) -> FloatArray:
    """Weights of least mean square error that keep constants and slopes exactly.

    With C the autocorrelation of the signal, here of Gaussian stars, they solve
    ``sum_j C(x_i - x_j) w_j + a + b d_i = C(d_i)``, ``sum w = 1``, ``sum w d = 0``.
    """
    pixel = np.arange(float(TAPS))
    count = distance.shape[0]
    matrix = np.zeros((count, TAPS + 2, TAPS + 2))
    matrix[:, :TAPS, :TAPS] = _autocorrelation(pixel[:, None] - pixel[None, :])
    matrix[:, :TAPS, TAPS] = matrix[:, TAPS, :TAPS] = 1.0
    matrix[:, :TAPS, TAPS + 1] = matrix[:, TAPS + 1, :TAPS] = distance
    right = np.zeros((count, TAPS + 2, 1))
    right[:, :TAPS, 0] = _autocorrelation(distance)
    right[:, TAPS] = 1.0
    return np.linalg.solve(matrix, right)[:, :TAPS, 0].astype(float)


def _autocorrelation(lag: FloatArray) -> FloatArray:
    """Of Gaussian stars: Gaussians wider by the square root of 2."""
    sigmas = [fwhm / (2.0 * np.sqrt(2.0 * np.log(2.0))) for fwhm in _STAR_FWHM_PX]
    total = np.zeros(lag.shape)
    for sigma in sigmas:
        total += np.exp(-(lag**2) / (4.0 * sigma**2))
    return total
