"""Diffraction spikes: the same directions round every saturated star."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from latelight.frames.flags._kernels import ray_profiles, stamp_discs
from latelight.frames.flags.saturation import SaturatedStars
from latelight.masks import MaskBit
from latelight.records import FloatArray, IntArray, MaskArray, PixelArray

__all__ = ["flag_spikes"]

RAYS = 360
MAX_STARS = 40
MIN_RADIUS = 2.0
REACH_PX = 240
# Spikes stand out of the mean ray by this many robust sigma, over all stars.
N_SIGMA = 6.0
WINDOW = 45
# A ray with fewer samples than this tells nothing.
MIN_SAMPLES = 10
# A spike is followed in steps this long, until its mean falls below this.
STEP_PX = 8
END_SIGMA = 0.5
HALF_WIDTH_PX = 2.5


def flag_spikes(
    pixels: PixelArray,
    sky: PixelArray,
    mask: MaskArray,
    *,
    stars: SaturatedStars,
    core_factor: float,
    sigma: float,
) -> None:
    """Flag diffraction spikes of saturated stars in ``mask`` (SPIKE), in place.

    The heights on rays round all saturated stars are averaged; spikes are the
    rays that stand out, the same for every star of a frame.  Each is then followed
    outwards on each star for as long as it can be seen.

    Parameters
    ----------
    pixels, sky : float32 array, shape (ny, nx)
        Counts, and the smooth sky.
    mask : uint16 array, shape (ny, nx)
        Changed in place; non-zero pixels are not looked at.
    stars : SaturatedStars
        Of this frame.
    core_factor : float
        Radius of the flagged cores in radii of the saturated area.
    sigma : float
        Noise of the blank sky, counts.
    """
    chosen = np.flatnonzero(stars.radius >= MIN_RADIUS)[:MAX_STARS]
    if chosen.size == 0:
        return
    sampled = []
    for k in chosen:
        start = core_factor * stars.radius[k] + 2.0
        radii = start + np.arange(REACH_PX, dtype=float)
        rays = np.empty((RAYS, REACH_PX))
        ray_profiles(pixels, sky, mask, stars.y[k], stars.x[k], radii, rays)
        sampled.append((radii, _above_mean_ray(rays) / sigma))
    angles = _spike_angles([rays for _, rays in sampled])
    for k, (radii, rays) in zip(chosen, sampled, strict=True):
        for angle in angles:
            length = _length(rays, angle)
            if length == 0:
                continue
            direction = 2.0 * np.pi * angle / RAYS
            # From inside the core on: the first pixels out are spike too.
            along = np.arange(0.0, radii[0] + length)
            stamp_discs(
                np.rint(stars.y[k] + along * np.sin(direction)).astype(np.int64),
                np.rint(stars.x[k] + along * np.cos(direction)).astype(np.int64),
                np.full(along.size, HALF_WIDTH_PX),
                int(MaskBit.SPIKE),
                mask,
            )


def _above_mean_ray(rays: FloatArray) -> FloatArray:
    """Take the median over all angles off each radius; NaN where masked."""
    middle = np.full(rays.shape[1], np.nan)
    seen = np.isfinite(rays).any(axis=0)
    middle[seen] = np.nanmedian(rays[:, seen], axis=0)
    above: FloatArray = rays - middle[None, :]
    return above


def _spike_angles(stars: list[FloatArray]) -> IntArray:
    """Return the rays that stand out on the mean star."""
    near = REACH_PX // 6
    inner = np.concatenate([rays[:, :near] for rays in stars], axis=1)
    # Each sample is pulled in, so that no single neighbour makes a spike.
    seen = np.isfinite(inner)
    total = np.where(seen, np.clip(inner, -4.0, 4.0), 0.0).sum(axis=1)
    profile = total / np.maximum(seen.sum(axis=1), 1)
    known = seen.sum(axis=1) >= MIN_SAMPLES
    profile = ndimage.uniform_filter1d(profile, 3, mode="wrap")
    # Spikes are narrow: lopsided haloes and neighbours are wider than WINDOW rays.
    profile -= ndimage.median_filter(profile, size=WINDOW, mode="wrap")
    scatter = 1.4826 * float(np.median(np.abs(profile)))
    limit = N_SIGMA * max(scatter, 0.05)
    # A spike is a peak with one like it on the other side, if that is in the frame.
    peak = profile == ndimage.maximum_filter1d(profile, 15, mode="wrap")
    beyond = ndimage.maximum_filter1d(profile, 5, mode="wrap") > 0.5 * limit
    return np.flatnonzero(
        known & peak & (profile > limit) & np.roll(beyond | ~known, RAYS // 2)
    )


def _length(rays: FloatArray, angle: int) -> int:
    """Return how far a spike can be followed on one star, pixels."""
    rays = np.nan_to_num(rays[[(angle - 1) % RAYS, angle, (angle + 1) % RAYS]])
    beside = rays.max(axis=0)
    steps = beside[: REACH_PX // STEP_PX * STEP_PX].reshape(-1, STEP_PX).mean(axis=1)
    # The largest of three noisy samples averages 0.85 sigma on its own.
    seen = steps - 0.85 > END_SIGMA
    ends = np.flatnonzero(~(seen[:-1] | seen[1:]))
    return int((ends[0] if ends.size else seen.size) * STEP_PX)
