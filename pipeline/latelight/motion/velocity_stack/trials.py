"""Coarse search: a bank of elongated ridges, each moving at many trial speeds.

One ridge is matched to every epoch once (Nir, Zackay & Ofek 2018, AJ 156, 229,
doi:10.3847/1538-3881/aaddff, for streaks); a trial speed only shifts and adds the
results along the ridge's normal, as in stacking along trial orbits (Gladman &
Kavelaars 1997, from memory).  With the static sky free in every pixel the noise
of the sum is, for weights that vary slowly,

    sum_i q_i (1 - s_i - sum_{j != i} s_j rho_ij) / (1 - s_i),

q_i the noise of epoch i without its static sky, s_i its share of the weight and
``rho_ij = exp(-(d_i - d_j)^2 / 4)`` the overlap of two Gaussian ridges d_i - d_j
sigmas apart.  Noise is correlated: every trial is calibrated by its own robust
width.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from latelight.motion.velocity_stack._kernels import (
    compress,
    keep_best,
    sample_trial,
)
from latelight.motion.velocity_stack.levels import Level
from latelight.records import FloatArray, PixelArray
from latelight.ridge_filter import Ridge, Spectrum, transform
from latelight.statistics import MAD_TO_SIGMA
from latelight.threads import n_threads, on_each

__all__ = ["Guess", "Passage", "search_level"]

CodeArray = NDArray[np.int16]

_LENGTH = 14.0
"""Sigma along the ridge in units of sigma across."""
_LEAST_SHIFT = 3.0
"""Least distance moved over all epochs, units of sigma across: residues of stars,
which stay, are not taken for slow ridges."""
_SHIFT_STEP = 2.0
"""Step of that distance: at the first and last epoch the ridge is missed by a
quarter of it at most, which costs 6 % of their share."""
_CALIBRATION_POINTS = 4_000
"""Places whose values calibrate a trial: their median is good to 1.8 %."""
_CALIBRATED_TRIALS = 4
_MOST_SHARES = 4
"""Shares of the bank searched side by side; each holds its own maps."""


@dataclass(frozen=True, slots=True)
class Passage:
    """When the epochs were, and what each weighs.

    Attributes
    ----------
    phase : float64 array, shape (n,)
        Time of each epoch from the middle of all, in units of the whole span:
        -0.5 to 0.5.
    share : float64 array, shape (n,)
        Typical share of each epoch in the weight of a pixel.
    cap : float
        Significance up to which one epoch counts in full.
    """

    phase: FloatArray
    share: FloatArray
    cap: float

    def gains(self, shift: float) -> FloatArray:
        """Return what overlap with the other epochs leaves of each one's noise."""
        apart = shift * np.subtract.outer(self.phase, self.phase)
        overlap = np.exp(-0.25 * apart**2) @ self.share - self.share
        return 1.0 - overlap / np.maximum(1.0 - self.share, 1e-9)


@dataclass(frozen=True, slots=True)
class Guess:
    """A place, motion and width worth a closer look.

    Attributes
    ----------
    snr : float
        Calibrated significance.
    x, y : float
        Middle of the ridge at the middle of all epochs, pixels.
    angle : float
        Pixel angle of the normal, radians.
    shift_px : float
        Signed distance moved along it over all epochs, pixels.
    sigma_px : float
        Sigma across of the filter, pixels.
    """

    snr: float
    x: float
    y: float
    angle: float
    shift_px: float
    sigma_px: float


