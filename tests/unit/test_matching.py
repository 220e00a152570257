"""The matching stage: roles, masks, refusals, and what it must not do."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.errors import StageError
from latelight.masks import MaskBit
from latelight.matching.convolution import convolve, convolve_mask, gaussian_kernel
from latelight.matching.match import match_pair
from latelight.matching.psf import measure_psf
from latelight.matching.settings import MatchingSettings
from latelight.matching.sharpness import assign_roles
from latelight.matching.stars import spread_over_cells
from latelight.records import SpatialKernel, SpatialPsf
from latelight.threads import n_threads, set_threads


def match(pair, **settings):
    return match_pair(
        pair.science,
        pair.template,
        science_stars=pair.science_stars,
        template_stars=pair.template_stars,
        alignment=pair.alignment,
        settings=MatchingSettings(**settings),
    )


def gaussian_psf(sigma_x, sigma_y, angle=0.0):
    step = np.arange(-20, 21)
    x, y = np.meshgrid(step, step)
    c, s = np.cos(angle), np.sin(angle)
    image = np.exp(
        -0.5 * ((x * c + y * s) / sigma_x) ** 2 - 0.5 * ((y * c - x * s) / sigma_y) ** 2
    )
    kernel = SpatialKernel((image / image.sum())[None], ((0, 0),), (500, 500))
    return SpatialPsf(kernel, 2.35 * np.sqrt(sigma_x * sigma_y), 50)


class TestRoles:
    def test_the_sharper_frame_is_convolved(self):
        narrow, broad = gaussian_psf(1.2, 1.2), gaussian_psf(1.8, 1.8)

        assert assign_roles(broad, narrow, sharpening=0.05).convolve_template
        assert not assign_roles(narrow, broad, sharpening=0.05).convolve_template

    def test_no_smoothing_when_one_frame_is_sharper_everywhere(self):
        roles = assign_roles(
            gaussian_psf(1.8, 1.8), gaussian_psf(1.2, 1.2), sharpening=0.05
        )

        assert roles.smoothing_px == 0.0

    def test_crossed_ellipses_get_the_least_smoothing_that_helps(self):
        """Along x the science PSF lacks 1.8^2 - 1.4^2 = 1.28 px^2."""
        roles = assign_roles(
            gaussian_psf(1.4, 1.8), gaussian_psf(1.8, 1.4), sharpening=0.05
        )

        assert roles.smoothing_px == pytest.approx(np.sqrt(1.28), rel=0.01)

    def test_equal_psfs_need_nothing_and_leave_the_science_frame_alone(self):
        psf = gaussian_psf(1.5, 1.5)

        roles = assign_roles(psf, psf, sharpening=0.05)

        assert roles.convolve_template
        assert roles.smoothing_px == 0.0


class TestRefusals:
    def test_too_few_stars(self, star_pair):
        with pytest.raises(
            StageError, match=r"matching: .* at least 8 clean stars in common, got 6"
        ):
            match(star_pair(6))

    def test_too_few_stars_for_a_psf(self, star_pair):
        with pytest.raises(StageError, match="at least 5 clean unmasked stars, got 3"):
            match(star_pair(3))

    def test_exactly_the_minimum_is_enough(self, star_pair, rng):
        matched = match(star_pair(9, rng=rng), min_stars=9)

        assert matched.n_fit == 9
        assert matched.n_held_out == 0
        assert np.isnan(matched.held_out_chi2)

    def test_frames_of_two_shapes(self, star_pair):
        pair, other = star_pair(20), star_pair(20, size=300)
        pair.template = other.template

        with pytest.raises(ValueError, match=r"resampled onto the science grid"):
            match(pair)

    def test_an_image_that_is_not_the_kernels(self):
        with pytest.raises(ValueError, match=r"frame shape \(64, 64\), got \(64, 32\)"):
            convolve(
                np.zeros((64, 32), np.float32), gaussian_kernel(1.0, shape=(64, 64))
            )

    def test_psf_of_masked_stars(self, star_pair):
        pair = star_pair(20)
        plane = replace(pair.science, mask=np.full((320, 320), 16, np.uint16))

        with pytest.raises(StageError, match="got 0"):
            measure_psf(plane, x=pair.x, y=pair.y, settings=MatchingSettings())


class TestStars:
    def test_a_variable_is_clipped_and_does_not_move_the_scale(self, star_pair, rng):
        """One star in 40 half as bright would shift the mean scale by 1.3 %."""
        pair = star_pair(40, noise=5.0, rng=rng)
        faded = star_pair(1, size=320)
        y, x = round(pair.y[0]), round(pair.x[0])
        box = np.s_[y - 12 : y + 13, x - 12 : x + 13]
        pair.science.pixels[box] = 200 + 0.5 * (pair.science.pixels[box] - 200)
        del faded

        matched = match(pair)

        assert matched.scale == pytest.approx(1.0, abs=4 * matched.scale_err)
        assert matched.n_fit + matched.n_held_out < 40

    def test_the_best_star_of_every_cell_comes_first(self):
        """100 stars crowd one corner; one lies in each other quarter."""
        x = np.r_[np.linspace(0, 40, 100), 80.0, 10.0, 80.0]
        y = np.r_[np.linspace(0, 40, 100), 10.0, 80.0, 80.0]

        chosen = spread_over_cells(np.arange(103), x, y, shape=(100, 100), most=20)

        assert {0, 100, 101, 102} <= set(chosen[:4].tolist())
        assert len(chosen) == 20

    def test_stars_that_are_not_clean_in_both_frames_are_not_used(self, star_pair, rng):
        pair = star_pair(40, rng=rng)
        pair.science_stars.clean[:6] = False
        pair.template_stars.clean[4:10] = False

        matched = match(pair)

        assert matched.n_fit + matched.n_held_out <= 30

    def test_stars_held_out_are_not_fitted(self, star_pair, rng):
        matched = match(star_pair(50, rng=rng))

        assert matched.n_held_out == 10
        assert matched.n_fit <= 40


class TestMasks:
    def test_a_bad_pixel_spreads_with_the_kernel_and_keeps_its_bit(self):
        kernel = gaussian_kernel(2.0, shape=(64, 64))
        mask = np.zeros((64, 64), np.uint16)
        mask[30, 30] = MaskBit.COSMIC_RAY
        mask[30, 31] = MaskBit.DECLARED

        grown = convolve_mask(mask, kernel)

        # exp(-r^2 / 8) falls to 0.1 at 4.3 px.
        assert grown[30, 30] == MaskBit.COSMIC_RAY | MaskBit.DECLARED
        assert grown[30, 26] == MaskBit.COSMIC_RAY
        assert grown[30, 24] == 0

    def test_a_saturated_pixel_spreads_farther(self):
        """exp(-r^2 / 8) falls to 0.001 at 7.4 px."""
        kernel = gaussian_kernel(2.0, shape=(64, 64))
        mask = np.zeros((64, 64), np.uint16)
        mask[30, 30] = MaskBit.SATURATED

        grown = convolve_mask(mask, kernel)

        assert grown[30, 37] == MaskBit.SATURATED
        assert grown[30, 39] == 0

    def test_the_rim_is_flagged_where_light_is_missing(self):
        grown = convolve_mask(
            np.zeros((64, 64), np.uint16), gaussian_kernel(2.0, shape=(64, 64))
        )

        assert (grown[:4] == MaskBit.EDGE).all()
        assert (grown[8:-8, 8:-8] == 0).all()

    def test_a_cosmic_ray_in_the_template_leaves_no_hole_outside_its_mask(
        self, star_pair
    ):
        pair = star_pair(40, noise=1.0)
        clean = match(pair)
        y, x = 160, 163
        pair.template.pixels[y, x : x + 3] = 5e4
        pair.template.mask[y, x : x + 3] = MaskBit.COSMIC_RAY

        matched = match(pair)

        good = matched.template.mask == 0
        change = np.abs(matched.template.pixels - clean.template.pixels)
        assert not good[y, x + 1]
        assert change[good].max() < 0.02 * clean.model.max()


def test_inputs_are_left_alone(star_pair, rng):
    pair = star_pair(30, rng=rng)
    before = [p.copy() for p in (pair.science.pixels, pair.template.pixels)]

    match(pair)

    assert (pair.science.pixels == before[0]).all()
    assert (pair.template.pixels == before[1]).all()


def test_one_thread_and_three_give_the_same_bytes(star_pair, rng):
    pair = star_pair(40, rng=rng)
    count = n_threads()
    try:
        set_threads(1)
        one = match(pair)
        set_threads(3)
        three = match(pair)
    finally:
        set_threads(count)

    assert one.template.pixels.tobytes() == three.template.pixels.tobytes()
    assert one.template.variance.tobytes() == three.template.variance.tobytes()
