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

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import fft, ndimage

from latelight.arcs._kernels import filter_rows, update_rows
from latelight.arcs.pyramid import Level
from latelight.records import FloatArray, PixelArray
from latelight.threads import n_threads, over_rows

__all__ = ["Seed", "search_level"]

_LENGTHS = (8.0, 18.0)
"""Sigma along the ridge in units of sigma across; longer arcs lose little."""
_STEPS = (0.75, 1.5, 2.75)
"""Half the distance between the lobes of a pair, units of sigma across."""
_CALIBRATION_POINTS = 5_000
"""Places whose responses calibrate a filter: their median is good to 1.7 %."""
_ROWS_WORTH_THREADS = 700
"""Fewer rows take less time than starting the threads (0.3 ms, measured)."""


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
class _Ridge:
    angle: float
    length: float


def _bank() -> list[_Ridge]:
    """Return the ridges of one level, sigma across = 1 block.

    Angles are 2/length apart: half a step off, the overlap of two such Gaussians
    is 1 / sqrt(1 + (length step / 2)^2 / 4) = 0.89.
    """
    bank = []
    for length in _LENGTHS:
        n_angles = int(np.ceil(np.pi * (length - 1.0 / length) / 2.0))
        bank += [_Ridge(np.pi * i / n_angles, length) for i in range(n_angles)]
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
    margin = int(np.ceil(max(_STEPS))) + 1
    ny, nx = level.signal.shape
    # The pad keeps one edge's wrap-around off the other.
    pad = 2 * margin + int(2.5 * max(_LENGTHS))
    shape = (fft.next_fast_len(ny + pad, True), fft.next_fast_len(nx + pad, True))
    signal = _transform(level.signal, margin, shape)
    weight = _transform(level.weight, margin, shape)
    best = np.zeros((ny, nx), np.float32)
    code = np.zeros((ny, nx), np.int16)
    bank = _bank()
    widths = []
    for index, ridge in enumerate(bank):
        response = _filtered(signal, shape, ridge, squared=False)
        power = _filtered(weight, shape, ridge, squared=True)
        widths.append(_update(best, code, response, power, margin, ridge, index))
    calibration = float(np.median([w[0] for w in widths]))
    seeds = _peaks(best, code, bank, level.bin_px, threshold)
    return seeds, (float(level.bin_px), calibration)


def _transform(image: PixelArray, margin: int, shape: tuple[int, int]) -> PixelArray:
    padded = np.zeros(shape, np.float32)
    padded[margin : margin + image.shape[0], margin : margin + image.shape[1]] = image
    return fft.rfft2(padded, workers=n_threads(), overwrite_x=True)


def _spread(kernel: Callable[[int, int], None], n_rows: int) -> None:
    """Run a kernel over rows, in threads where starting them pays."""
    if n_rows < _ROWS_WORTH_THREADS:
        kernel(0, n_rows)
    else:
        over_rows(kernel, n_rows)


def _filtered(
    spectrum: PixelArray, shape: tuple[int, int], ridge: _Ridge, *, squared: bool
) -> PixelArray:
    """Convolve with the unit-sum Gaussian ridge, or with its square."""
    half = 0.5 * (0.5 if squared else 1.0)
    across, along = half, half * ridge.length**2
    cosine, sine = np.cos(ridge.angle), np.sin(ridge.angle)
    xx = across * cosine**2 + along * sine**2
    yy = across * sine**2 + along * cosine**2
    xy = (across - along) * sine * cosine
    ky = 2.0 * np.pi * fft.fftfreq(shape[0])
    kx = 2.0 * np.pi * fft.rfftfreq(shape[1])
    product = np.empty_like(spectrum)

    def multiply(first: int, last: int) -> None:
        filter_rows(product, spectrum, ky, kx, xx, xy, yy, first, last)

    _spread(multiply, shape[0])
    image = fft.irfft2(product, s=shape, workers=n_threads(), overwrite_x=True)
    if squared:  # the square of the unit-sum Gaussian sums to 1 / (4 pi s l)
        image *= np.float32(1.0 / (4.0 * np.pi * ridge.length))
    return image


def _update(
    best: PixelArray,
    code: np.ndarray,
    response: PixelArray,
    power: PixelArray,
    margin: int,
    ridge: _Ridge,
    index: int,
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
    inner = power[margin : margin + ny, margin : margin + nx]
    stride = max(1, round(np.sqrt(ny * nx / _CALIBRATION_POINTS)))
    sample = inner[::stride, ::stride]
    lit = sample[sample > 1e-3 * sample.max(initial=0.0)]
    if lit.size == 0:
        return np.ones(1 + len(_STEPS))
    floor = 0.1 * float(np.median(lit))
    widths = _widths(response, power, margin, best.shape, steps, overlap, floor, stride)

    def update(first: int, last: int) -> None:
        update_rows(
            best,
            code,
            response,
            power,
            margin,
            steps,
            overlap,
            1.0 / widths**2,
            floor,
            index * (1 + len(_STEPS)),
            first,
            last,
        )

    _spread(update, ny)
    return widths


def _widths(
    response: PixelArray,
    power: PixelArray,
    margin: int,
    shape: tuple[int, int],
    steps: np.ndarray,
    overlap: FloatArray,
    floor: float,
    stride: int,
) -> FloatArray:
    """Return the robust sigma of each kind of response, on a sparse lattice."""

    def at(image: PixelArray, dy: int = 0, dx: int = 0) -> FloatArray:
        rows = slice(margin + dy, margin + dy + shape[0], stride)
        cols = slice(margin + dx, margin + dx + shape[1], stride)
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
    code: np.ndarray,
    bank: list[_Ridge],
    bin_px: int,
    threshold: float,
) -> list[Seed]:
    high = ndimage.maximum_filter(best, size=5, mode="constant")
    rows, cols = np.nonzero((best == high) & (best > threshold**2))
    centre = 0.5 * (bin_px - 1)
    seeds = []
    for row, col in zip(rows.tolist(), cols.tolist(), strict=True):
        ridge = bank[int(code[row, col]) // (1 + len(_STEPS))]
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