@dataclass(frozen=True, slots=True)
class _Bank:
    """Ridges (angles) and trial shifts of one level, in blocks."""

    ridges: tuple[Ridge, ...]
    shifts: FloatArray
    margin: int

    @classmethod
    def of(cls, largest: float) -> _Bank:
        """Return the bank for shifts up to the largest."""
        # Half a step off, two such Gaussians overlap to 89 %.
        n_angles = int(np.ceil(np.pi * (_LENGTH - 1.0 / _LENGTH) / 2.0))
        ridges = tuple(Ridge(np.pi * i / n_angles, _LENGTH) for i in range(n_angles))
        largest = max(largest, _LEAST_SHIFT)
        size = np.arange(_LEAST_SHIFT, largest + 0.5 * _SHIFT_STEP, _SHIFT_STEP)
        shifts = np.concatenate([-size[::-1], size])
        return cls(ridges, shifts, int(np.ceil(0.5 * size[-1])) + 1)


@dataclass(frozen=True, slots=True)
class _Found:
    """Strongest trial of a share of the bank at every place.

    ``best`` is its squared significance, ``code`` its number in the bank,
    ``widths`` the robust sigmas of the trials.
    """

    best: PixelArray
    code: CodeArray
    widths: list[float]


def search_level(
    level: Level, passage: Passage, *, largest_px: float, threshold: float
) -> tuple[list[Guess], tuple[float, float]]:
    """Return the guesses of one level and its noise calibration.

    Parameters
    ----------
    level : Level
        Binned epochs.
    passage : Passage
        Times and weights of the epochs.
    largest_px : float
        Greatest distance moved over all epochs, pixels.
    threshold : float
        Least calibrated significance, sigma.

    Returns
    -------
    guesses : list of Guess
        Local maxima, in no particular order.
    calibration : (float, float)
        Sigma across of the filters, pixels, and the median of their empirical
        widths (1 for white noise of the stated variance).
    """
    _, ny, nx = level.signal.shape
    bank = _Bank.of(largest_px / level.bin_px)
    # The pad keeps one edge's wrap-around off the other.
    pad = 2 * bank.margin + int(2.5 * _LENGTH)
    shape = (fft.next_fast_len(ny + pad, True), fft.next_fast_len(nx + pad, True))
    signal = [transform(s, margin=bank.margin, shape=shape) for s in level.signal]
    weight = [transform(w, margin=bank.margin, shape=shape) for w in level.weight]
    n_shares = min(n_threads(), _MOST_SHARES)
    edges = [len(bank.ridges) * i // n_shares for i in range(n_shares + 1)]

    def search(share: range) -> _Found:
        return _strongest(signal, weight, bank, passage, share, (ny, nx))

    found = _joined(on_each(search, list(map(range, edges, edges[1:]))))
    guesses = _peaks(found, bank, level.bin_px, threshold)
    return guesses, (float(level.bin_px), float(np.median(found.widths)))


def _strongest(
    signal: list[Spectrum],
    weight: list[Spectrum],
    bank: _Bank,
    passage: Passage,
    share: range,
    shape: tuple[int, int],
) -> _Found:
    """Search for a share of the bank's ridges."""
    best, code = np.zeros(shape, np.float32), np.zeros(shape, np.int16)
    widths: list[float] = []
    maps = (len(signal), *signal[0].shape)
    response, power = np.empty(maps, np.float32), np.empty(maps, np.float32)
    for number in share:
        ridge = bank.ridges[number]
        for i, (one, other) in enumerate(zip(signal, weight, strict=True)):
            response[i], power[i] = one.response(ridge), other.power(ridge)
        floor = _floor(power, bank.margin, shape)
        if floor <= 0.0:
            continue
        for one_response, one_power in zip(response, power, strict=True):
            _compress(one_response, one_power, passage.cap, floor / len(signal))
        widths += _stack(best, code, response, power, bank, passage, number, floor)
    return _Found(best, code, widths or [1.0])


def _floor(power: PixelArray, margin: int, shape: tuple[int, int]) -> float:
    """Return the least noise at which there is enough data to judge."""
    inner = power[:, margin : margin + shape[0] : 7, margin : margin + shape[1] : 7]
    total = inner.sum(axis=0)
    lit = total[total > 1e-3 * total.max(initial=0.0)]
    return 0.2 * float(np.median(lit)) if lit.size else 0.0


def _compress(
    response: PixelArray, power: PixelArray, cap: float, floor: float
) -> None:
    """Hold back responses above the cap, in sigmas of what they really scatter by."""
    stride = max(1, round(np.sqrt(response.size / _CALIBRATION_POINTS)))
    value = response[::stride, ::stride].astype(float)
    noise = power[::stride, ::stride].astype(float)
    lit = noise > floor
    if lit.any():
        sigma = MAD_TO_SIGMA * np.median(np.abs(value[lit] / np.sqrt(noise[lit])))
        compress(response, power, cap * max(float(sigma), 0.3), floor)


def _stack(
    best: PixelArray,
    code: CodeArray,
    response: PixelArray,
    power: PixelArray,
    bank: _Bank,
    passage: Passage,
    number: int,
    floor: float,
) -> list[float]:
    """Stack one ridge at all trial shifts; return their robust sigmas."""
    angle, shape = bank.ridges[number].angle, best.shape
    direction = np.array([np.sin(angle), np.cos(angle)])
    stride = max(1, round(np.sqrt(best.size / _CALIBRATION_POINTS)))
    values = np.empty((shape[0] // stride + 1) * (shape[1] // stride + 1))

    def plan(shift: float) -> tuple[NDArray[np.int64], FloatArray, float]:
        steps = np.round(np.outer(shift * passage.phase, direction))
        gains = passage.gains(shift)
        least = floor * float(passage.share @ gains)
        return steps.astype(np.int64), gains, least

    # Correlated noise widens trials alike: a few tell.
    n_trials = bank.shifts.size
    tested = np.unique(np.linspace(0, n_trials - 1, 2 * _CALIBRATED_TRIALS).astype(int))
    widths = []
    for j in tested:
        steps, gains, least = plan(bank.shifts[j])
        count = sample_trial(
            response, power, bank.margin, shape, steps, gains, least, stride, values
        )
        sigma = MAD_TO_SIGMA * np.median(np.abs(values[:count])) if count else 1.0
        widths.append(max(float(sigma), 0.3))
    sigma = np.interp(np.arange(n_trials), tested, widths)
    for j in range(n_trials):
        steps, gains, least = plan(bank.shifts[j])
        keep_best(
            best,
            code,
            response,
            power,
            bank.margin,
            steps,
            gains,
            1.0 / sigma[j] ** 2,
            least,
            number * n_trials + j,
        )
    return widths


def _joined(shares: list[_Found]) -> _Found:
    """Join shares; of equals the earlier counts, however many shares there are."""
    best, code, widths = shares[0].best, shares[0].code, list(shares[0].widths)
    for other in shares[1:]:
        np.copyto(code, other.code, where=other.best > best)
        np.maximum(best, other.best, out=best)
        widths += other.widths
    return _Found(best, code, widths)


def _peaks(found: _Found, bank: _Bank, bin_px: int, threshold: float) -> list[Guess]:
    """Return the highest of the 5 x 5 around, where high enough."""
    rows, cols = np.nonzero(found.best > threshold**2)
    around = np.pad(found.best, 2)
    high = found.best[rows, cols]
    peak = np.ones(rows.size, dtype=bool)
    for dy, dx in np.ndindex(5, 5):
        peak &= around[rows + dy, cols + dx] <= high
    centre = 0.5 * (bin_px - 1)
    guesses = []
    for row, col in zip(rows[peak].tolist(), cols[peak].tolist(), strict=True):
        number, trial = divmod(int(found.code[row, col]), bank.shifts.size)
        guesses.append(
            Guess(
                snr=float(np.sqrt(found.best[row, col])),
                x=col * bin_px + centre,
                y=row * bin_px + centre,
                angle=bank.ridges[number].angle,
                shift_px=float(bank.shifts[trial]) * bin_px,
                sigma_px=float(bin_px),
            )
        )
    return guesses
