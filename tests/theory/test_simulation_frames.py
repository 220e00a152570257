"""Simulated frames hold the flux, the noise and the coordinates they claim."""

import numpy as np
import pytest
from scipy import ndimage, stats

from latelight.simulation import _kernels
from latelight.simulation.conditions import random_camera, random_exposure
from latelight.simulation.detector import cosmic_rays, read_out, true_variance
from latelight.simulation.exposures import BadColumn, Camera
from latelight.simulation.objects import paint_stars
from latelight.simulation.optics import MoffatField, convolve_sampled, random_psf
from latelight.simulation.outburst import LIGHT_CURVES, LightCurve
from latelight.simulation.scenes import random_pair

pytestmark = pytest.mark.theory


def an_exposure(shape=(200, 200), seed=1):
    rng = np.random.default_rng(seed)
    camera = random_camera(rng, shape, many_columns=False)
    return random_exposure(
        rng, camera, ra=10.0, dec=-5.0, mjd=60_000.0, fwhm_px=3.0, field="TEST"
    )


def test_a_star_holds_the_counts_its_magnitude_says():
    """counts = 10^(0.4 (zero point - magnitude)); the painted wings hold 99.8 %."""
    exposure = an_exposure()
    for mag in (14.0, 18.0, 22.0):
        counts = exposure.counts(np.array([mag]))
        assert counts[0] == pytest.approx(10.0 ** (0.4 * (exposure.zero_point - mag)))
        image = np.zeros(exposure.camera.shape)
        paint_stars(image, exposure, np.array([93.3]), np.array([101.8]), counts)
        assert image.sum() == pytest.approx(counts[0], rel=2e-3)


def test_a_star_is_where_it_should_be_and_as_wide():
    exposure = an_exposure()
    image = np.zeros(exposure.camera.shape)
    paint_stars(image, exposure, np.array([93.3]), np.array([101.8]), np.array([1e5]))
    y, x = np.mgrid[0:200, 0:200]
    assert (image * x).sum() / image.sum() == pytest.approx(93.3, abs=5e-3)
    assert (image * y).sum() / image.sum() == pytest.approx(101.8, abs=5e-3)


def test_moffat_reaches_half_its_peak_at_half_the_fwhm():
    psf = MoffatField(3.0, 3.2, (0.0,) * 5, (0.0,) * 3, (0.0,) * 3, (100, 100))
    stamp = psf.stamp(50.0, 50.0, half=60, oversample=10)
    assert stamp[60, 75] / stamp[60, 60] == pytest.approx(0.5, rel=1e-9)
    assert stamp.sum() == pytest.approx(1.0)


def test_convolution_keeps_flux_and_copies_the_psf():
    psf = random_psf(np.random.default_rng(2), fwhm_px=3.0, shape=(100, 100))
    image = np.zeros((161, 161))
    image[80, 80] = 1.0
    out = convolve_sampled(image, psf, x=30.0, y=60.0, oversample=2)
    assert out.sum() == pytest.approx(1.0, abs=1e-9)
    assert np.allclose(
        out[60:101, 60:101],
        psf.stamp(30.0, 60.0, half=24, oversample=2)[4:45, 4:45],
        atol=1e-12,
    )


def test_noise_is_photons_and_read_out_and_rounding():
    """Variance of N pixels scatters by sqrt(2/N), their mean by sigma/sqrt(N)."""
    camera = Camera(shape=(400, 400))
    expected = np.full(camera.shape, 200.0)
    pixels, _ = read_out(
        expected, np.zeros(camera.shape), camera, np.random.default_rng(3)
    )
    variance = float(true_variance(expected, camera)[0, 0])
    assert variance == pytest.approx(200.0 / 1.5 + (7.0 / 1.5) ** 2 + 1.0 / 12.0)
    n = pixels.size
    assert pixels.mean() == pytest.approx(200.0, abs=4.0 * np.sqrt(variance / n))
    assert pixels.var() == pytest.approx(variance, rel=4.0 * np.sqrt(2.0 / n))


