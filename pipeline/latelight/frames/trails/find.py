"""Find straight trails, down to those too faint to be seen in any one pixel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from latelight.frames.trails._kernels import (
    across_profile,
    best_line,
    line_sum,
    line_transform,
)
from latelight.frames.trails.squares import binned, halved, pulled_in, without_stars
from latelight.records import BoolArray, FloatArray, MaskArray, PixelArray

__all__ = ["Trail", "find_trails", "trail_mask"]

# Lines are summed on an image binned to at most this many squares a side.
SQUARES = 512
# ... or twice as many, for frames larger than this, whose trails would drown.
LARGE_PX = 2560
MAX_TRAILS = 12
# Over shorter lines than this, in pixels, chance and crowding line stars up.
MIN_LENGTH_PX = 256.0
# Bright trails are sought with stars only pulled in, which line up so easily that a
# trail must be this significant; faint ones with stars taken out.
BRIGHT_SIGMA = 10.0
# A trail is bright all along: its median is near its mean, and its dimmer quarter
# of PIECES pieces not far below.
EVEN_MEDIAN = 0.6
PIECES = 8
EVEN = 0.5
# The unbinned profile across must show this share of the sum's significance.
CONFIRMED = 0.7
# Width of the alternative to a trail, in PSF widths.
WIDE = 3.0
BRILLIANT_SIGMA = 3.0
# Wings this high, in sigma of a pixel, would still sum up to a false arc.
WING_SIGMA = 0.05
MAX_HALF_WIDTH_PX = 40


@dataclass(frozen=True, slots=True)
class Trail:
    """One straight trail.

    Attributes
    ----------
    y0, x0, y1, x1 : float
        Its ends, pixels.
    half_width : float
        To where its wings sink into the noise, pixels.
    snr : float
        Summed significance.
    """

    y0: float
    x0: float
    y1: float
    x1: float
    half_width: float
    snr: float

    def ends(self, size: int = 1) -> FloatArray:
        """Return y0, x0, y1, x1 on the frame binned by a size."""
        return (np.array([self.y0, self.x0, self.y1, self.x1]) + 0.5) / size - 0.5


@dataclass(frozen=True, slots=True)
class _Frame:
    """What the width of a trail is measured on."""

    pixels: PixelArray
    sky: PixelArray
    mask: MaskArray
    sigma: float
    fwhm: float


def find_trails(
    pixels: PixelArray,
    sky: PixelArray,
    mask: MaskArray,
    *,
    sigma: float,
    fwhm: float,
    n_sigma: float,
    min_length: float,
) -> tuple[Trail, ...]:
    """Find straight, even, narrow trails that cross a good part of the frame.

    Echoes are shorter, or bent, or wider than the PSF.

    Parameters
    ----------
    pixels, sky : float32 array, shape (ny, nx)
        Counts, and the smooth sky.
    mask : uint16 array, shape (ny, nx)
        Non-zero pixels are left out.
    sigma : float
        Noise of the blank sky, counts.
    fwhm : float
        Width of the sharpest stars, pixels.
    n_sigma : float
        Least summed significance.
    min_length : float
        Least length, as a fraction of the frame's shorter side.

    Returns
    -------
    tuple of Trail
        In the order found, bright ones first.
    """
    longest = max(pixels.shape)
    squares = SQUARES if longest <= LARGE_PX else 2 * SQUARES
    fine = max(2, -(-longest // squares))
    image = binned(pixels, sky, mask, sigma, fine)
    frame = _Frame(pixels, sky, mask, sigma, fwhm)
    coarse = halved(image)
    bright = _search(
        coarse, pulled_in(coarse), frame, 2 * fine, BRIGHT_SIGMA, min_length
    )
    for trail in bright:
        _blot(image, trail.ends(fine), trail.half_width / fine + 1.0)
    faint = _search(image, without_stars(image), frame, fine, n_sigma, min_length)
    return bright + faint


def trail_mask(trails: tuple[Trail, ...], *, shape: tuple[int, int]) -> BoolArray:
    """Mark the pixels under trails, shape (ny, nx)."""
    marked = np.ones(shape, dtype=np.float32)
    for trail in trails:
        _blot(marked, trail.ends(), trail.half_width)
    under: BoolArray = marked == 0.0
    return under


def _search(
    raw: PixelArray,
    image: PixelArray,
    frame: _Frame,
    size: int,
    least: float,
    min_length: float,
) -> tuple[Trail, ...]:
    """Take the best line again and again until none is significant."""
    shortest = max(min_length * min(image.shape), MIN_LENGTH_PX / size)
    trails: list[Trail] = []
    for _ in range(MAX_TRAILS):
        line = _best(image, shortest, least)
        if line is None:
            break
        trail = _refine(line, raw, image, frame, size, shortest)
        # What was looked at is taken out, or it would be found again.
        if trail is None:
            _blot(image, line[1], 1.5)
            continue
        trails.append(trail)
        _blot(image, trail.ends(size), trail.half_width / size + 1.0)
    return tuple(trails)


def _best(
    image: PixelArray, shortest: float, n_sigma: float
) -> tuple[float, FloatArray] | None:
    """Return significance and ends (y0, x0, y1, x1) of the best line, if any."""
    found: list[tuple[float, FloatArray]] = []
    samples: list[FloatArray] = []
    for turned in (False, True):
        source = np.ascontiguousarray(image.T) if turned else image
        for mirrored in (False, True):
            view = np.ascontiguousarray(source[:, ::-1]) if mirrored else source
            snr, ends, scores = _best_one_way(view, shortest)
            samples.append(scores)
            if mirrored:
                ends = ends * [1, -1, 1, -1] + [0, view.shape[1] - 1] * 2
            found.append((snr, ends[[1, 0, 3, 2]] if turned else ends))
    scores = np.append(np.concatenate(samples), 0.0)
    # Left-over structure makes sums scatter more than noise does.
    scatter = 1.4826 * np.median(np.abs(scores - np.median(scores)))
    snr, ends = max(found, key=lambda line: line[0])
    snr /= max(float(scatter), 1.0)
    return (snr, ends) if snr >= n_sigma else None


def _best_one_way(
    image: PixelArray, shortest: float
) -> tuple[float, FloatArray, FloatArray]:
    """Return the best line of one quarter of all directions."""
    ny, nx = image.shape
    padded = 1 << max(ny - 1, 1).bit_length()
    buffers = (np.empty((padded, nx + padded), dtype=np.float32) for _ in range(2))
    sums = line_transform(image, padded, *buffers)
    samples, best = np.empty(20000), np.zeros(4)
    taken = best_line(sums, ny, nx, shortest, samples, best)
    snr, slope, x0, width = best
    x0 += 0.5 * (width - 1.0)
    ends = np.array([0.0, x0, ny - 1.0, x0 + slope * (ny - 1.0) / (padded - 1.0)])
    return float(snr), ends, samples[:taken]


def _refine(
    line: tuple[float, FloatArray],
    raw: PixelArray,
    image: PixelArray,
    frame: _Frame,
    size: int,
    shortest: float,
) -> Trail | None:
    """Move a line onto its ridge, cut it to length, and judge it."""
    cut = _extent(image, _shifted(image, line[1]))
    if cut is None:
        return None
    ends, values = cut
    length = float(np.hypot(ends[2] - ends[0], ends[3] - ends[1]))
    if length < shortest or _is_uneven(values):
        return None
    line_sum(raw, ends, values)
    height = float(np.median(values)) / size
    ends = (ends + 0.5) * size - 0.5
    half_width = _half_width(frame, height, ends, CONFIRMED * line[0])
    return (
        None
        if half_width is None
        else Trail(
            y0=float(ends[0]),
            x0=float(ends[1]),
            y1=float(ends[2]),
            x1=float(ends[3]),
            half_width=half_width,
            snr=line[0],
        )
    )


def _is_uneven(values: FloatArray) -> bool:
    """Whether a line's sum comes from a few bright places, as with stars."""
    seen = values[values != 0.0]
    if seen.size < 2 * PIECES:
        return True
    level = float(seen.mean())
    pieces = [float(piece.mean()) for piece in np.array_split(seen, PIECES)]
    dim = float(np.quantile(pieces, 0.25)) < EVEN * level
    return dim or float(np.median(seen)) < EVEN_MEDIAN * level


