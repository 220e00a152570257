"""The subtraction stage against closed forms."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.records import MatchedPair, Plane, SpatialKernel, SpatialPsf, StarList
from latelight.subtraction.difference import subtract
from latelight.subtraction.proper import subtract_proper
from latelight.subtraction.proper_filters import (
    corrected_score,
    origin_transform,
    proper_filters,
)
from latelight.subtraction.settings import SubtractionSettings
from latelight.subtraction.star_noise import fit_star_noise

pytestmark = pytest.mark.theory


def gaussian(sigma, size=41):
    step = np.arange(size) - size // 2
    image = np.exp(-0.5 * (step[:, None] ** 2 + step**2) / sigma**2)
    return image / image.sum()


def filters(size, *, s_new=2.0, s_reference=1.5, sigma_new=10.0, sigma_reference=5.0):
    return proper_filters(
        origin_transform(gaussian(s_new), size),
        origin_transform(gaussian(s_reference), size),
        new_sigma=sigma_new,
        reference_sigma=sigma_reference,
        new_flux=1.0,
        reference_flux=1.0,
    )


def apply(made, new, reference):
    spectrum = made.new * np.fft.rfft2(new) - made.reference * np.fft.rfft2(reference)
    return np.fft.irfft2(spectrum, new.shape)


def no_stars(shape):
    none = np.empty(0)
    return StarList(
        *[none] * 8,
        saturated=none.astype(bool),
        clean=none.astype(bool),
        sky=np.zeros(shape, np.float32),
        fwhm_px=3.5,
    )


def matched_pair(science, template, variance, *, model=None, fwhm_px=3.5):
    shape = science.shape
    mask = np.zeros(shape, np.uint16)
    half = np.full(shape, variance / 2, np.float32)
    model = np.zeros(shape) if model is None else model
    return MatchedPair(
        science=Plane(science.astype(np.float32), half, mask),
        template=Plane(template.astype(np.float32), half, mask),
        model=model.astype(np.float32),
        convolved="template",
        kernel=SpatialKernel(np.ones((1, 1, 1)), ((0, 0),), shape),
        smoothing_px=0.0,
        scale=1.0,
        scale_err=0.001,
        fwhm_px=fwhm_px,
        n_fit=10,
        n_held_out=0,
        held_out_chi2=1.0,
    )


class TestProper:
    """Zackay, Ofek & Gal-Yam 2016: section numbers and forms of the paper."""

    def test_the_difference_of_noise_is_white_with_unit_variance(self, rng):
        """|k_n|^2 sigma_n^2 + |k_r|^2 sigma_r^2 = 1 at every frequency.

        512^2 pixels: 0.14 % on the scatter, 0.002 on the correlation.
        """
        new = rng.normal(0.0, 10.0, (512, 512))
        reference = rng.normal(0.0, 5.0, (512, 512))

        d = apply(filters(512), new, reference)

        assert d.std() == pytest.approx(1.0, abs=0.01)
        assert np.mean(d[:, 1:] * d[:, :-1]) == pytest.approx(0.0, abs=0.01)
        assert np.mean(d[1:] * d[:-1]) == pytest.approx(0.0, abs=0.01)

    def test_exchanging_the_images_changes_the_sign(self, rng):
        new, reference = rng.normal(0.0, 7.0, (2, 128, 128))
        variance = np.full((128, 128), 49.0)
        there, back = (
            filters(128),
            filters(
                128, s_new=1.5, s_reference=2.0, sigma_new=5.0, sigma_reference=10.0
            ),
        )
        quiet = {
            "new_variance": variance,
            "reference_variance": variance,
            "new_shift_px": 0.0,
            "reference_shift_px": 0.0,
        }

        one, one_corrected = corrected_score(new, reference, there, **quiet)
        two, two_corrected = corrected_score(reference, new, back, **quiet)

        assert np.abs(one + two).max() < 1e-10
        assert np.abs(one_corrected + two_corrected).max() < 1e-10

    def test_delta_psfs_give_the_plain_difference(self, rng):
        """D = (N - R) / sqrt(sigma_n^2 + sigma_r^2)."""
        new, reference = rng.normal(0.0, 10.0, (2, 64, 64))
        delta = np.zeros((5, 5))
        delta[2, 2] = 1.0
        made = proper_filters(
            origin_transform(delta, 64),
            origin_transform(delta, 64),
            new_sigma=10.0,
            reference_sigma=5.0,
            new_flux=1.0,
            reference_flux=1.0,
        )

        d = apply(made, new, reference)

        assert np.abs(d - (new - reference) / np.sqrt(125.0)).max() < 1e-9

    @pytest.mark.parametrize(
        ("s_new", "s_reference", "per_flux"),
        # f / (sqrt(100 + 25) sqrt(4 pi) 2) for equal Gaussians; for s = 2 and 1.5 the
        # mean over frequencies of |P_n|^2 |P_r|^2 / den.
        [(2.0, 2.0, 0.0126157), (2.0, 1.5, 0.0130332)],
    )
    def test_the_snr_of_a_source(self, s_new, s_reference, per_flux):
        made = filters(256, s_new=s_new, s_reference=s_reference)
        new = np.zeros((256, 256))
        new[108:149, 108:149] = 1000.0 * gaussian(s_new)

        score, corrected = corrected_score(
            new,
            np.zeros((256, 256)),
            made,
            new_variance=np.full((256, 256), 100.0),
            reference_variance=np.full((256, 256), 25.0),
            new_shift_px=0.0,
            reference_shift_px=0.0,
        )

        assert np.unravel_index(np.argmax(score), score.shape) == (128, 128)
        assert corrected[128, 128] / 1000.0 == pytest.approx(per_flux, rel=1e-4)

    def test_registration_noise_tames_a_dipole(self):
        """A star displaced by three registration errors: S_corr is 3, not 1000.

        S_N - S_R = -shift dS_N/dx, and V_ast = sigma^2 |grad S_N|^2 is a ninth of its
        square; differences over two pixels miss up to a tenth of the slope.
        """
        made = filters(128, s_reference=2.0, sigma_reference=10.0)
        step = np.arange(128) - 64.0

        def star(x):
            profile = np.exp(-0.125 * step**2), np.exp(-0.125 * (step - x) ** 2)
            return 1e7 * np.outer(*profile) / (8 * np.pi)

        flat = np.full((128, 128), 100.0)

        _, corrected = corrected_score(
            star(0.03), star(0.0), made, new_variance=flat, reference_variance=flat,
            new_shift_px=0.01, reference_shift_px=0.0,
        )  # fmt: skip

        assert 2.7 < np.abs(corrected).max() < 3.4

    def test_blocks_join_to_white_noise_and_return_an_injected_flux(self, rng):
        """A frame of several blocks, PSFs that vary: noise as predicted to 2 %, and a
        source of 5000 counts with an error of 60 (its S/N is above 80)."""
        shape = (420, 380)
        exponents = ((0, 0), (1, 0))
        science_psf, template_psf = (
            SpatialPsf(
                SpatialKernel(
                    np.stack([gaussian(s), gaussian(s) - gaussian(1.05 * s)]),
                    exponents,
                    shape,
                ),
                2.35 * s,
                50,
            )
            for s in (1.8, 1.4)
        )
        science = rng.normal(300.0, 10.0, shape)
        science[180:221, 160:201] += 5000.0 * science_psf.kernel.at(180, 200)
        template = rng.normal(150.0, 4.0, shape)
        planes = [
            Plane(
                image.astype(np.float32),
                np.full(shape, sigma**2, np.float32),
                np.zeros(shape, np.uint16),
            )
            for image, sigma in ((science, 10.0), (template, 4.0))
        ]

        difference = subtract_proper(
            *planes,
            science_psf=science_psf,
            template_psf=template_psf,
            scale=1.5,
            registration_error_px=0.0,
            stars=no_stars(shape),
            settings=SubtractionSettings(block_px=200),
        )

        (source,) = difference.compact
        assert difference.noise_ratio == pytest.approx(1.0, abs=0.02)
        assert (source.x, source.y) == pytest.approx((180.0, 200.0), abs=0.1)
        assert source.flux == pytest.approx(5000.0, abs=4 * source.flux_err + 100.0)
        assert source.kind == "new"


class TestKernelDifference:
    def test_noise_only_is_measured_as_predicted(self, rng):
        science = rng.normal(200.0, 10.0, (512, 512))

        difference = subtract(
            matched_pair(science, np.full((512, 512), 100.0), 100.0),
            stars=no_stars((512, 512)),
            settings=SubtractionSettings(),
        )

        assert difference.noise_ratio == pytest.approx(1.0, abs=0.01)
        assert difference.compact == ()

    def test_an_injected_point_source_returns_its_flux(self, rng):
        """Flux error of a PSF fit in white noise: sigma sqrt(4 pi) s = 71 counts for
        sigma 10 and s 2."""
        shape = (256, 256)
        science = rng.normal(200.0, 10.0, shape)
        science[80:121, 130:171] += 4000.0 * gaussian(2.0)

        (source,) = subtract(
            matched_pair(science, np.zeros(shape), 100.0, fwhm_px=4.70964),
            stars=no_stars(shape),
            settings=SubtractionSettings(),
        ).compact

        assert source.flux == pytest.approx(4000.0, abs=4 * 71.0)
        assert source.flux_err == pytest.approx(71.0, rel=0.05)
        assert (source.x, source.y) == pytest.approx((150.0, 100.0), abs=0.3)

    def test_an_echo_keeps_its_light(self, rng):
        """A ridge of 5 counts (half a sigma), 300 px long: the background, smooth over
        256 px, takes off less than 3 % of it."""
        shape = (768, 768)
        y, x = np.indices(shape)
        ridge = 5.0 * np.exp(-0.5 * ((y - 380 - 0.1 * x) / 4.0) ** 2)
        ridge[(x < 230) | (x > 530)] = 0.0
        noise = rng.normal(0.0, 10.0, shape)
        sky = 200.0 + 0.02 * x - 0.01 * y

        difference = subtract(
            matched_pair(sky + noise + ridge, np.zeros(shape), 100.0),
            stars=no_stars(shape),
            settings=SubtractionSettings(),
        )

        kept = np.sum((difference.pixels - noise) * ridge) / np.sum(ridge**2)
        assert kept == pytest.approx(1.0, abs=0.03)

    def test_a_misregistered_star_leaves_the_dipole_of_the_formula(self):
        """Peak residual / peak = exp(-1/2) d / s = 0.60653 d / s for d << s; it sits at
        one sigma, where pixels of a star centred on one sample it nearly fully."""
        step = np.arange(101) - 50.0
        s, d = 4.0, 0.05
        here, there = (np.exp(-0.5 * ((step - c) / s) ** 2) for c in (0.0, d))
        residual = np.outer(here, there) - np.outer(here, here)

        assert np.abs(residual).max() == pytest.approx(0.60653 * d / s, rel=0.01)


def test_star_noise_returns_the_errors_put_in(rng):
    """Residuals of 2 % of the star and 0.03 px of its gradient, 200 stars of S/N over
    1000: each coefficient is right to some 1 / sqrt(2 * 200) = 5 %, four sigma 20 %."""
    shape, s = (640, 640), 1.8
    model = np.zeros(shape)
    difference = rng.normal(0.0, 3.0, shape)
    row, col = (a.ravel() for a in np.mgrid[20:620:42, 20:620:42])
    half = 12
    step = np.arange(-half, half + 1)
    star = 3e4 * np.exp(-0.5 * (step[:, None] ** 2 + step**2) / s**2)
    slopes = np.gradient(star)
    for y, x in zip(row, col, strict=True):
        box = np.s_[y - half : y + half + 1, x - half : x + half + 1]
        model[box] += star
        error = rng.normal(size=3)
        difference[box] += 0.02 * error[0] * star + 0.03 * (
            error[1] * slopes[0] + error[2] * slopes[1]
        )
    stars = no_stars(shape)
    listed = replace(
        stars,
        x=col.astype(float),
        y=row.astype(float),
        saturated=np.zeros(row.size, dtype=bool),
    )

    scatter, shift = fit_star_noise(
        difference.astype(np.float32),
        np.full(shape, 9.0, np.float32),
        np.ones(shape, dtype=bool),
        model.astype(np.float32),
        stars=listed,
        fwhm_px=4.2,
        most=400,
    )

    assert scatter == pytest.approx(0.02, rel=0.25)
    assert shift == pytest.approx(0.03, rel=0.25)
