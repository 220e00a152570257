"""Convolve a frame with a kernel that varies over it; its noise and its mask."""

from __future__ import annotations

import numpy as np
from scipy import fft
from scipy.interpolate import make_interp_spline

from latelight.mask_growth import disc, grow_mask
from latelight.masks import MaskBit
from latelight.records import (
    FloatArray,
    MaskArray,
    PixelArray,
    SpatialKernel,
)
from latelight.threads import over_rows

__all__ = [
    "convolve",
    "convolve_mask",
    "convolve_variance",
    "convolved_power",
    "gaussian_kernel",
    "kernel_sum",
    "noise_gain",
]

# A block of this side keeps its transforms in the processor's cache.
_BLOCK = 256
# Side of the grid on which the power spectrum of noise is held.
_POWER_SIZE = 64
# Pixels whose true value is unknown and large: they spoil wherever the kernel
# gives them some 1e-4 of its peak.  The others were filled from their
# neighbours, so only the kernel's core matters.
_UNKNOWN = MaskBit.SATURATED | MaskBit.BLEED | MaskBit.SPIKE
_UNKNOWN_LIMIT = 2e-4
_FILLED_LIMIT = 0.1


def gaussian_kernel(sigma: float, *, shape: tuple[int, int]) -> SpatialKernel:
    """Return a unit-sum Gaussian of ``sigma`` pixels, the same everywhere."""
    half = int(np.ceil(4.5 * sigma))
    profile = np.exp(-0.5 * (np.arange(-half, half + 1) / sigma) ** 2)
    plane = np.outer(profile, profile)
    return SpatialKernel(plane[None] / plane.sum(), ((0, 0),), shape)


def _powers(n: int, exponent: int) -> FloatArray:
    """Return ``u**exponent`` for every pixel of an axis, u from -1 to 1."""
    return (2.0 * np.arange(n) / max(n - 1, 1) - 1.0) ** exponent


def kernel_sum(kernel: SpatialKernel) -> PixelArray:
    """Return the sum of the kernel at every pixel, shape ``kernel.shape``."""
    ny, nx = kernel.shape
    out = np.zeros(kernel.shape, dtype=np.float32)
    sums = kernel.planes.sum(axis=(1, 2))
    for total, (i, j) in zip(sums, kernel.exponents, strict=True):
        if abs(total) > 1e-12 * abs(sums[0]):
            out += np.outer(_powers(ny, j), total * _powers(nx, i)).astype(np.float32)
    return out