def _shifted(image: PixelArray, ends: FloatArray) -> FloatArray:
    """Shift both ends across the line to where the sum along it is largest."""
    length = np.hypot(ends[2] - ends[0], ends[3] - ends[1])
    across = np.array([ends[3] - ends[1], ends[0] - ends[2]]) / length
    values = np.empty(max(int(length), 2))
    best, best_ends = -np.inf, ends
    offsets = np.arange(-2.0, 2.01, 0.25)
    for one in offsets:
        for two in offsets:
            trial = ends + np.concatenate([one * across, two * across])
            total = line_sum(image, trial, values)
            if total > best:
                best, best_ends = total, trial
    return best_ends


def _extent(
    image: PixelArray, ends: FloatArray
) -> tuple[FloatArray, FloatArray] | None:
    """Cut a line to the stretch over which it is bright.

    For a trail of even brightness a, the likeliest stretch maximises the sum of
    (value - a / 2) over it.
    """
    n = max(int(np.hypot(ends[2] - ends[0], ends[3] - ends[1])), 2)
    values = np.empty(n)
    line_sum(image, ends, values)
    y = ends[0] + (np.arange(n) + 0.5) / n * (ends[2] - ends[0])
    x = ends[1] + (np.arange(n) + 0.5) / n * (ends[3] - ends[1])
    inside = (y >= 0) & (y < image.shape[0]) & (x >= 0) & (x < image.shape[1])
    if inside.sum() < PIECES:
        return None
    first, last = np.flatnonzero(inside)[[0, -1]]
    for _ in range(4):
        level = values[first : last + 1].mean()
        gain = np.concatenate(
            [[0.0], np.cumsum(np.where(inside, values - level / 2, 0))]
        )
        lowest = np.minimum.accumulate(gain)
        stop = int(np.argmax(gain - lowest))
        start = int(np.argmin(gain[: stop + 1]))
        if stop - start < PIECES:
            return None
        first, last = start, stop - 1
    step = (ends[2:] - ends[:2]) / n
    cut = np.concatenate([ends[:2] + first * step, ends[:2] + (last + 1) * step])
    return cut, values[first : last + 1].copy()


