"""The chain a user would compose by hand from general libraries: the yardstick.

Star lists by sep, the headers' WCS through reproject's bicubic interpolation, one
kernel from the median star by photutils, one FFT convolution by astropy, ridges
by scikit-image, hysteresis and labels.  Nothing of latelight is used.

    python tests/benchmarks/hand_chain.py TEMPLATE.fits SCIENCE.fits

prints one JSON line: seconds a step and in all, and the peak memory.
"""

from __future__ import annotations

import json
import resource
import sys
import time
import warnings

import numpy as np
import sep
from astropy.convolution import convolve_fft
from astropy.io import fits
from astropy.wcs import WCS
from photutils.psf_matching import SplitCosineBellWindow, make_kernel
from reproject import reproject_interp
from skimage.filters import apply_hysteresis_threshold, sato
from skimage.measure import label, regionprops

STAMP = 12  # half-size of a star cutout, pixels


def read(path):
    """Return pixels and header of the first image."""
    with fits.open(path, memmap=False) as hdus:
        hdu = next(h for h in hdus if h.data is not None and h.data.ndim == 2)
        return np.ascontiguousarray(hdu.data.astype(np.float32)), hdu.header


def stars_of(image):
    """Return the sky-subtracted image, its noise and its stars."""
    background = sep.Background(image)
    above = image - background.back()
    stars = sep.extract(above, 5.0, err=background.globalrms)
    return above, background.globalrms, stars


def median_star(image, stars):
    """Return the median cutout of bright unsaturated stars, unit sum."""
    ny, nx = image.shape
    order = np.argsort(-stars["flux"])
    good = [
        i
        for i in order
        if stars["flag"][i] == 0
        and stars["peak"][i] < 30000
        and STAMP < stars["x"][i] < nx - STAMP - 1
        and STAMP < stars["y"][i] < ny - STAMP - 1
    ][:100]
    cutouts = []
    for i in good:
        x, y = round(stars["x"][i]), round(stars["y"][i])
        cut = image[y - STAMP : y + STAMP + 1, x - STAMP : x + STAMP + 1]
        cutouts.append(cut / cut.sum())
    psf = np.clip(np.median(cutouts, axis=0), 0, None)
    return psf / psf.sum()


def run(template_path, science_path):
    """Run the chain; return seconds a step and the number of ridges."""
    seconds, start = {}, time.perf_counter()

    def lap(name):
        nonlocal start
        now = time.perf_counter()
        seconds[name] = round(now - start, 3)
        start = now

    template, template_header = read(template_path)
    science, science_header = read(science_path)
    lap("read")
    template, _, template_stars = stars_of(template)
    science, _, science_stars = stars_of(science)
    lap("background and extraction")
    moved, footprint = reproject_interp(
        (template, WCS(template_header)),
        WCS(science_header),
        shape_out=science.shape,
        order="bicubic",
    )
    moved = np.where(footprint > 0, moved, 0.0)
    moved[~np.isfinite(moved)] = 0.0
    lap("reprojection")
    kernel = make_kernel(
        median_star(template, template_stars),
        median_star(science, science_stars),
        window=SplitCosineBellWindow(alpha=0.35, beta=0.3),
    )
    matched = convolve_fft(moved, kernel, normalize_kernel=False, allow_huge=True)
    lap("kernel and convolution")
    difference = (science - matched).astype(np.float32)
    sep_back = sep.Background(difference)
    difference -= sep_back.back()
    difference /= sep_back.globalrms
    n_ridges = 0
    for signed in (difference, -difference):
        ridges = sato(signed, sigmas=(1.5, 3, 6), black_ridges=False)
        level = 4 * np.median(np.abs(ridges))
        found = label(apply_hysteresis_threshold(ridges, level, 2 * level))
        n_ridges += sum(region.area > 30 for region in regionprops(found))
    lap("ridges")
    return seconds, n_ridges


def main():
    """Run once and print what it took."""
    warnings.simplefilter("ignore")
    sep.set_extract_pixstack(1_000_000)
    sep.set_sub_object_limit(4096)
    seconds, n_ridges = run(*sys.argv[1:3])
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
    print(
        json.dumps(
            {
                "seconds": seconds,
                "total": round(sum(seconds.values()), 3),
                "peak_gb": round(peak, 3),
                "n_ridges": int(n_ridges),
            }
        )
    )


if __name__ == "__main__":
    main()
