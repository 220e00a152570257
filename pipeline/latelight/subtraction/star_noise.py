"""Noise that stars leave in a difference beyond that of their photons."""

from __future__ import annotations

import numpy as np

from latelight.records import BoolArray, FloatArray, PixelArray, StarList

__all__ = ["fit_star_noise"]

_ROUNDS = 6
_RADIUS_IN_FWHM = 2.0
# A star whose residual is this many times the typical one is a variable, not noise.
_OUTLIER = 4.0
_FEWEST = 5


def fit_star_noise(
    difference: PixelArray,
    variance: PixelArray,
    good: BoolArray,
    model: PixelArray,
    *,
    stars: StarList,
    fwhm_px: float,
    most: int,
) -> tuple[float, float]:
    """Fit ``V += (a M)^2 + (b |grad M|)^2`` to the stars' own residuals.

    An error of the kernel leaves a fraction a of the star, an error of the
    registration b pixels of its gradient.

    Parameters
    ----------
    difference, variance : float32 array, shape (ny, nx)
        The difference and its photon and read noise.
    good : bool array, shape (ny, nx)
        Unmasked pixels.
    model : float32 array, shape (ny, nx)
        M, the stars' light in it.
    stars : StarList
        Where the stars are.
    fwhm_px : float
        PSF width, pixels.
    most : int
        Most stars used, brightest first.

    Returns
    -------
    scatter, shift_px : float
        a, and b in pixels; both 0 when there are too few stars.

    Notes
    -----
    Least squares of ``D^2 - V`` on ``M^2`` and ``|grad M|^2`` with weights from the
    total variance (``var(D^2) = 2 V^2``), not negative, iterated, leaving out stars
    whose pulls are several times the median star's.
    """
    rows = np.flatnonzero(~stars.saturated)[:most]
    offsets = _disc(int(np.ceil(_RADIUS_IN_FWHM * fwhm_px)))
    ny, nx = model.shape
    row = np.rint(stars.y[rows]).astype(int)[:, None] + offsets[:, 0]
    col = np.rint(stars.x[rows]).astype(int)[:, None] + offsets[:, 1]
    inside = ((row > 0) & (col > 0) & (row < ny - 1) & (col < nx - 1)).all(axis=1)
    row, col = row[inside], col[inside]
    use = good[row, col]
    enough = use.mean(axis=1) > 0.8
    row, col, use = row[enough], col[enough], use[enough]
    if len(row) < _FEWEST:
        return 0.0, 0.0
    d2 = difference[row, col].astype(float) ** 2
    v = variance[row, col].astype(float)
    m2 = model[row, col].astype(float) ** 2
    slope_x = 0.5 * (model[row, col + 1] - model[row, col - 1]).astype(float)
    slope_y = 0.5 * (model[row + 1, col] - model[row - 1, col]).astype(float)
    g2 = slope_x**2 + slope_y**2
    a2 = b2 = 0.0
    kept = np.ones(len(row), dtype=bool)
    for _ in range(_ROUNDS):
        total = v + a2 * m2 + b2 * g2
        pulls = np.sum(use * d2 / total, axis=1) / use.sum(axis=1)
        kept = pulls <= _OUTLIER * max(1.0, float(np.median(pulls)))
        weight = (use / total**2)[kept]
        a2, b2 = _two_terms(weight, m2[kept], g2[kept], (d2 - v)[kept])
    return float(np.sqrt(a2)), float(np.sqrt(b2))


def _disc(radius: int) -> np.ndarray:
    step = np.arange(-radius, radius + 1)
    dy, dx = np.meshgrid(step, step, indexing="ij")
    inside = dy**2 + dx**2 <= radius**2
    return np.stack([dy[inside], dx[inside]], axis=1)


def _two_terms(
    weight: FloatArray, p: FloatArray, q: FloatArray, value: FloatArray
) -> tuple[float, float]:
    """Return the non-negative least squares of ``value`` on p and q."""
    pp, pq, qq = (float(np.sum(weight * a * b)) for a, b in ((p, p), (p, q), (q, q)))
    pv, qv = float(np.sum(weight * p * value)), float(np.sum(weight * q * value))
    det = pp * qq - pq * pq
    if det > 1e-12 * pp * qq:
        a, b = (qq * pv - pq * qv) / det, (pp * qv - pq * pv) / det
        if a >= 0 and b >= 0:
            return a, b
    # On the boundary: the better of the two single terms.
    alone_p = max(pv / pp, 0.0) if pp > 0 else 0.0
    alone_q = max(qv / qq, 0.0) if qq > 0 else 0.0
    return (alone_p, 0.0) if alone_p * pv >= alone_q * qv else (0.0, alone_q)