def _half_width(
    frame: _Frame, height: float, ends: FloatArray, n_sigma: float
) -> float | None:
    """Return how far a trail's wings reach; None if it is none after all.

    It is none where its profile is not significant, or where a Gaussian WIDE times
    the PSF's width fits better than the PSF itself, unless it is brilliant: aircraft
    are.
    """
    profile = np.empty(2 * MAX_HALF_WIDTH_PX + 1)
    fwhm = frame.fwhm
    across_profile(
        frame.pixels,
        frame.sky,
        frame.mask,
        frame.sigma,
        max(3.0, 4.0 * height),
        ends,
        profile,
    )
    offset = np.abs(np.arange(profile.size) - MAX_HALF_WIDTH_PX)
    profile -= np.median(profile[offset > MAX_HALF_WIDTH_PX // 2])
    noise = 1.0 / np.sqrt(np.hypot(ends[2] - ends[0], ends[3] - ends[1]))
    narrow, wide = (
        float(profile @ shape / np.linalg.norm(shape)) / noise
        for shape in (
            np.exp(-2.7726 * (offset / width) ** 2) for width in (fwhm, WIDE * fwhm)
        )
    )
    if height < BRILLIANT_SIGMA and (wide > narrow or narrow < n_sigma):
        return None
    # Wings are averaged over both sides and three offsets, and end in the noise.
    folded = 0.5 * (profile[MAX_HALF_WIDTH_PX:] + profile[MAX_HALF_WIDTH_PX::-1])
    smooth = np.append(ndimage.uniform_filter1d(folded, 3, mode="nearest"), -np.inf)
    end = float(np.argmax(smooth < max(2.0 * noise, WING_SIGMA)))
    return min(max(end, 1.2 * fwhm) + 1.0, float(MAX_HALF_WIDTH_PX))


def _blot(image: PixelArray, ends: FloatArray, half_width: float) -> None:
    """Set to zero what lies within a distance of a stretch of line, in place."""
    y0, x0, y1, x1 = ends
    ny, nx = image.shape
    length = float(np.hypot(y1 - y0, x1 - x0))
    uy, ux = (y1 - y0) / length, (x1 - x0) / length
    for row in range(
        max(int(min(y0, y1) - half_width), 0),
        min(int(np.ceil(max(y0, y1) + half_width)) + 1, ny),
    ):
        # On this row the line's neighbourhood is one run of columns.
        if abs(uy) > 0.05:
            centre = x0 + (row - y0) * ux / uy
            reach = half_width / abs(uy)
            first = max(int(np.ceil(centre - reach)), 0)
            last = min(int(np.floor(centre + reach)) + 1, nx)
        else:
            first, last = 0, nx
        if last <= first:
            continue
        cols = np.arange(first, last)
        along = (row - y0) * uy + (cols - x0) * ux
        across = np.abs((row - y0) * ux - (cols - x0) * uy)
        near = (across <= half_width) & (along >= -half_width)
        image[row, first:last][near & (along <= length + half_width)] = 0.0
