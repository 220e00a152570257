"""Levels of the pyramid against plain sums."""

from dataclasses import replace

import numpy as np

from latelight.arcs.pyramid import build_pyramid


def plain_sums(image, size):
    """Sum blocks by way of zeros around an image in double precision."""
    rows, cols = (-(-n // size) for n in image.shape)
    full = np.zeros((rows * size, cols * size))
    full[: image.shape[0], : image.shape[1]] = image
    return full.reshape(rows, size, cols, size).sum(axis=(1, 3))


def test_levels_are_sums_over_good_pixels(rng, make_arc_difference):
    """Also of blocks that overhang; float32 sums of 16^2 terms are right to 1e-5."""
    whole = make_arc_difference(rng)
    cut = np.s_[:203, :187]
    mask = np.where(rng.random((203, 187)) < 0.1, 1, 0).astype(whole.mask.dtype)
    difference = replace(
        whole,
        pixels=whole.pixels[cut].copy(),
        variance=whole.variance[cut].copy(),
        mask=mask,
    )

    levels = build_pyramid(difference, widest_px=40.0)

    assert len(levels) > 2
    weight = np.where(mask == 0, 1.0 / difference.variance.astype(float), 0.0)
    signal = difference.pixels * weight
    for level in levels:
        expected = plain_sums(weight, level.bin_px)
        np.testing.assert_allclose(level.weight, expected, rtol=1e-5)
        # Signs cancel: the error scales with the sum of sizes.
        error = 1e-5 * plain_sums(np.abs(signal), level.bin_px)
        expected = plain_sums(signal, level.bin_px)
        assert np.all(np.abs(level.signal - expected) <= error)
