"""Significance of ridges against closed forms of the matched filter."""

import numpy as np
import pytest
from scipy.special import erf
from scipy.stats import norm

from latelight.arcs.fit import sum_along
from latelight.arcs.geometry import Circle
from latelight.arcs.lobes import find_lobes
from latelight.arcs.profiles import coarse_shapes
from latelight.arcs.pyramid import Level
from latelight.arcs.search import search_level
from latelight.arcs.settings import ArcSettings

pytestmark = pytest.mark.theory

FWHM_OF_SIGMA_1_5 = 1.5 * 2.3548 / 1.1
"""PSF whose narrowest lobe in the bank has a sigma of 1.5 px."""


def lobes_of(difference, half_length, half_height):
    shapes = coarse_shapes(
        fwhm_px=difference.fwhm_px, widest_px=12.0, n_shifts=half_height
    )
    ny, nx = difference.pixels.shape
    circle = Circle(0.5 * (nx - 1), 0.5 * (ny - 1), 0.5 * np.pi, 0.0)
    sums = sum_along(difference, circle, half_length, half_height)
    return find_lobes(sums.signal.sum(axis=0), sums.weight.sum(axis=0), shapes, reach=4)


def test_line_source(make_arc_difference):
    """S/N of a line = (I0 / sigma) sqrt(L / (2 sqrt(pi) s)) = 2.16831.

    I0 = 5 counts per px of length, sigma = 10, s = 1.5 px, L = 100 px (12 whole
    blocks, 96 px, here): the sum of
    the squared template is I0^2 L / (2 sqrt(pi) s).  Fitting a constant across
    2 h + 1 pixels as well takes 2 sqrt(pi) s / (2 h + 1) of its square away.
    The line's middle is half-way between rows, so that the lobe, tried at whole
    pixels, is half a pixel off: a factor exp(-0.5^2 / (4 s^2)).
    """
    s, h = 1.5, 50
    arc = {
        "x": 199.5,
        "y": 99.5,
        "angle": 0.5 * np.pi,
        "length": 96.0,
        "sigma": s,
        "height": 5.0 / (np.sqrt(2.0 * np.pi) * s),
    }
    difference = make_arc_difference(
        None, [arc], shape=(200, 400), fwhm_px=FWHM_OF_SIGMA_1_5
    )

    _, single = lobes_of(difference, 48.0, h)

    expected = 2.16831 * np.sqrt(96.0 / 100.0)
    expected *= np.sqrt(1.0 - 2.0 * np.sqrt(np.pi) * s / (2 * h + 1))
    expected *= np.exp(-(0.5**2) / (4.0 * s**2))
    assert np.sqrt(single.gain) == pytest.approx(expected, rel=0.01)


@pytest.mark.parametrize(
    ("separation", "gain"), [(2.0, 1.1244), (3.333, 1.3695), (6.667, 1.4142)]
)
def test_pair_gains_over_a_single_ridge(make_arc_difference, separation, gain):
    """S/N of two opposite Gaussians over one: sqrt(2 (1 - exp(-q^2 / (4 s^2)))).

    With the separation q in units of s; a pair sums to zero, so that the constant
    background costs it nothing.
    """
    s = 3.0
    arc = {
        "x": 199.5,
        "y": 100.0,
        "angle": 0.5 * np.pi,
        "length": 96.0,
        "sigma": s,
        "height": 20.0,
    }
    fwhm = s * 2.3548 / 1.1
    alone = make_arc_difference(None, [arc], shape=(201, 400), fwhm_px=fwhm)
    both = make_arc_difference(
        None, [arc | {"shift": round(separation * s)}], shape=(201, 400), fwhm_px=fwhm
    )

    _, single = lobes_of(alone, 48.0, 60)
    pair, _ = lobes_of(both, 48.0, 60)

    cost = 1.0 - 2.0 * np.sqrt(np.pi) * s / 121.0
    ratio = np.sqrt(pair.gain / (single.gain / cost))
    # The separation is rounded to a pixel: 0.02 s at most here.
    assert ratio == pytest.approx(gain, rel=0.012)


def test_coarse_responses_to_white_noise_have_unit_width(rng):
    """White noise of the stated variance: the calibration is 1.

    5000 places on a lattice, of which a filter of 1 x 8 blocks (area 4 pi x 8 =
    100) makes about 2600 independent in 512 x 512 blocks: the robust width of
    one filter is good to 1.17 / sqrt(2600) = 2.3 %, their median far better.
    """
    signal = rng.normal(size=(512, 512)).astype(np.float32)
    level = Level(2, signal, np.ones((512, 512), np.float32))

    _, (sigma, width) = search_level(level, threshold=5.0)

    assert sigma == 2.0
    assert width == pytest.approx(1.0, abs=0.023)


def test_default_threshold_allows_for_the_trials():
    """One false alarm in 1e12 trials is 7.034 sigma: norm.isf(1e-12).

    2048^2 places x 170 ridges x 19 lobe shapes x 80 shifts of a pair are 1e12
    (not independent) trials.
    """
    assert norm.isf(1e-12) == pytest.approx(7.034, abs=1e-3)
    assert ArcSettings().threshold >= 7.034


def test_line_source_with_rounded_ends():
    """A line of 100 px blurred by s = 1.5 px has sum T^2 = 18.488, S/N 2.14988.

    Along it the template fades as an error function at both ends, across it is a
    Gaussian; its sum over pixels is the product of the two sums.
    """
    x = np.arange(-90.0, 91.0)
    along = 0.5 * (
        erf((x + 50.0) / (1.5 * np.sqrt(2.0))) - erf((x - 50.0) / (1.5 * np.sqrt(2.0)))
    )
    across = np.exp(-0.5 * (x / 1.5) ** 2) / (np.sqrt(2.0 * np.pi) * 1.5)
    total = np.sum(along**2) * np.sum(across**2)

    assert total == pytest.approx(18.488, abs=1e-3)
    assert 0.5 * np.sqrt(total) == pytest.approx(2.14988, abs=1e-4)
