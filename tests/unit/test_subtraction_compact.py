"""Compact residuals: what is one, and what is a piece of an arc."""

import numpy as np
import pytest

from latelight.masks import MaskBit
from latelight.subtraction.compact import find_compact, mask_compact

SHAPE = (300, 300)
FWHM = 4.0
SIGMA = FWHM / 2.3548
NOISE = 10.0


def point(y, x, flux, sigma=SIGMA):
    yy, xx = np.indices(SHAPE)
    profile = np.exp(-0.5 * ((yy - y) ** 2 + (xx - x) ** 2) / sigma**2)
    return flux * profile / (2 * np.pi * sigma**2)


def find(signal, rng, *, model=None, mask=None):
    """Find compacts in a signal with white noise of 10 counts."""
    mask = np.zeros(SHAPE, np.uint16) if mask is None else mask
    model = np.zeros(SHAPE) if model is None else model
    return find_compact(
        (signal + rng.normal(0.0, NOISE, SHAPE)).astype(np.float32),
        np.full(SHAPE, NOISE**2, np.float32),
        mask,
        model.astype(np.float32),
        fwhm_px=FWHM,
        sigma=5.0,
    )


@pytest.fixture
def quiet():
    """A generator of noise that is nought."""

    class Quiet:
        def normal(self, mean, sigma, shape):
            return np.full(shape, mean)

    return Quiet()


@pytest.mark.parametrize("sign", [1, -1])
def test_a_variable_is_found_on_its_star(rng, sign):
    """S/N 50: placed to 0.1 px."""
    star = point(120.3, 88.7, 20000.0)

    (found,) = find(sign * point(120.3, 88.7, 3000.0), rng, model=star)

    assert (found.x, found.y) == pytest.approx((88.7, 120.3), abs=0.15)
    assert np.sign(found.snr) == sign
    assert found.kind == "variable"
    assert found.fwhm_px == pytest.approx(FWHM, abs=1.0)


def test_a_mover_is_new_at_both_its_places(rng):
    """Nothing in the template where it came, nothing left where it was."""
    came, left = point(100, 100, 3000.0), point(180, 190, 3000.0)

    found = find(came - left, rng, model=left)

    assert sorted((f.kind, np.sign(f.snr)) for f in found) == [
        ("new", -1.0),
        ("new", 1.0),
    ]


def test_two_variables_side_by_side_are_not_a_line(rng):
    """Three FWHM apart."""
    signal = point(150, 140, 4000.0) + point(150, 152, 9000.0)

    assert len(find(signal, rng)) == 2


@pytest.mark.parametrize("angle", [0.0, 33.0, 90.0])
def test_a_smooth_ridge_is_left_alone(rng, angle):
    y, x = np.indices(SHAPE) - 150.0
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    along, across = x * c + y * s, y * c - x * s
    ridge = 60.0 * np.exp(-0.5 * (across / 2.0) ** 2 - 0.5 * (along / 40.0) ** 2)

    assert find(ridge, rng) == ()


def test_the_knots_of_a_clumpy_arc_are_left_alone(rng):
    """PSF-sized knots every 10 px along an arc, twice as bright as the arc itself."""
    angle = np.arange(-0.5, 0.5, 10.0 / 150.0)
    yy, xx = np.indices(SHAPE)
    radius = np.hypot(yy - 250.0, xx - 150.0)
    inside = np.abs(np.arctan2(xx - 150.0, 250.0 - yy)) < 0.5
    arc = 40.0 * np.exp(-0.5 * ((radius - 150.0) / SIGMA) ** 2) * inside
    for a in angle:
        arc += point(250 - 150 * np.cos(a), 150 + 150 * np.sin(a), 1500.0)

    assert find(arc, rng) == ()


def test_a_wide_blob_is_left_alone(rng):
    assert find(point(150, 150, 60000.0, sigma=4 * SIGMA), rng) == ()


def test_a_faint_source_twice_as_wide_as_the_psf_is_left_alone(quiet):
    """S/N 9 in the PSF's filter, 1.25 times that in one of twice the width; it does
    fall off all round, so without noise its width alone gives it away."""
    assert find(point(150, 150, 1300.0, sigma=2 * SIGMA), quiet) == ()


def test_the_streak_of_a_fast_mover_is_listed_and_covered(rng):
    """Drawn out over 6 px, a FWHM and a half."""
    streak = sum(point(150 + t, 150 + t, 900.0) for t in np.linspace(-2.1, 2.1, 9))

    found = find(streak, rng)

    mask = mask_compact(
        np.zeros(SHAPE, np.uint16), found, fwhm_px=FWHM, radius_fwhm=1.5
    )
    assert len(found) == 1
    assert (mask[streak > NOISE] != 0).all()


def test_masked_places_give_nothing(rng):
    mask = np.zeros(SHAPE, np.uint16)
    mask[145:156, 145:156] = MaskBit.SATURATED

    assert find(point(150, 150, 1e5), rng, mask=mask) == ()


def test_pure_noise_gives_nothing(rng):
    """9e4 pixels / (4 pi s^2) trials at two-sided 5 sigma: 0.001 expected."""
    assert find(np.zeros(SHAPE), rng) == ()


def test_the_masked_circle_grows_with_the_signal(rng):
    """600 counts are S/N 10 (one sigma is 10 sqrt(4 pi) s = 60): radius 1.73 FWHM."""
    found = find(point(80, 80, 600.0) + point(200, 200, 60000.0), rng)

    mask = mask_compact(
        np.full(SHAPE, 2, np.uint16), found, fwhm_px=FWHM, radius_fwhm=1.5
    )

    marked = (mask & MaskBit.COMPACT) != 0
    faint, bright = marked[:140].sum(), marked[140:].sum()
    assert faint == pytest.approx(np.pi * (1.73 * FWHM) ** 2, rel=0.2)
    assert bright > 2 * faint
    assert (mask & 2).all()
    assert mask[200, 200] == 2 | MaskBit.COMPACT