def convolve(image: PixelArray, kernel: SpatialKernel) -> PixelArray:
    """Convolve an image with a spatially varying kernel.

    ``out(x) = sum_d K(x; d) image(x - d)``; outside the frame the image is 0.

    Parameters
    ----------
    image : float32 array, shape (ny, nx)
        Finite everywhere.
    kernel : SpatialKernel
        Of the same frame shape.

    Returns
    -------
    float32 array, shape (ny, nx)
        The convolved image.

    Raises
    ------
    ValueError
        If the image has not the shape the kernel belongs to.

    Notes
    -----
    The kernel's polynomial is outside the convolution sum, so the frame is
    transformed once and back once for each spatial term (Alard 2000, A&AS 144,
    363, doi:10.1051/aas:2000214).  Overlap-save blocks keep the memory small and
    make the cost independent of the kernel's size.
    """
    if image.shape != kernel.shape:
        msg = f"image must have the kernel's frame shape {kernel.shape}, "
        msg += f"got {image.shape}"
        raise ValueError(msg)
    ny, nx = image.shape
    side = kernel.planes.shape[1]
    half = side // 2
    size = fft.next_fast_len(max(_BLOCK, 6 * side), real=True)
    step = size - 2 * half
    spectra = _kernel_spectra(kernel, size)
    columns = [_powers(nx, i).astype(np.float32) for i, _ in kernel.exponents]
    rows = [_powers(ny, j).astype(np.float32) for _, j in kernel.exponents]
    n_wide = -(-nx // step)
    n_high = -(-ny // step)
    out = np.empty((ny, nx), dtype=np.float32)

    def do_strips(first: int, last: int) -> None:
        for strip in range(first, last):
            top = strip * step
            high = min(step, ny - top)
            blocks = _blocks(image, top - half, size, step, half, n_wide)
            spectrum = fft.rfft2(blocks)
            total = np.zeros((high, n_wide * step), dtype=np.float32)
            for t, term in enumerate(spectra):
                part = fft.irfft2(spectrum * term, (size, size))
                part = part[:, half : half + high, half : half + step]
                column = np.zeros(n_wide * step, dtype=np.float32)
                column[:nx] = columns[t]
                part *= column.reshape(n_wide, 1, step)
                part *= rows[t][top : top + high, None]
                total.reshape(high, n_wide, step)[...] += part.transpose(1, 0, 2)
            out[top : top + high] = total[:, :nx]

    over_rows(do_strips, n_high)
    return out


def _kernel_spectra(kernel: SpatialKernel, size: int) -> np.ndarray:
    """Return the transform of each kernel plane, centred on the origin."""
    side = kernel.planes.shape[1]
    padded = np.zeros((len(kernel.planes), size, size), dtype=np.float32)
    padded[:, :side, :side] = kernel.planes
    padded = np.roll(padded, (-(side // 2), -(side // 2)), axis=(1, 2))
    return fft.rfft2(padded)


def _blocks(
    image: PixelArray, top: int, size: int, step: int, half: int, n_wide: int
) -> PixelArray:
    """Cut one strip of overlapping blocks, zeros outside the frame."""
    ny, nx = image.shape
    strip = np.zeros((size, (n_wide - 1) * step + size), dtype=np.float32)
    y0, y1 = max(top, 0), min(top + size, ny)
    x1 = min(nx, strip.shape[1] - half)
    strip[y0 - top : y1 - top, half : half + x1] = image[y0:y1, :x1]
    windows = np.lib.stride_tricks.sliding_window_view(strip, size, axis=1)
    return np.ascontiguousarray(windows[:, ::step].transpose(1, 0, 2))


def noise_gain(kernel: FloatArray, noise_power: FloatArray | None) -> float:
    """Return output over input variance for noise put through a kernel.

    ``sum_ij K_i K_j C(i - j)`` with the noise correlation C taken from its power
    spectrum G: ``sum K^2 * mean(|K^|^2 G) / mean(|K^|^2)``; ``sum K^2`` for white
    noise.

    Parameters
    ----------
    kernel : float64 array, shape (k, k)
        The kernel.
    noise_power : float64 array, shape (64, 64), or None
        Power spectrum of the noise, mean 1; None for white noise.
    """
    white = float(np.sum(kernel**2))
    if noise_power is None:
        return white
    power = _folded_power(kernel, noise_power.shape)
    return white * float(np.mean(power * noise_power) / np.mean(power))


def convolved_power(kernel: FloatArray, noise_power: FloatArray | None) -> FloatArray:
    """Return the power spectrum, mean 1, of noise put through a kernel.

    Parameters
    ----------
    kernel : float64 array, shape (k, k)
        The kernel.
    noise_power : float64 array, shape (64, 64), or None
        Power spectrum of the noise before, mean 1; None for white noise.

    Returns
    -------
    float64 array, shape (64, 64)
        ``|K^|^2 G`` on the FFT's frequency grid.
    """
    before = np.ones((_POWER_SIZE, _POWER_SIZE)) if noise_power is None else noise_power
    power = _folded_power(kernel, before.shape) * before
    return power / power.mean()


def _folded_power(kernel: FloatArray, shape: tuple[int, ...]) -> FloatArray:
    """Return |K^|^2 on a frequency grid that may be smaller than the kernel."""
    ny, nx = shape
    folded = np.zeros((ny, nx))
    y, x = np.indices(kernel.shape)
    np.add.at(folded, (y % ny, x % nx), kernel)
    return np.abs(fft.fft2(folded)) ** 2


def convolve_variance(
    variance: PixelArray,
    mask: MaskArray,
    kernel: SpatialKernel,
    *,
    noise_power: FloatArray | None,
) -> PixelArray:
    """Return the variance of one pixel after convolution.

    ``V_out = K^2 (x) V`` for white noise.  The kernel's gain follows its place
    exactly; the shape of ``K^2``, which matters only under stars, is taken from
    the middle of the frame.

    Parameters
    ----------
    variance : float32 array, shape (ny, nx)
        Variance before; the value of masked pixels is not used.
    mask : uint16 array, shape (ny, nx)
        Mask before.
    kernel : SpatialKernel
        The kernel applied.
    noise_power : float64 array, shape (64, 64), or None
        Power spectrum of the noise before, mean 1.
    """
    ny, nx = kernel.shape
    nodes_y, nodes_x = np.linspace(0, ny - 1, 7), np.linspace(0, nx - 1, 7)
    gains = np.array(
        [[noise_gain(kernel.at(x, y), noise_power) for x in nodes_x] for y in nodes_y]
    )
    square = kernel.at((nx - 1) / 2, (ny - 1) / 2) ** 2
    shape = SpatialKernel(square[None] / square.sum(), ((0, 0),), kernel.shape)
    good = mask == 0
    some = (slice(None, None, 7),) * 2
    sample = variance[some][good[some]]
    typical = np.float32(np.median(sample) if sample.size else 1.0)
    # Convolve the departure from the typical level: no fall-off at the edges.
    excess = variance - typical
    excess *= good
    out = convolve(excess, shape)
    # Rounding in the transforms must not push a variance below the sky's.
    np.maximum(out, excess.min(), out=out)
    out += typical
    out *= spline_surface(gains, nodes_y, nodes_x, shape=kernel.shape)
    return out


def spline_surface(
    values: FloatArray,
    nodes_y: FloatArray,
    nodes_x: FloatArray,
    *,
    shape: tuple[int, int],
) -> PixelArray:
    """Interpolate a small grid of values to every pixel with cubic splines."""
    along = []
    for nodes, n in zip((nodes_y, nodes_x), shape, strict=True):
        basis = make_interp_spline(nodes, np.eye(nodes.size), k=3)
        along.append(basis(np.arange(n)).astype(np.float32))
    return along[0] @ values.astype(np.float32) @ along[1].T


def convolve_mask(mask: MaskArray, kernel: SpatialKernel) -> MaskArray:
    """Grow a mask to the pixels that a bad pixel reaches through the kernel.

    Parameters
    ----------
    mask : uint16 array, shape (ny, nx)
        Mask before.
    kernel : SpatialKernel
        The kernel applied.

    Returns
    -------
    uint16 array, shape (ny, nx)
        Every bit kept, and spread to where the kernel's weight of the bad pixel
        exceeds 0.1 of its peak (0.0002 for saturated, bled or spiked pixels, whose
        true value is unknown and large); the frame's rim gets the edge bit.
    """
    ny, nx = kernel.shape
    middle = np.abs(kernel.at((nx - 1) / 2, (ny - 1) / 2))
    far, near = _reach(middle, _UNKNOWN_LIMIT), _reach(middle, _FILLED_LIMIT)
    unknown = (mask & np.uint16(_UNKNOWN)).astype(np.uint16)
    filled = mask & ~np.uint16(_UNKNOWN)
    out = grow_mask(unknown, footprint=disc(far)) | grow_mask(
        filled, footprint=disc(near)
    )
    rim = int(near)
    if rim > 0:  # light from beyond the frame is missing there
        for edge in (out[:rim], out[-rim:], out[:, :rim], out[:, -rim:]):
            edge |= np.uint16(MaskBit.EDGE)
    return out


def _reach(weights: FloatArray, limit: float) -> float:
    """Return the radius within which a kernel's weight exceeds a limit."""
    half = weights.shape[0] // 2
    step = np.arange(-half, half + 1)
    radius = np.hypot(step[:, None], step[None, :])
    # That of 98 % of such pixels: stray noise in the wings is no reach.
    strong = np.sort(radius[weights > limit * weights.max()])
    return float(strong[int(0.98 * (strong.size - 1))])
