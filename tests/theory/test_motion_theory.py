"""Motion against closed forms and the statistics of many draws."""

import numpy as np
import pytest
from scipy import ndimage, stats

from latelight.motion.bend import along_trace, bent_trace, measure_bend
from latelight.motion.measure import measure_motion
from latelight.motion.settings import MotionSettings
from latelight.motion.shapes import TAILS, modified_gaussian, standard_shape
from latelight.motion.strip import cut_strip, mean_profile, noise_correlation
from latelight.records import ArcTrace, Difference
from latelight.sky import wrap_180

pytestmark = pytest.mark.theory


@pytest.mark.parametrize("tail", [0.0, 0.01, 0.5, 2.0, 20.0])
def test_moments_of_the_modified_gaussian(tail):
    """Area 1, mean -t, variance s**2 + t**2: sums over independent parts add."""
    x = np.linspace(-400.0, 40.0, 440_001)
    f = modified_gaussian(x, 1.5, tail)
    mean = np.trapezoid(x * f, x)
    assert np.trapezoid(f, x) == pytest.approx(1.0, abs=1e-6)
    assert mean == pytest.approx(-tail, abs=1e-5)
    variance = np.trapezoid((x - mean) ** 2 * f, x)
    assert variance == pytest.approx(1.5**2 + tail**2, rel=1e-4)


def test_modified_gaussian_is_the_convolution():
    """A Gaussian convolved with exp(x / t) / t for x < 0, by sums."""
    step = 0.005
    x = np.arange(-60.0, 60.0, step)
    decay = np.where(x < 0, np.exp(np.minimum(x, 0) / 3.0) / 3.0, 0.0)
    gauss = stats.norm.pdf(x, scale=1.2)
    summed = np.convolve(gauss, decay, mode="same") * step
    exact = modified_gaussian(x, 1.2, 3.0)
    # The exponential's edge falls between two steps: first order in the step.
    np.testing.assert_allclose(summed, exact, atol=step * exact.max())


@pytest.mark.parametrize("tail", TAILS)
def test_standard_shapes_have_unit_width_and_peak_at_zero(tail):
    shape = standard_shape(tail)
    x = np.linspace(-3.0, 3.0, 6001)
    height = shape.at(x, 1.0, 1)
    above = x[height >= 0.5]
    assert height.max() == pytest.approx(1.0, abs=1e-4)
    assert x[np.argmax(height)] == pytest.approx(0.0, abs=0.011)
    assert above[-1] - above[0] == pytest.approx(1.0, abs=0.01)
    # The tail is behind: less light in front of the peak than behind it.
    assert height[x > 0].sum() <= height[x < 0].sum() * (1 + 1e-6)
    np.testing.assert_allclose(shape.at(-x, 1.0, -1), height)


def noise_difference(rng, sigma, size=260):
    """White noise plus equal noise convolved by a Gaussian, as in a difference."""
    noise, variance = rng.normal(size=(size, size)), 1.0
    if sigma:
        other = rng.normal(size=(size, size))
        noise = noise + ndimage.gaussian_filter(other, sigma, mode="wrap")
        variance += 1.0 / (4.0 * np.pi * sigma**2)
    return Difference(
        pixels=noise.astype(np.float32),
        variance=np.full((size, size), variance, np.float32),
        mask=np.zeros((size, size), np.uint16),
        fwhm_px=4.0,
        noise_ratio=1.0,
        method="kernel",
        compact=(),
        star_scatter=0.0,
        star_shift_px=0.0,
    )


def straight_trace(angle, middle=129.5, length=100):
    """A straight line across the frame; the normals at ``angle``."""
    s = np.arange(length) - 0.5 * (length - 1)
    c, d = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    return ArcTrace(middle - s * d, middle + s * c, np.full(length, float(angle)))


@pytest.mark.parametrize("sigma", [0.0, 1.5])
@pytest.mark.parametrize("angle", [7.0, 33.0])
def test_profiles_of_noise_are_as_noisy_as_they_say(rng, sigma, angle):
    """Noise correlated by convolution and interpolation, whitened by its inverse.

    z' C^-1 z of m values with two free background terms has the mean m - 2 and the
    variance 2 (m - 2).  A lobe fitted to noise has a height over its error of unit
    variance, +- sqrt(2 / n) for n profiles.  Within 4 sigma of n = 60 profiles, and
    8 % more: the correlation is measured, summed over 200 lags of 0.5 % each.
    """
    sums, heights = [], []
    for _ in range(60):
        difference = noise_difference(rng, sigma)
        strip = cut_strip(difference, straight_trace(angle), reach=24, sign=1)
        profile = mean_profile(
            strip,
            noise_correlation(difference, 129.5, 129.5),
            normal_angle=angle,
            width_px=6.0,
        )
        free = profile.values.size - 2
        weighted = profile.precision @ profile.values
        sums.append(profile.values @ weighted / free)
        lobe = standard_shape(1.2).at(profile.offsets, 6.0, 1)
        heights.append(lobe @ weighted / np.sqrt(lobe @ profile.precision @ lobe))
    n = len(sums)
    assert np.mean(sums) == pytest.approx(1.0, abs=4 * np.sqrt(2 / free / n) + 0.08)
    assert np.mean(np.square(heights)) == pytest.approx(
        1.0, abs=4 * np.sqrt(2 / n) + 0.08
    )


