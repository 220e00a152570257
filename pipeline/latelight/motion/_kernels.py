"""Compiled loops of the motion stage: lobes against a profile."""

from __future__ import annotations

import numpy as np
from numba import njit

from latelight.records import FloatArray, IntArray

__all__ = ["lobe_products", "pair_log_p"]


@njit(nogil=True, cache=True)
def _sample(
    out: FloatArray,
    offsets: FloatArray,
    place: float,
    scale: float,
    table: FloatArray,
    x0: float,
    step: float,
) -> tuple[int, int]:
    """Write a lobe's heights; return the first and past-the-last filled row."""
    first, last = offsets.size, 0
    for i in range(offsets.size):
        t = ((offsets[i] - place) * scale - x0) / step
        height = 0.0
        if 0.0 <= t < table.size - 1:
            k = int(t)
            height = table[k] + (t - k) * (table[k + 1] - table[k])
        out[i] = height
        if height != 0.0:
            if i < first:
                first = i
            last = i + 1
    return first, last


@njit(nogil=True, cache=True)
def lobe_products(
    offsets: FloatArray,
    precision: FloatArray,
    data: FloatArray,
    tables: FloatArray,
    x0: float,
    step: float,
    widths: FloatArray,
    table_index: IntArray,
    late: FloatArray,
    early: FloatArray,
    sense: int,
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return the products of unit lobes with the data and with each other.

    Parameters
    ----------
    offsets : float64 array, shape (m,)
        Where the profile is, pixels.
    precision : float64 array, shape (m, m)
        Inverse covariance of the profile.
    data : float64 array, shape (m,)
        ``precision @ profile``.
    tables : float64 array, shape (n_tables, n)
        Standard lobes sampled at ``x0 + step * i``.
    widths, table_index : array, shape (n_shapes,)
        Full width and table of each shape.
    late, early : float64 array, shape (n_late,), (n_early,)
        Places of the lobes.
    sense : {1, -1}
        Which way the lobes move.

    Returns
    -------
    r_late, r_early, g_late, g_early : float64 array, shape (n_shapes, n_places)
        Products with the data, and of each lobe with itself.
    g_both : float64 array, shape (n_shapes, n_late, n_early)
        Products of the lobes with each other.
    """
    m, n_shapes = offsets.size, widths.size
    r_late = np.zeros((n_shapes, late.size))
    r_early = np.zeros((n_shapes, early.size))
    g_late = np.zeros((n_shapes, late.size))
    g_early = np.zeros((n_shapes, early.size))
    g_both = np.zeros((n_shapes, late.size, early.size))
    weighted = np.zeros((late.size, m))
    own = np.zeros(m)
    lobe = np.zeros(m)
    for s in range(n_shapes):
        table, scale = tables[table_index[s]], sense / widths[s]
        for j in range(late.size):
            first, last = _sample(lobe, offsets, late[j], scale, table, x0, step)
            for i in range(m):
                weighted[j, i] = 0.0
            for k in range(first, last):
                r_late[s, j] += lobe[k] * data[k]
                for i in range(m):
                    weighted[j, i] += lobe[k] * precision[k, i]
            for k in range(first, last):
                g_late[s, j] += lobe[k] * weighted[j, k]
        for j in range(early.size):
            first, last = _sample(lobe, offsets, early[j], scale, table, x0, step)
            for i in range(first, last):
                own[i] = 0.0
            for k in range(first, last):
                r_early[s, j] += lobe[k] * data[k]
                for i in range(first, last):
                    own[i] += lobe[k] * precision[k, i]
            for k in range(first, last):
                g_early[s, j] += lobe[k] * own[k]
            for i in range(late.size):
                for k in range(first, last):
                    g_both[s, i, j] += lobe[k] * weighted[i, k]
    return r_late, r_early, g_late, g_early, g_both


@njit(nogil=True, cache=True)
def pair_log_p(
    r_late: FloatArray,
    r_early: FloatArray,
    g_late: FloatArray,
    g_early: FloatArray,
    g_both: FloatArray,
    ratios: FloatArray,
    log_prior: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Return ln(probability) and best amplitude of every pair of lobes.

    Parameters
    ----------
    r_late, r_early, g_late, g_early, g_both
        From :func:`lobe_products`.
    ratios : float64 array, shape (n_ratios,)
        Early over late brightness.
    log_prior : float64 array, shape (n_shapes, n_late, n_early, n_ratios)
        ln of the prior; ``-inf`` is left alone.

    Returns
    -------
    log_p, amplitude : float64 array, same shape
        Amplitudes A have the prior A**-2: faint echoes are the commoner ones.  Its
        integral over the likelihood is 1 / (snr A).
    """
    n_shapes, n_late, n_early = g_both.shape
    log_p = np.full(log_prior.shape, -np.inf)
    amplitude = np.zeros(log_prior.shape)
    for s in range(n_shapes):
        for i in range(n_late):
            for j in range(n_early):
                for k in range(ratios.size):
                    if log_prior[s, i, j, k] == -np.inf:
                        continue
                    q = ratios[k]
                    response = r_late[s, i] - q * r_early[s, j]
                    norm = g_late[s, i] - 2.0 * q * g_both[s, i, j]
                    norm = max(norm + q * q * g_early[s, j], 1e-12)
                    if response <= 0.0:
                        continue
                    snr = response / np.sqrt(norm)
                    amplitude[s, i, j, k] = response / norm
                    log_p[s, i, j, k] = (
                        0.5 * snr * snr - np.log(max(snr, 1.0)) + log_prior[s, i, j, k]
                    )
    return log_p, amplitude
