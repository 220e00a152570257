"""Tracks against closed forms and the statistics of many draws."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from latelight.motion.settings import MotionSettings
from latelight.motion.tracks.build import build_tracks
from latelight.motion.tracks.lobe import Lobe
from latelight.motion.tracks.path import PathLaw
from latelight.motion.tracks.settings import TrackSettings
from latelight.sky import wrap_180

pytestmark = pytest.mark.theory

# Even motion over even dust: what is left are the errors of the noise alone.
EVEN = TrackSettings(pull=0.0, roll_px=0.0, dust_contrast=0.01)
SMOOTH = MotionSettings(texture=0.0, relief_px=0.0, ratio_scatter=0.05)


def one_track(series, seeds, settings=EVEN, motion=SMOOTH):
    tracks = build_tracks(series, seeds, settings=settings, motion=motion)
    assert len(tracks) == 1
    return tracks[0]


@pytest.mark.parametrize("template", [None, 2])
@pytest.mark.parametrize(("angle", "tail"), [(0.0, 0.0), (33.0, 2.5), (200.0, 4.0)])
def test_noise_free_ridge_is_recovered(ridge_series, angle, tail, template):
    """An exact ridge gives its speed to 1e-3 and its direction to 0.05 degrees.

    A template that shows the ridge itself, taken from every epoch, changes nothing:
    the sky is free.
    """
    ridge = {"angle": angle, "tail": tail, "sigma": 2.4}
    series = ridge_series.draw(None, [ridge], noise=0.01, template=template)
    seed = ridge_series.seed_of(series, ridge, turn=2.0, off=1.0, speed_px_yr=18.0)
    track = one_track(series, [seed])
    assert track.verdict == "track"
    assert track.speed_px_yr == pytest.approx(20.0, rel=1e-3)
    assert wrap_180(track.direction_angle - angle) == pytest.approx(0.0, abs=0.05)
    assert track.mjd == pytest.approx(60000.0)
    # The middle of the ridge at time 0 is the middle of the frame.
    normal = np.radians(angle)
    off = (track.x - 89.5) * np.cos(normal) + (track.y - 89.5) * np.sin(normal)
    assert off == pytest.approx(0.0, abs=0.15)  # the crest is found to 0.1 px
    offsets = [point.offset_px for point in track.points]
    np.testing.assert_allclose(
        offsets, 20.0 * np.array([-1, -0.4, 0.1, 0.5, 1]), atol=0.06
    )


def test_error_of_the_speed_is_that_of_the_fisher_information(ridge_series, rng):
    """Epochs far apart: var(v) = 1 / (F sum (t - <t>)**2).

    For a Gaussian ridge of height A, sigma s and length L in white noise of variance
    V the information on a place is A**2 L w int (h')**2 = A**2 L w sqrt(pi) / (2 s),
    and with the sky free w = (1 - 1/n) / V, for where one epoch shines the n - 1
    others tell the sky.  Bilinear interpolation widens the ridge a little, and the
    noise is measured to some percent: within 8 %.
    """
    years, s, noise = np.array([-2.0, -1.0, 0.0, 1.0, 2.0]), 2.5, 0.25
    ridge = {"speed": 24.0, "sigma": s, "tail": 0.0, "angle": 90.0}
    series = ridge_series.draw(rng, [ridge], years=years, noise=noise, size=220)
    track = one_track(series, [ridge_series.seed_of(series, ridge)])
    # int exp(-ln 2 (2 x / 80)**6)**2 dx, the light along the ridge.
    along = np.linspace(-80.0, 80.0, 4001)
    light = np.exp(-np.log(2.0) * (2.0 * along / 80.0) ** 6)
    length = np.trapezoid(light**2, along)
    information = length * 0.8 / noise**2 * np.sqrt(np.pi) / (2.0 * s)
    expected = 1.0 / np.sqrt(information * (years**2).sum())
    assert track.speed_err_px_yr == pytest.approx(expected, rel=0.08)
    assert abs(track.speed_px_yr - 24.0) < 4.0 * track.speed_err_px_yr


def test_significance_is_that_of_the_perfect_filter(ridge_series, rng):
    """Epochs far apart: S/N**2 = n A**2 L (1 - 1/n) sqrt(pi) s / V.

    Within 2 sigma of the scatter of a significance, 1, and 4 % for noise that is
    measured and light at the ends that is cut off.
    """
    years, s, noise = np.array([-2.0, -1.0, 0.0, 1.0, 2.0]), 2.5, 0.4
    ridge = {"speed": 24.0, "sigma": s, "tail": 0.0, "angle": 90.0}
    series = ridge_series.draw(rng, [ridge], years=years, noise=noise, size=220)
    track = one_track(series, [ridge_series.seed_of(series, ridge)])
    along = np.linspace(-80.0, 80.0, 4001)
    length = np.trapezoid(np.exp(-np.log(2.0) * (2.0 * along / 80.0) ** 6) ** 2, along)
    perfect = np.sqrt(5 * length * 0.8 * np.sqrt(np.pi) * s) / noise
    assert track.snr == pytest.approx(perfect, abs=2.0 + 0.04 * perfect)


def test_static_sky_drops_out(ridge_series, rng):
    """Any image added to all epochs changes nothing, whatever is masked."""
    series = ridge_series.draw(rng)
    mask = series.mask.copy()
    mask[1, 60:100, 80:95] = 1
    mask[3, 90:120, 60:100] = 1
    series = replace(series, mask=mask)
    sky = rng.normal(0.0, 3.0, series.pixels.shape[1:]).astype(np.float32)
    other = replace(series, pixels=series.pixels + sky)
    seed = ridge_series.seed_of(series)
    settings, motion = TrackSettings(), MotionSettings()
    one, two = (one_track(s, [seed], settings, motion) for s in (series, other))
    # Pixels are float32: three in ten million of the sky added.
    assert two.speed_px_yr == pytest.approx(one.speed_px_yr, rel=1e-4)
    assert two.snr == pytest.approx(one.snr, rel=1e-4)
    assert two.direction_angle == pytest.approx(one.direction_angle, abs=0.01)
    np.testing.assert_allclose(two.profiles, one.profiles, atol=1e-3)


def test_errors_are_honest(ridge_series, rng):
    """Pulls of speed, direction and place over 36 draws have a width near 1.

    The robust width of n normal values has the error 1.17 / sqrt(n): 3 sigma of it
    above 1.  The errors also cover hills and patches, which are absent here, so
    that pulls may be as narrow as 0.3.
    """
    pulls, n = {"speed": [], "direction": [], "place": []}, 36
    for number in range(n):
        angle, speed = rng.uniform(0.0, 360.0), rng.uniform(12.0, 30.0)
        ridge = {
            "angle": angle,
            "speed": speed,
            "tail": rng.uniform(0.5, 4.0),
            "height": np.exp(rng.normal(0.0, 0.2, 5)),
        }
        noise = float(rng.uniform(0.4, 1.5))
        series = ridge_series.draw(rng, [ridge], noise=noise)
        seed = ridge_series.seed_of(
            series,
            ridge,
            number % 5,
            turn=rng.normal(0.0, 2.0),
            off=rng.normal(0.0, 0.7),
            speed_px_yr=speed * rng.normal(1.0, 0.1),
        )
        track = one_track(series, [seed], TrackSettings(), MotionSettings())
        turn = float(wrap_180(track.direction_angle - angle))
        normal = np.radians(angle)
        off = (track.x - 89.5) * np.cos(normal) + (track.y - 89.5) * np.sin(normal)
        pulls["speed"].append((track.speed_px_yr - speed) / track.speed_err_px_yr)
        pulls["direction"].append(turn / track.direction_angle_err)
        pulls["place"].append(off / track.place_err_px)
        assert track.verdict == "track"
    for values in pulls.values():
        width = stats.median_abs_deviation(values, scale="normal")
        assert 0.3 - 3 * 0.3 * 1.17 / np.sqrt(n) < width < 1 + 3 * 1.17 / np.sqrt(n)


def law(**changes):
    usual = {
        "times": np.array([-1.0, -0.2, 0.4, 1.1]),
        "speed": 20.0,
        "pull": 0.3,
        "width": 8.0,
        "roll": 0.7,
        "roll_length": 30.0,
    }
    return PathLaw(**{**usual, **changes})


def test_even_motion_is_predicted_exactly():
    """Start and speed are free: a straight path is carried on as it is."""
    path = 3.0 + 20.0 * law().times
    weights, covariance = law().predict(np.array([0.0, 2.0, 5.0]))
    np.testing.assert_allclose(weights @ path, [3.0, 43.0, 103.0], atol=1e-8)
    assert np.all(np.diff(np.diag(covariance)) > 0.0)


def test_places_known_exactly_leave_what_hills_may_do():
    """At an epoch nothing is uncertain; far off, a line through free hills is.

    With hills alone, independent at the epochs and far from them, prediction is
    regression: roll**2 (1 + 1/n + (t - <t>)**2 / sum (t_i - <t>)**2).
    """
    hills = law(pull=0.0, roll_length=1e-3)
    times = hills.times
    _, covariance = law(pull=0.0).predict(times)
    np.testing.assert_allclose(covariance, 0.0, atol=1e-3)
    _, covariance = hills.predict(np.array([3.0]))
    off = times - times.mean()
    spread = 1.0 + 1.0 / 4.0 + (3.0 - times.mean()) ** 2 / (off**2).sum()
    assert covariance[0, 0] == pytest.approx(0.7**2 * spread, rel=1e-3)


def test_leaving_one_out_by_the_precision():
    """[P x]_k / P_kk is x_k less its prediction from the others, and 1 / P_kk is
    the variance: prediction by kriging without epoch k, done in full.
    """
    path = np.array([-20.0, -4.4, 8.3, 21.0])
    noise = np.array([0.01, 0.04, 0.02, 0.09])
    precision = law(width=1e-3).precision(noise)
    for k in range(4):
        rest = np.delete(np.arange(4), k)
        # Independent pulls and noise alike are variance of the measured places.
        total = law(width=1e-3).covariance() + np.diag(noise)
        even = np.column_stack([np.ones(4), law().times])
        inverse = np.linalg.inv(total[np.ix_(rest, rest)])
        normal = np.linalg.inv(even[rest].T @ inverse @ even[rest])
        best = normal @ even[rest].T @ inverse @ path[rest]
        link = total[k, rest] @ inverse
        predicted = even[k] @ best + link @ (path[rest] - even[rest] @ best)
        left = even[k] - link @ even[rest]
        variance = total[k, k] - link @ total[rest, k] + left @ normal @ left
        gap = (precision @ path)[k] / precision[k, k]
        assert gap == pytest.approx(path[k] - predicted, rel=1e-6)
        assert 1.0 / precision[k, k] == pytest.approx(variance, rel=1e-6)


@pytest.mark.parametrize("skew", [0.0, 0.5, 1.2])
def test_lobe_of_a_width_has_it(skew):
    """The half-maximum points of the profile at the median seeing, by search."""
    lobe = Lobe.of_width(np.full(3, 1.5), 9.0, skew)
    x = np.linspace(-30.0, 30.0, 60_001)
    height = lobe.heights(np.tile(x, (3, 1)))[0]
    above = x[height >= 0.5]
    assert x[np.argmax(height)] == pytest.approx(0.0, abs=0.02)
    assert height.max() == pytest.approx(1.0, abs=1e-3)
    # The PSF is taken out in quadrature, which is exact for Gaussians only.
    assert above[-1] - above[0] == pytest.approx(9.0, rel=1e-3 if skew == 0 else 0.12)
    assert lobe.full_width == pytest.approx(above[-1] - above[0], rel=5e-3)