def test_noise_correlation_of_a_convolved_frame(rng):
    """White noise plus a convolved frame's: (delta + G) / (1 + 1 / (4 pi s**2)).

    ``G = exp(-d**2 / (4 s**2)) / (4 pi s**2)`` is the correlation of white noise
    convolved by a Gaussian of sigma s.
    """
    sigma = 1.5
    mean = np.mean(
        [noise_correlation(noise_difference(rng, sigma), 130, 130) for _ in range(6)],
        axis=0,
    )
    lag = np.arange(-7, 8)
    blurred = np.exp(-np.add.outer(lag**2, lag**2) / (4 * sigma**2))
    blurred /= 4 * np.pi * sigma**2
    exact = (blurred + (blurred == blurred.max())) / (1 + blurred.max())
    # 6 boxes of 220**2 pixels: 0.002 a lag, and 4 sigma of it; the clipping of
    # pixels beyond 4 sigma takes 0.1 % of the variance.
    near = np.hypot.outer(lag, lag) <= 4
    np.testing.assert_allclose(mean[near], exact[near], atol=0.009)


def test_bend_of_a_noise_free_ridge_is_recovered():
    """A drawn ridge u = 0.7 + 0.05 s + 0.0004 s**2 / 2, without noise."""
    s = np.arange(-50.0, 51.0)
    offsets = np.arange(-25.0, 26.0)
    model = np.exp(-0.5 * (offsets / 2.5) ** 2)
    ridge = 0.7 + 0.05 * s + 0.5 * 4e-4 * s**2
    values = np.exp(-0.5 * ((offsets[:, None] - ridge) / 2.5) ** 2)
    from latelight.motion.strip import Strip

    strip = Strip(offsets, values, np.full(values.shape, 100.0))
    bend = measure_bend(strip, s, model, excess=1.0, max_slope=0.2)
    # Segments of 6 px are not followed within: a tenth of a pixel over the arc.
    assert bend.slope == pytest.approx(0.05, abs=0.004)
    assert bend.offset == pytest.approx(0.7, abs=0.1)
    assert bend.bend == pytest.approx(4e-4, rel=0.3)
    # Light even over 101 px.
    assert bend.length == pytest.approx(100.0, abs=5.0)


@pytest.mark.parametrize("running", [1, -1])
def test_bent_trace_follows_the_correction(running):
    """Moved points lie at the offset; the new normal is square to the new line."""
    trace = straight_trace(40.0)
    trace = ArcTrace(trace.x[::running], trace.y[::running], trace.normal_angle)
    from latelight.motion.bend import Bend

    bent = bent_trace(trace, Bend(1.5, 0.1, 0.0, 0.0, 0.0, 100.0))
    s = along_trace(trace)
    move = np.hypot(bent.x - trace.x, bent.y - trace.y)
    np.testing.assert_allclose(move, np.abs(1.5 + 0.1 * s), atol=1e-9)
    tangent = np.degrees(np.arctan2(bent.y[-1] - bent.y[0], bent.x[-1] - bent.x[0]))
    square = wrap_180(tangent - bent.normal_angle)
    np.testing.assert_allclose(np.abs(square), 90.0, atol=1e-6)


@pytest.mark.parametrize(
    ("snr", "shifts", "blurred"), [(30, (8, 22), 0.0), (15, (10, 22), 1.2)]
)
def test_errors_are_honest(moving_ridge, rng, snr, shifts, blurred):
    """Shift and direction pulls over 60 draws have a robust width near 1.

    The robust width of n normal values has the error 1.17 / sqrt(n); 3 sigma of
    it below 1.  The errors also cover patchy dust, which is absent here, so
    pulls are narrower than 1: down to 0.35 is accepted (direction) and 0.45.
    """
    turns, moves, senses = [], [], []
    n = 60
    for i in range(n):
        shift, angle = rng.uniform(*shifts), rng.uniform(0, 360)
        later = ("science", "template")[i % 2]
        difference, arc = moving_ridge(
            rng,
            snr=snr,
            shift=shift,
            angle=angle,
            later=later,
            ratio=float(np.exp(rng.normal(0, 0.3))),
            tail=rng.uniform(0.5, 4.0),
            radius=rng.uniform(200, 1500),
            blurred=blurred,
        )
        m = measure_motion(difference, arc, later=later, settings=MotionSettings())
        turn = float(wrap_180(m.direction_angle - angle))
        senses.append(abs(turn) < 90)
        turns.append(((turn + 90) % 180 - 90) / m.direction_angle_err)
        if m.lobes == 2:
            moves.append((m.shift_px - shift) / m.shift_err_px)
    width = 1.17 / np.sqrt(n)
    for pulls, least in ((turns, 0.35), (moves, 0.45)):
        robust = stats.median_abs_deviation(pulls, scale="normal")
        assert least - 3 * 0.5 * width < robust < 1 + 3 * width
    assert len(moves) > 0.8 * n
    assert np.mean(senses) >= 0.95


def test_odds_of_the_sense_are_honest(moving_ridge, rng):
    """Where the odds are said to be poor, wrong senses come; where high, none.

    The number right among 60 faint pairs must agree with the sum of the claimed
    probabilities within 3.5 sigma of the binomial.
    """
    claimed, right = [], []
    for _ in range(60):
        angle = rng.uniform(0, 360)
        difference, arc = moving_ridge(
            rng, snr=9, shift=rng.uniform(6, 18), angle=angle, tail=3.0
        )
        m = measure_motion(difference, arc, later="science", settings=MotionSettings())
        claimed.append(1.0 / (1.0 + 10.0**-m.sense_odds))
        right.append(abs(wrap_180(m.direction_angle - angle)) < 90)
    claimed = np.array(claimed)
    spread = np.sqrt((claimed * (1 - claimed)).sum() + 1.0)
    assert abs(np.sum(right) - claimed.sum()) < 3.5 * spread
