"""Tracks: linking, verdicts, masks, missing epochs, bad seeds."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.motion.settings import MotionSettings
from latelight.motion.tracks._kernels import lit_knots, lit_ridge
from latelight.motion.tracks.build import build_tracks
from latelight.motion.tracks.lines import distance_between, lengthened
from latelight.motion.tracks.link import explains, group_seeds
from latelight.motion.tracks.lobe import Lobe
from latelight.motion.tracks.settings import TrackSettings
from latelight.records import ArcTrace
from latelight.sky import wrap_180


def build(series, seeds, **settings):
    return build_tracks(
        series, seeds, settings=TrackSettings(**settings), motion=MotionSettings()
    )


def is_right(track, *, angle=30.0, speed=20.0):
    turn = abs(wrap_180(track.direction_angle - angle))
    return (
        turn < 5 * track.direction_angle_err
        and abs(track.speed_px_yr - speed) < 5 * track.speed_err_px_yr
    )


def test_seeds_of_one_arc_make_one_track(ridge_series, rng):
    series = ridge_series.draw(rng)
    seeds = [ridge_series.seed_of(series, None, i, turn=i - 2.0) for i in range(5)]
    seeds.append(ridge_series.seed_of(series, None, 2, origin="stack", arc=-1, snr=20))
    (track,) = build(series, seeds)
    assert track.verdict == "track"
    assert is_right(track)
    assert len(track.seeds) == 6
    assert track.seeds[0].origin == "stack"
    assert track.sense_odds > 3
    assert [point.epoch for point in track.points] == [0, 1, 2, 3, 4]
    assert 0.7 < track.chi2 < 1.4


def test_order_of_the_seeds_does_not_matter(ridge_series, rng):
    ridges = [{"place": (60.0, 90.0)}, {"place": (130.0, 90.0), "angle": 200.0}]
    series = ridge_series.draw(rng, ridges)
    seeds = [
        ridge_series.seed_of(series, ridge, i, snr=5.0 + i + 7 * number)
        for number, ridge in enumerate(ridges)
        for i in range(5)
    ]
    one, two = build(series, seeds), build(series, seeds[::-1])
    assert len(one) == len(two) == 2
    for a, b in zip(one, two, strict=True):
        assert a.speed_px_yr == b.speed_px_yr
        assert a.snr == b.snr


@pytest.mark.parametrize("epoch", [0, 2, 4])
def test_unknown_speed_is_found(ridge_series, rng, epoch):
    series = ridge_series.draw(rng)
    seed = ridge_series.seed_of(series, None, epoch, speed_px_yr=np.nan)
    (track,) = build(series, [seed])
    assert track.verdict == "track"
    assert is_right(track)


def test_wrong_sense_is_turned_round(ridge_series, rng):
    series = ridge_series.draw(rng)
    good = ridge_series.seed_of(series, None, 1)
    wrong = ridge_series.seed_of(series, None, 3, direction_angle=210.0, snr=30.0)
    (track,) = build(series, [good, wrong])
    assert is_right(track)
    assert len(track.seeds) == 2
    # The picture and the points run along the motion.
    offsets = np.array([p.offset_px for p in track.points])
    assert np.all(np.diff(offsets) > 0)
    assert np.all(np.diff(track.profile_offsets) > 0)
    peaks = track.profile_offsets[np.nanargmax(track.profiles, axis=1)]
    np.testing.assert_allclose(peaks, offsets, atol=3.0)


def test_arc_at_the_other_epoch_of_its_pair_is_absorbed(ridge_series, rng):
    """The ridge of a pair may lie at its template's epoch, whatever its mjd says."""
    series = ridge_series.draw(rng)
    best = ridge_series.seed_of(series, None, 2, snr=30.0)
    late = ridge_series.seed_of(series, None, 4)
    astray = replace(
        late, mjd=float(series.mjd[0]), origin="larkspur_4-larkspur_0", snr=6.0
    )
    (track,) = build(series, [best, astray])
    assert len(track.seeds) == 2
    assert explains(track, astray, series)
    assert not explains(track, replace(astray, origin="stack"), series)


def test_crossing_ridges_stay_two(ridge_series, rng):
    """Both pass the middle of the frame, at different times and angles."""
    ridges = [
        {"angle": 0.0, "place": (90.0, 90.0)},
        {"angle": 75.0, "place": (90.0, 104.0)},
    ]
    series = ridge_series.draw(rng, ridges, size=200)
    seeds = [ridge_series.seed_of(series, r, i) for r in ridges for i in (0, 4)]
    tracks = [t for t in build(series, seeds) if t.verdict == "track"]
    assert len(tracks) == 2
    for ridge in ridges:
        assert any(is_right(t, angle=ridge["angle"]) for t in tracks)