def test_bleeding_moves_charge_and_loses_none():
    electrons = np.full((60, 3), 10.0)
    electrons[30, 1] = 1000.0
    spilled = np.zeros(electrons.shape, dtype=bool)
    total = electrons.sum()
    _kernels.bleed(electrons, 100.0, spilled)
    assert electrons.max() == pytest.approx(100.0)
    assert electrons.sum() == pytest.approx(total)
    # 900 above the full well fill five pixels of room 90 up and five down.
    assert np.flatnonzero(spilled[:, 1]).tolist() == list(range(25, 36))
    assert not spilled[:, [0, 2]].any()


def test_faulty_columns_lose_and_add():
    camera = Camera(shape=(50, 20), bad_columns=(BadColumn(7, 10, 50, 0.0, 3000.0),))
    expected = np.full(camera.shape, 200.0)
    pixels, _ = read_out(
        expected, np.zeros(camera.shape), camera, np.random.default_rng(3)
    )
    assert np.all(pixels[10:, 7] == 3000)
    assert np.all(pixels[:10, 7] < 400)


def test_cosmic_rays_are_sharper_than_the_psf_and_of_many_lengths():
    hits = cosmic_rays(np.random.default_rng(4), shape=(512, 512), count=300)
    labels, n = ndimage.label(hits > 30.0, np.ones((3, 3)))
    sizes = np.bincount(labels.ravel())[1:]
    assert n > 200
    assert np.percentile(sizes, 90) > 3 * np.percentile(sizes, 10)
    # The brightest pixel of a point-like hit holds far more than a star's 7 %.
    shares = [
        hits[labels == i].max() / hits[labels == i].sum()
        for i in np.flatnonzero(sizes <= 6) + 1
    ]
    assert np.median(shares) > 0.3


@pytest.mark.parametrize("shape", LIGHT_CURVES)
def test_fluence_over_peak_is_the_duration(shape):
    curve = LightCurve(shape, 80.0, 0.1)
    light = curve.sampled(0.5)
    assert light.max() == pytest.approx(1.0, abs=5e-3)
    assert light[0] == 0.0
    assert np.trapezoid(light, dx=0.5) == pytest.approx(80.0, rel=5e-3)
    assert curve.cumulative(0.5)[-1] * 365.25 == pytest.approx(80.0, rel=5e-3)


def test_the_true_map_carries_every_star_onto_itself():
    truth = random_pair(8, size=320).truth
    stars = truth.science.stars
    x, y = truth.science_to_template(stars.x, stars.y)
    assert np.abs(x - truth.template.stars.x).max() < 1e-6
    assert np.abs(y - truth.template.stars.y).max() < 1e-6
    steady = ~stars.variable
    ratio = stars.counts[steady] / truth.template.stars.counts[steady]
    assert ratio == pytest.approx(truth.scale, rel=1e-12)


def test_the_frame_scatters_about_its_expectation_as_its_variance_says():
    """Pulls of pixels free of hits and flaws: mean 0, variance 1, within 4 sigma."""
    pair = random_pair(9, size=320, kind="nuisances")
    t = pair.truth.science
    good = ~(t.cosmic_rays | t.saturated | t.bad_columns)
    # Hits below a sigma are not in the mask: leave their neighbourhood out too.
    good &= pair.science.pixels < t.expected + 4.0 * np.sqrt(t.variance)
    pull = ((pair.science.pixels - t.expected) / np.sqrt(t.variance))[good]
    clipped = stats.truncnorm(-np.inf, 4.0)
    n = pull.size
    assert abs(pull.mean() - clipped.mean()) < 4.0 / np.sqrt(n) + 2e-3
    assert pull.var() == pytest.approx(clipped.var(), rel=4.0 * np.sqrt(2.0 / n) + 5e-3)
