"""The subtraction stage: background, masks, refusals."""

from dataclasses import replace

import numpy as np
import pytest
from pydantic import ValidationError

from latelight.masks import MaskBit
from latelight.matching.match import match_pair
from latelight.matching.psf import measure_psf
from latelight.matching.settings import MatchingSettings
from latelight.records import Plane
from latelight.subtraction.background import smooth_background
from latelight.subtraction.difference import subtract
from latelight.subtraction.proper import subtract_proper
from latelight.subtraction.settings import SubtractionSettings


def matched(pair):
    return match_pair(
        pair.science,
        pair.template,
        science_stars=pair.science_stars,
        template_stars=pair.template_stars,
        alignment=pair.alignment,
        settings=MatchingSettings(),
    )


def proper(pair, *, scale=1.0, registration_error_px=0.005):
    science_psf, template_psf = (
        measure_psf(plane, x=pair.x, y=pair.y, settings=MatchingSettings())
        for plane in (pair.science, pair.template)
    )
    return subtract_proper(
        pair.science,
        pair.template,
        science_psf=science_psf,
        template_psf=template_psf,
        scale=scale,
        registration_error_px=registration_error_px,
        stars=pair.science_stars,
        settings=SubtractionSettings(),
    )


class TestBackground:
    def test_a_tilted_plane_is_followed_to_the_edge(self, rng):
        y, x = np.indices((700, 900))
        plane = (3.0 + 0.01 * x - 0.02 * y).astype(np.float32)
        noise = rng.normal(0.0, 2.0, plane.shape).astype(np.float32)

        found = smooth_background(
            plane + noise,
            np.ones(plane.shape, dtype=bool),
            mesh_px=256,
            ridge_sigma=4.0,
        )

        assert np.abs(found - plane).max() < 0.15

    def test_a_bright_ridge_does_not_lift_it(self, rng):
        image = rng.normal(0.0, 2.0, (512, 512)).astype(np.float32)
        image[240:260] += 100.0

        found = smooth_background(
            image, np.ones(image.shape, dtype=bool), mesh_px=256, ridge_sigma=4.0
        )

        assert np.abs(found).max() < 0.1

    def test_a_cell_without_good_pixels_takes_its_neighbours_level(self):
        good = np.ones((512, 512), dtype=bool)
        good[:256, :256] = False
        image = np.where(good, 7.0, -1e6).astype(np.float32)

        found = smooth_background(image, good, mesh_px=256, ridge_sigma=4.0)

        assert found == pytest.approx(7.0, abs=1e-4)

    def test_no_good_pixel_at_all_means_no_background(self):
        image = np.full((300, 300), 5.0, np.float32)

        found = smooth_background(
            image, np.zeros(image.shape, dtype=bool), mesh_px=256, ridge_sigma=4.0
        )

        assert not found.any()

    def test_a_frame_smaller_than_a_cell_gets_one_level(self):
        image = np.full((150, 120), 5.0, np.float32)

        found = smooth_background(
            image, np.ones(image.shape, dtype=bool), mesh_px=256, ridge_sigma=4.0
        )

        assert found == pytest.approx(5.0)


@pytest.mark.parametrize("method", ["kernel", "proper"])
def test_a_pair_of_equal_skies_leaves_noise(star_pair, rng, method):
    """60 stars of S/N up to 2000 and no change: no compact residual, noise right."""
    pair = star_pair(60, noise=10.0, rng=rng)

    if method == "kernel":
        difference = subtract(
            matched(pair), stars=pair.science_stars, settings=SubtractionSettings()
        )
    else:
        difference = proper(pair)

    assert difference.method == method
    assert difference.noise_ratio == pytest.approx(1.0, abs=0.03)
    assert difference.compact == ()
    worst = np.abs(difference.pixels) / np.sqrt(difference.variance)
    assert worst[20:-20, 20:-20].max() < 6.0


def test_the_variance_holds_the_star_noise(star_pair, rng):
    """V = V_S + V_T + (a M)^2 + (b |grad M|)^2, with the a and b reported."""
    pair = star_pair(60, noise=10.0, rng=rng)
    pair.science.pixels[:] = np.roll(pair.science.pixels, 1, axis=0)
    both = matched(star_pair(60, noise=10.0, rng=rng))
    both = replace(both, science=pair.science)  # a pixel off: residuals at every star

    difference = subtract(
        both, stars=pair.science_stars, settings=SubtractionSettings()
    )

    slope_y, slope_x = np.gradient(both.model)
    expected = (
        both.science.variance
        + both.template.variance
        + (difference.star_scatter * both.model) ** 2
        + difference.star_shift_px**2 * (slope_x**2 + slope_y**2)
    )
    inner = np.s_[1:-1, 1:-1]
    assert difference.star_shift_px > 0.2
    assert difference.variance[inner] == pytest.approx(expected[inner], rel=1e-4)


def test_proper_knows_the_error_of_the_registration(star_pair, rng):
    difference = proper(star_pair(30, noise=10.0, rng=rng), registration_error_px=0.4)

    assert difference.star_shift_px >= 0.4


def test_masked_pixels_are_zero_and_keep_their_bits(star_pair, rng):
    pair = star_pair(40, noise=10.0, rng=rng)
    pair.science.mask[100:103, 50:60] = MaskBit.BAD_COLUMN

    for difference in (
        subtract(
            matched(pair), stars=pair.science_stars, settings=SubtractionSettings()
        ),
        proper(pair),
    ):
        assert (difference.mask[100:103, 50:60] & MaskBit.BAD_COLUMN).all()
        assert not difference.pixels[difference.mask != 0].any()


def test_a_changed_star_is_listed_and_masked(star_pair, rng):
    pair = star_pair(60, noise=10.0, rng=rng)
    y, x = round(pair.y[5]), round(pair.x[5])
    box = np.s_[y - 12 : y + 13, x - 12 : x + 13]
    pair.science.pixels[box] = 200 + 0.7 * (pair.science.pixels[box] - 200)

    difference = subtract(
        matched(pair), stars=pair.science_stars, settings=SubtractionSettings()
    )

    first = difference.compact[0]
    assert (first.x, first.y) == pytest.approx((pair.x[5], pair.y[5]), abs=0.5)
    assert first.kind == "variable"
    assert first.snr < -20
    assert difference.mask[y, x] & MaskBit.COMPACT


def test_inputs_are_left_alone(star_pair, rng):
    pair = matched(star_pair(30, rng=rng))
    stars = star_pair(30).science_stars
    before = [
        a.copy() for a in (pair.science.pixels, pair.science.variance, pair.model)
    ]

    subtract(pair, stars=stars, settings=SubtractionSettings())

    after = (pair.science.pixels, pair.science.variance, pair.model)
    assert all((a == b).all() for a, b in zip(before, after, strict=True))


class TestRefusals:
    def test_proper_needs_one_grid(self, star_pair):
        pair = star_pair(20, noise=1.0)
        cut = [a[:300].copy() for a in (pair.template.pixels, pair.template.variance)]
        pair.template = Plane(*cut, mask=pair.template.mask[:300])

        with pytest.raises(ValueError, match="resampled onto the science grid"):
            proper(pair)

    def test_proper_needs_a_positive_scale(self, star_pair):
        with pytest.raises(ValueError, match=r"scale must be positive, got -1\.0"):
            proper(star_pair(20, noise=1.0), scale=-1.0)

    def test_a_mesh_that_arcs_would_lift(self):
        with pytest.raises(ValidationError, match="greater than or equal to 128"):
            SubtractionSettings(background_mesh_px=32)