def test_following_ridges_stay_two(ridge_series, rng):
    """One comes where the other was two epochs before."""
    ridges = [{"place": (110.0, 100.0)}, {"place": (110.0 - 22.5, 100.0 - 13.0)}]
    series = ridge_series.draw(rng, ridges, size=200)
    seeds = [ridge_series.seed_of(series, r, i) for r in ridges for i in range(5)]
    tracks = [t for t in build(series, seeds) if t.verdict == "track"]
    assert len(tracks) == 2
    assert all(is_right(t) for t in tracks)
    assert sorted(len(t.seeds) for t in tracks) == [5, 5]


def test_masked_epoch_is_left_out(ridge_series, rng):
    series = ridge_series.draw(rng)
    mask = series.mask.copy()
    mask[3] = 1
    (track,) = build(replace(series, mask=mask), [ridge_series.seed_of(series)])
    assert track.verdict == "track"
    assert is_right(track)
    assert np.isnan(track.points[3].height_counts)
    assert np.isnan(track.points[3].offset_px)
    assert np.isnan(track.profiles[3]).all()
    assert np.isfinite(track.change_px_yr2)


def test_masked_last_epoch_moves_the_reference(ridge_series, rng):
    series = ridge_series.draw(rng)
    mask = series.mask.copy()
    mask[4] = 1
    (track,) = build(replace(series, mask=mask), [ridge_series.seed_of(series)])
    assert track.mjd == pytest.approx(60000.0 + 365.25 * 0.5 * (-1.0 + 0.5))
    assert is_right(track)


def test_three_epochs_have_no_change(ridge_series, rng):
    series = ridge_series.draw(rng, years=(-1.0, 0.0, 1.0), noise=0.2)
    (track,) = build(series, [ridge_series.seed_of(series, None, 1)])
    assert track.verdict == "track"
    assert is_right(track)
    assert np.isnan(track.change_px_yr2)
    assert np.isnan(track.change_err_px_yr2)
    assert not track.covariance[2].any()
    assert not track.covariance[:, 2].any()
    assert track.place_err_px == pytest.approx(np.sqrt(track.covariance[0, 0]))


def test_two_usable_epochs_are_too_few(ridge_series, rng):
    series = ridge_series.draw(rng, years=(-1.0, 0.0, 1.0))
    mask = series.mask.copy()
    mask[2] = 1
    (track,) = build(
        replace(series, mask=mask), [ridge_series.seed_of(series, epoch=1)]
    )
    assert track.verdict == "only 2 usable epochs, a track needs 3"
    short = replace(
        series,
        **{
            name: getattr(series, name)[:2]
            for name in ("pixels", "variance", "mask", "mjd", "fwhm_px", "noise_ratio")
        },
        names=series.names[:2],
    )
    (track,) = build(short, [ridge_series.seed_of(series, epoch=1)])
    assert track.verdict == "only 2 epochs, a track needs 3"
    assert np.isnan(track.place_err_px)
    assert track.speed_px_yr == 20.0


def test_ridge_of_one_epoch_is_set_aside(ridge_series, rng):
    series = ridge_series.draw(rng, [{"height": [0, 0, 1, 0, 0]}])
    (track,) = build(series, [ridge_series.seed_of(series)])
    assert track.verdict == "seen at one epoch only"


def test_ridge_of_two_epochs_is_set_aside(ridge_series, rng):
    series = ridge_series.draw(rng, [{"height": [0, 1, 0, 1, 0]}])
    (track,) = build(series, [ridge_series.seed_of(series, epoch=1)])
    assert track.verdict == "seen at two epochs only: larkspur_1 and larkspur_3"


def test_residue_that_stays_is_set_aside(ridge_series, rng):
    """A star subtracts better at some epochs than at others; it does not move."""
    ridge = {"speed": 0.0, "height": [1.0, -0.8, 0.7, -0.9, 1.2], "tail": 0.0}
    series = ridge_series.draw(rng, [ridge])
    seed = ridge_series.seed_of(series, ridge, speed_px_yr=3.0)
    (track,) = build(series, [seed])
    assert track.verdict != "track"


def test_epoch_that_disagrees_is_named(ridge_series, rng):
    good = ridge_series.draw(rng, noise=0.1)
    late = ridge_series.draw(rng, [{"place": (95.0, 92.7)}], noise=0.1)
    pixels = good.pixels.copy()
    pixels[1] = late.pixels[1]
    (track,) = build(replace(good, pixels=pixels), [ridge_series.seed_of(good)])
    assert track.verdict.startswith("epochs disagree: larkspur_")


def test_seed_in_blank_sky_is_too_faint(ridge_series, rng):
    series = ridge_series.draw(rng, [])
    (track,) = build(series, [ridge_series.seed_of(series)])
    assert track.verdict.startswith("too faint") or "one epoch" in track.verdict


