"""Which frame is the sharper, and what the other needs so that nothing is sharpened."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft

from latelight.records import FloatArray, SpatialPsf

__all__ = ["Roles", "assign_roles", "smoothing_needed"]

_GRID = 64
# Below this transfer a PSF holds noise rather than stars.
_LEAST_TRANSFER = 0.2
_PLACES = (0.1, 0.5, 0.9)


@dataclass(frozen=True, slots=True)
class Roles:
    """Who is convolved, and the smoothing the other one gets first.

    Attributes
    ----------
    convolve_template : bool
        True when the template gets the fitted kernel, False for the science.
    smoothing_px : float
        Sigma of the Gaussian given to the other frame first, pixels.
    """

    convolve_template: bool
    smoothing_px: float


def assign_roles(
    science: SpatialPsf, template: SpatialPsf, *, sharpening: float
) -> Roles:
    """Choose the frame to convolve.

    A kernel that takes PSF A to PSF B has the transform ``B^ / A^``, near the
    middle ``exp(-2 pi^2 f.C.f)`` with C the excess of B's second moments over A's.
    Along a direction in which C is negative it would sharpen, and amplify noise; a
    Gaussian of sigma s given to B first adds s^2 to C.  The smallest s that leaves
    nothing to sharpen anywhere is found for both choices, and the smaller wins.

    Parameters
    ----------
    science, template : SpatialPsf
        The PSFs, on one frame shape.
    sharpening : float
        Share of the PSF's variance that a kernel may take away without being said
        to sharpen: PSFs are not known better.
    """
    template_needs, science_needs = smoothing_needed(
        science, template, sharpening=sharpening
    )
    # At equal need (equal seeing) the science frame is left alone.
    choice = template_needs <= science_needs
    return Roles(
        convolve_template=choice,
        smoothing_px=template_needs if choice else science_needs,
    )


def smoothing_needed(
    science: SpatialPsf, template: SpatialPsf, *, sharpening: float
) -> tuple[float, float]:
    """Return the smoothing needed to convolve the template, and the science frame.

    Parameters
    ----------
    science, template, sharpening
        As for :func:`assign_roles`.

    Returns
    -------
    template, science : float
        Sigma of the least Gaussian that the other frame must be given first so that
        nothing is sharpened when this one is convolved, pixels.
    """
    needed = [0.0, 0.0]
    ny, nx = science.kernel.shape
    for fy in _PLACES:
        for fx in _PLACES:
            where = (fx * (nx - 1), fy * (ny - 1))
            excess, size = _excess_moments(
                science.kernel.at(*where), template.kernel.at(*where)
            )
            low, high = np.linalg.eigvalsh(excess)
            for choice, least in enumerate((low, -high)):
                if least < -sharpening * size:
                    needed[choice] = max(needed[choice], -least)
    return float(np.sqrt(needed[0])), float(np.sqrt(needed[1]))


def _transfer(psf: FloatArray) -> FloatArray:
    folded = np.zeros((_GRID, _GRID))
    y, x = np.indices(psf.shape)
    np.add.at(folded, (y % _GRID, x % _GRID), psf)
    return np.abs(fft.rfft2(folded)) / psf.sum()


def _excess_moments(broad: FloatArray, sharp: FloatArray) -> tuple[FloatArray, float]:
    """Return the 2x2 excess of second moments, and the mean variance of the two.

    From a weighted fit of the log ratio of the transfers: unlike moments summed
    over pixels, it does not hang on the noise of the far wings.
    """
    fy = np.broadcast_to(fft.fftfreq(_GRID)[:, None], (_GRID, _GRID // 2 + 1))
    fx = np.broadcast_to(fft.rfftfreq(_GRID)[None, :], fy.shape)
    b, s = _transfer(broad), _transfer(sharp)
    used = (b > _LEAST_TRANSFER) & (s > _LEAST_TRANSFER) & (fx**2 + fy**2 > 0)
    weight = np.minimum(b, s)[used]
    terms = -2.0 * np.pi**2 * np.stack([fx**2, 2.0 * fx * fy, fy**2], axis=-1)[used]
    logs = np.stack(
        [np.log(b[used] / s[used]), 0.5 * np.log(b[used] * s[used])], axis=-1
    )
    weighted = terms * weight[:, None] ** 2
    fitted = np.linalg.solve(weighted.T @ terms, weighted.T @ logs)
    (xx, xy, yy), size = fitted[:, 0], 0.5 * (fitted[0, 1] + fitted[2, 1])
    return np.array([[xx, xy], [xy, yy]]), float(size)
