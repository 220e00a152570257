"""Many templates brought to one PSF."""

import numpy as np
import pytest

from latelight.matching.layers import smooth
from latelight.matching.match import match_pair, smoothing_for
from latelight.matching.settings import MatchingSettings

SETTINGS = MatchingSettings()


def arguments(pair):
    return {
        "science_stars": pair.science_stars,
        "template_stars": pair.template_stars,
        "alignment": pair.alignment,
        "settings": SETTINGS,
    }


def needed(pair):
    return smoothing_for(pair.science, pair.template, **arguments(pair))


def test_a_sharper_template_needs_no_smoothing(star_pair, rng):
    assert needed(star_pair(rng=rng)) == 0.0


def test_a_broader_template_needs_what_is_missing(star_pair, rng):
    """The Gaussian that takes sigma 1.4 to 1.8 has sqrt(1.8^2 - 1.4^2)."""
    pair = star_pair(rng=rng, science_sigma=1.4, template_sigma=1.8)
    assert needed(pair) == pytest.approx(np.sqrt(1.8**2 - 1.4**2), rel=0.03)


def test_the_template_is_convolved_when_told(star_pair, rng):
    pair = star_pair(rng=rng, science_sigma=1.6, template_sigma=1.65)
    free = match_pair(pair.science, pair.template, **arguments(pair))
    told = match_pair(
        pair.science, pair.template, **arguments(pair), convolve="template"
    )
    assert free.convolved == "science"
    assert told.convolved == "template"
    assert told.smoothing_px == 0.0
    np.testing.assert_allclose(told.science.pixels, pair.science.pixels, rtol=1e-5)


def test_templates_matched_to_a_smoothed_frame_have_its_psf(star_pair, rng):
    pair = star_pair(rng=rng, science_sigma=1.6, template_sigma=1.8, scale=1.5)
    target = smooth(pair.science, needed(pair))
    made = match_pair(target, pair.template, **arguments(pair), convolve="template")
    good = (made.template.mask | target.mask) == 0
    noise = np.sqrt(made.template.variance + target.variance)
    pulls = ((target.pixels - made.template.pixels) / noise)[good]
    assert np.std(pulls) == pytest.approx(1.0, abs=0.1)
    assert made.scale == pytest.approx(1.5, rel=5e-3)
    assert made.template.noise_power.mean() == pytest.approx(1.0)


def test_smoothing_by_nothing_changes_nothing(star_pair):
    plane = star_pair(4).science
    assert smooth(plane, 0.0) is plane


def test_smoothing_keeps_the_sky_and_the_light(star_pair):
    plane = star_pair(9, noise=1.0).science
    made = smooth(plane, 1.5)
    assert np.median(made.pixels) == pytest.approx(np.median(plane.pixels), abs=0.5)
    inside = np.s_[8:-8, 8:-8]
    assert made.pixels[inside].sum() == pytest.approx(
        plane.pixels[inside].sum(), rel=1e-3
    )
