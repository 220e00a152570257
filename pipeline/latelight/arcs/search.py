"""Coarse search: a bank of elongated ridges and ridge pairs at every place.

The response of the matched filter k at a place is ``conv(D/V, k) / sqrt(conv(1/V,
k^2))`` (Nir, Zackay & Ofek 2018, AJ 156, 229, doi:10.3847/1538-3881/aaddff, for
streaks).  Elongated Gaussians have closed forms: their square is a narrower
Gaussian, and so is the product of two of them, so that the noise of a single
ridge with negative flanks and of a pair of opposite ridges follows from one map.
Noise in a difference is correlated: every response is calibrated by its own
robust width.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from latelight.arcs._search_kernels import update_rows
from latelight.arcs.pyramid import Level
from latelight.records import FloatArray, PixelArray
from latelight.ridge_filter import Ridge, Spectrum, spread, transform
from latelight.threads import n_threads, on_each

__all__ = ["Seed", "search_level"]

CodeArray = NDArray[np.int16]

_LENGTHS = (8.0, 18.0)
"""Sigma along the ridge in units of sigma across; longer arcs lose little."""
_STEPS = (0.75, 1.5, 2.75)
"""Half the distance between the lobes of a pair, units of sigma across."""
_CALIBRATION_POINTS = 5_000
"""Places whose responses calibrate a filter: their median is good to 1.7 %."""
_MARGIN = int(np.ceil(max(_STEPS))) + 1
"""Blocks around a level that a lobe may lie in."""
_MOST_SHARES = 4
"""Shares of the bank searched side by side; each holds its own maps."""


@dataclass(frozen=True, slots=True)
class Seed:
    """A place worth a closer look.

    Attributes
    ----------
    snr : float
        Calibrated response, without sign.
    x, y : float
        Pixels of the difference.
    angle : float
        Pixel angle of the normal, radians.
    sigma_px, length_px : float
        Sigma across and along of the filter, pixels.
    """

    snr: float
    x: float
    y: float
    angle: float
    sigma_px: float
    length_px: float


@dataclass(frozen=True, slots=True)
class _Found:
    """Strongest response of a share of the bank at every place.

    ``best`` is its square, ``code`` the ridge's number in the bank, ``widths``
    the robust sigma of each single ridge.
    """

    best: PixelArray
    code: CodeArray
    widths: list[float]


def _bank() -> list[Ridge]:
    """Return the ridges of one level, sigma across = 1 block.

    Angles are 2/length apart: half a step off, the overlap of two such Gaussians
    is 1 / sqrt(1 + (length step / 2)^2 / 4) = 0.89.
    """
    bank = []
    for length in _LENGTHS:
        n_angles = int(np.ceil(np.pi * (length - 1.0 / length) / 2.0))
        bank += [Ridge(np.pi * i / n_angles, length) for i in range(n_angles)]
    return bank


def search_level(
    level: Level, *, threshold: float
) -> tuple[list[Seed], tuple[float, float]]:
    """Return the seeds of one level and its noise calibration.

    Parameters
    ----------
    level : Level
        Binned difference.
    threshold : float
        Least calibrated response, sigma.

    Returns
    -------
    seeds : list of Seed
        Local maxima, in no particular order.
    calibration : (float, float)
        Sigma across of the filters, pixels, and the median of their empirical
        widths (1 for white noise of the stated variance).
    """
    ny, nx = level.signal.shape
    # The pad keeps one edge's wrap-around off the other.
    pad = 2 * _MARGIN + int(2.5 * max(_LENGTHS))
    shape = (fft.next_fast_len(ny + pad, True), fft.next_fast_len(nx + pad, True))
    signal = transform(level.signal, margin=_MARGIN, shape=shape)
    weight = transform(level.weight, margin=_MARGIN, shape=shape)
    bank = _bank()
    n_shares = min(n_threads(), _MOST_SHARES)
    edges = [len(bank) * i // n_shares for i in range(n_shares + 1)]

    def search(share: range) -> _Found:
        return _strongest(signal, weight, bank, share, (ny, nx))

    best, code, widths = _joined(on_each(search, list(map(range, edges, edges[1:]))))
    seeds = _peaks(best, code, bank, level.bin_px, threshold)
    return seeds, (float(level.bin_px), float(np.median(widths)))


def _strongest(
    signal: Spectrum,
    weight: Spectrum,
    bank: list[Ridge],
    share: range,
    shape: tuple[int, int],
) -> _Found:
    """Search for a share of the bank."""
    best, code = np.zeros(shape, np.float32), np.zeros(shape, np.int16)
    widths = []
    for number in share:
        ridge = bank[number]
        response, power = signal.response(ridge), weight.power(ridge)
        widths.append(float(_update(best, code, response, power, ridge, number)[0]))
    return _Found(best, code, widths)


def _joined(shares: list[_Found]) -> tuple[PixelArray, CodeArray, list[float]]:
    """Join shares; of equals the earlier counts, however many shares there are."""
    best, code, widths = shares[0].best, shares[0].code, list(shares[0].widths)
    for other in shares[1:]:
        better = other.best > best
        np.copyto(code, other.code, where=better)
        np.maximum(best, other.best, out=best)
        widths += other.widths
    return best, code, widths


def _update(
    best: PixelArray,
    code: CodeArray,
    response: PixelArray,
    power: PixelArray,
    ridge: Ridge,
    number: int,
) -> FloatArray:
    direction = np.array([np.sin(ridge.angle), np.cos(ridge.angle)])
    steps = np.round(np.outer(_STEPS, direction)).astype(np.int64)
    across = steps @ direction
    along = steps @ np.array([direction[1], -direction[0]])
    # Overlap of two unit Gaussian ridges a vector apart: exp(-r^2/4) in sigmas.
    reach = np.concatenate([2.0 * across, across[-1:]])
    slip = np.concatenate([2.0 * along, along[-1:]]) / ridge.length
    overlap = np.exp(-0.25 * (reach**2 + slip**2))
    ny, nx = best.shape
    inner = power[_MARGIN : _MARGIN + ny, _MARGIN : _MARGIN + nx]
    stride = max(1, round(np.sqrt(ny * nx / _CALIBRATION_POINTS)))
    sample = inner[::stride, ::stride]
    lit = sample[sample > 1e-3 * sample.max(initial=0.0)]
    if lit.size == 0:
        return np.ones(1 + len(_STEPS))
    floor = 0.1 * float(np.median(lit))
    widths = _widths(response, power, best.shape, steps, overlap, floor, stride)

    def update(first: int, last: int) -> None:
        update_rows(
            best,
            code,
            response,
            power,
            _MARGIN,
            steps,
            overlap,
            1.0 / widths**2,
            floor,
            number,
            first,
            last,
        )

    spread(update, ny)
    return widths


def _widths(
    response: PixelArray,
    power: PixelArray,
    shape: tuple[int, int],
    steps: np.ndarray,
    overlap: FloatArray,
    floor: float,
    stride: int,
) -> FloatArray:
    """Return the robust sigma of each kind of response, on a sparse lattice."""

    def at(image: PixelArray, dy: int = 0, dx: int = 0) -> FloatArray:
        rows = slice(_MARGIN + dy, _MARGIN + dy + shape[0], stride)
        cols = slice(_MARGIN + dx, _MARGIN + dx + shape[1], stride)
        return image[rows, cols].astype(float)

    here, middle = at(power), at(response)
    good = here > floor
    values = []
    for j, (dy, dx) in enumerate(steps):
        ahead, behind = at(response, dy, dx), at(response, -dy, -dx)
        noise = at(power, dy, dx) + at(power, -dy, -dx)
        pair = np.maximum(noise - 2.0 * overlap[j] * here, floor)
        values.append((ahead - behind) / np.sqrt(pair))
    flank, far = overlap[-1], overlap[-2]
    single = here * (1.0 + 0.5 * far - flank) + 0.5 * noise * (0.5 - flank)
    rise = middle - 0.5 * (ahead + behind)
    values.insert(0, rise / np.sqrt(np.maximum(single, floor)))
    # 1.4826 x the median of |N(0, 1)| is 1.
    widths = [1.4826 * np.median(np.abs(v[good])) for v in values]
    return np.maximum(np.array(widths), 0.3)


def _peaks(
    best: PixelArray,
    code: CodeArray,
    bank: list[Ridge],
    bin_px: int,
    threshold: float,
) -> list[Seed]:
    # Highest of the 5 x 5 around, asked only where it is high enough.
    rows, cols = np.nonzero(best > threshold**2)
    around = np.pad(best, 2)
    high = best[rows, cols]
    peak = np.ones(rows.size, dtype=bool)
    for dy, dx in np.ndindex(5, 5):
        peak &= around[rows + dy, cols + dx] <= high
    rows, cols = rows[peak], cols[peak]
    centre = 0.5 * (bin_px - 1)
    seeds = []
    for row, col in zip(rows.tolist(), cols.tolist(), strict=True):
        ridge = bank[int(code[row, col])]
        seeds.append(
            Seed(
                float(np.sqrt(best[row, col])),
                col * bin_px + centre,
                row * bin_px + centre,
                ridge.angle,
                float(bin_px),
                ridge.length * bin_px,
            )
        )
    return seeds