def test_broken_seeds_do_not_cost_the_others(ridge_series, rng):
    series = ridge_series.draw(rng)
    good = ridge_series.seed_of(series)
    nan = np.full(40, np.nan)
    far = np.arange(40.0)
    seeds = [
        replace(good, trace=ArcTrace(nan, nan, nan), arc=11),
        replace(good, trace=ArcTrace(nan[:0], nan[:0], nan[:0]), arc=12),
        replace(good, trace=ArcTrace(far + 5000.0, far, np.full(40, 90.0)), arc=13),
        replace(good, width_px=np.nan, arc=14),
        good,
    ]
    tracks = build(series, seeds)
    assert [t.verdict for t in tracks].count("track") == 1
    assert tracks[0].verdict == "track"
    assert sorted(s.arc for t in tracks for s in t.seeds) == [2, 11, 12, 13, 14]
    for track in tracks[1:]:
        assert "must lie on usable pixels" in track.verdict or "finite" in track.verdict


def test_no_seeds_no_tracks(ridge_series):
    assert build(ridge_series.draw(None, noise=0.1), []) == ()


def test_input_is_not_changed(ridge_series, rng):
    series = ridge_series.draw(rng)
    before = [getattr(series, n).copy() for n in ("pixels", "variance", "mask")]
    build(series, [ridge_series.seed_of(series)])
    for name, copy in zip(("pixels", "variance", "mask"), before, strict=True):
        np.testing.assert_array_equal(getattr(series, name), copy)


def test_quarter_turn_of_the_frame_turns_the_track(ridge_series, rng):
    series = ridge_series.draw(rng)
    seed = ridge_series.seed_of(series)
    n = series.pixels.shape[1]
    # rot90 by k = -1 carries (x, y) to (n - 1 - y, x).
    turned = replace(series, pixels=np.rot90(series.pixels, -1, axes=(1, 2)).copy())
    trace = ArcTrace(n - 1 - seed.trace.y, seed.trace.x, seed.trace.normal_angle + 90)
    moved = replace(seed, trace=trace, direction_angle=seed.direction_angle + 90)
    (one,), (two,) = build(series, [seed]), build(turned, [moved])
    assert wrap_180(two.direction_angle - one.direction_angle) == pytest.approx(90.0)
    assert two.speed_px_yr == pytest.approx(one.speed_px_yr, rel=1e-6)


def test_seeds_are_grouped_by_where_they_move(ridge_series):
    series = ridge_series.draw(None, noise=0.1)
    seed = ridge_series.seed_of
    same = [seed(series, None, i, snr=20 - i) for i in range(5)]
    unknown = seed(series, None, 2, speed_px_yr=np.nan, snr=3.0)
    across = seed(series, None, 2, turn=50.0, snr=2.0)
    beside = seed(series, None, 2, off=20.0, snr=1.0)
    groups = group_seeds([across, *same, unknown, beside])
    assert [len(group) for group in groups] == [6, 1, 1]
    assert groups[0][0] is same[0]
    assert any(member is unknown for member in groups[0])


def test_distance_of_ridges_side_by_side():
    s = np.arange(60.0)
    flat = ArcTrace(s, np.zeros(60), np.full(60, 90.0))
    beside = ArcTrace(s[10:40], np.full(30, 7.0), np.full(30, 270.0))
    assert distance_between(flat, beside) == pytest.approx(7.0, abs=0.1)
    crossing = ArcTrace(np.full(30, 30.0), s[:30], np.zeros(30))
    assert distance_between(flat, crossing) == np.inf


def test_lengthened_circle_stays_on_it():
    theta = np.radians(np.arange(0.0, 40.0, 0.5))
    arc = ArcTrace(100 * np.cos(theta), 100 * np.sin(theta), np.degrees(theta))
    longer = lengthened(arc, 20.0)
    np.testing.assert_allclose(np.hypot(longer.x, longer.y), 100.0, atol=0.1)
    assert longer.x.size == arc.x.size + 40


@pytest.mark.parametrize("skew", [0.0, 0.02, 0.9, 1.5])
def test_compiled_ridge_is_the_lobe_times_the_dust(skew):
    """Even dust gives the lobe itself; dust of knots sums to dust of all knots."""
    lobe = Lobe(np.array([1.2, 1.6]), 1.4, 1.1, skew)
    offsets = np.arange(-40.0, 30.0)
    centres = np.array([[-3.3, 8.1], [-2.9, 8.8]])
    share = np.array([0.7, 0.6])
    args = (offsets, centres, lobe.blurred, share, lobe.tail, lobe.front, lobe.scale)
    even = lit_ridge(*args, -20.0, 7.0, np.ones((2, 6)))
    for b in range(2):
        expected = lobe.heights(offsets - centres[b][:, None])
        np.testing.assert_allclose(even[b].T, expected, atol=2e-4)
    density = np.linspace(0.5, 2.0, 12).reshape(2, 6)
    knots = lit_knots(*args, -20.0, 7.0, 6)
    np.testing.assert_allclose(
        np.einsum("bmnk,bk->bmn", knots, density),
        lit_ridge(*args, -20.0, 7.0, density),
        atol=1e-12,
    )
