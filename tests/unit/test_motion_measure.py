"""Motion of arcs: senses, symmetries, masks and refusals."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.masks import MaskBit
from latelight.motion.fitting import fit_one_lobe
from latelight.motion.lobes import LobePrior
from latelight.motion.measure import measure_motion
from latelight.motion.settings import MotionSettings
from latelight.motion.strip import Profile
from latelight.records import Arc, ArcTrace, Difference, Motion
from latelight.sky import wrap_180

SETTINGS = MotionSettings()


def measure(pair, later="science", **settings):
    difference, arc = pair
    return measure_motion(
        difference, arc, later=later, settings=MotionSettings(**settings)
    )


@pytest.mark.parametrize("later", ["science", "template"])
@pytest.mark.parametrize("ratio", [0.6, 1.7])
@pytest.mark.parametrize("angle", [30.0, 150.0, 215.0, 340.0])
def test_motion_runs_from_the_earlier_to_the_later_epoch(
    moving_ridge, rng, angle, ratio, later
):
    pair = moving_ridge(rng, snr=40, shift=12, angle=angle, ratio=ratio, later=later)
    motion = measure(pair, later)
    assert motion.lobes == 2
    assert (
        abs(wrap_180(motion.direction_angle - angle)) < 5 * motion.direction_angle_err
    )
    assert abs(motion.shift_px - 12) < 5 * motion.shift_err_px
    assert motion.sense_odds > 2


def test_place_is_the_ridge_of_the_science_epoch(moving_ridge, rng):
    for later, place in (("science", 6.0), ("template", -6.0)):
        pair = moving_ridge(rng, snr=60, shift=12, angle=0, later=later)
        motion = measure(pair, later)
        assert motion.x - 109.5 == pytest.approx(place, abs=1.0)


def test_exchanging_the_epochs_turns_the_motion_round(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=40, shift=12, angle=70)
    one = measure((difference, arc), "science")
    other = measure((difference, arc), "template")
    turn = wrap_180(one.direction_angle - other.direction_angle)
    assert abs(abs(turn) - 180.0) < 1.5  # the shape assumed has its tail behind
    assert other.shift_px == pytest.approx(one.shift_px, abs=2 * one.shift_err_px)


def test_negated_difference_with_exchanged_epochs_is_the_same_motion(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=30, shift=9, angle=70)
    turned = replace(difference, pixels=-difference.pixels)
    assert measure((difference, arc), "science").direction_angle == pytest.approx(
        measure((turned, replace(arc, sign=-arc.sign)), "template").direction_angle
    )


def test_quarter_turn_of_the_frame_turns_the_motion(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=30, shift=9, angle=20)
    n = difference.pixels.shape[0]
    # rot90 by k = -1 carries (x, y) to (n - 1 - y, x).
    turned = replace(difference, pixels=np.rot90(difference.pixels, -1).copy())
    trace = ArcTrace(n - 1 - arc.trace.y, arc.trace.x, arc.trace.normal_angle + 90)
    moved = replace(
        arc,
        trace=trace,
        x=n - 1 - arc.y,
        y=arc.x,
        normal_angle=(arc.normal_angle + 90) % 180,
    )
    one, other = measure((difference, arc)), measure((turned, moved))
    # The box the noise is measured in shifts by a pixel: nearly, not exactly.
    turn = wrap_180(other.direction_angle - one.direction_angle)
    assert turn == pytest.approx(90.0, abs=0.1)
    assert other.shift_px == pytest.approx(one.shift_px, abs=0.5 * one.shift_err_px)


def test_sense_of_the_normal_does_not_matter(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=30, shift=9, angle=20)
    trace = arc.trace
    flipped = replace(
        arc,
        trace=ArcTrace(trace.x, trace.y, trace.normal_angle + 180),
        curvature=-arc.curvature,
    )
    one, other = measure((difference, arc)), measure((difference, flipped))
    turn = wrap_180(other.direction_angle - one.direction_angle)
    assert turn == pytest.approx(0.0, abs=0.5 * one.direction_angle_err)
    assert other.shift_px == pytest.approx(one.shift_px, abs=0.5 * one.shift_err_px)


def test_running_of_the_trace_does_not_matter(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=30, shift=9, angle=20)
    t = arc.trace
    backwards = replace(
        arc, trace=ArcTrace(t.x[::-1].copy(), t.y[::-1].copy(), t.normal_angle[::-1])
    )
    one, other = measure((difference, arc)), measure((difference, backwards))
    turn = wrap_180(other.direction_angle - one.direction_angle)
    assert turn == pytest.approx(0.0, abs=0.5 * one.direction_angle_err)


def test_far_lobe_is_found(moving_ridge, rng):
    motion = measure(moving_ridge(rng, snr=30, shift=45, angle=100, size=260))
    assert motion.lobes == 2
    assert motion.shift_px == pytest.approx(45, abs=5 * motion.shift_err_px)


def test_far_lobe_beyond_the_limit_is_not_looked_for(moving_ridge, rng):
    pair = moving_ridge(rng, snr=30, shift=45, angle=100, size=260)
    assert measure(pair, max_shift_px=20.0).lobes == 1


def test_single_lobe_has_no_shift_and_modest_odds(moving_ridge, rng):
    motion = measure(moving_ridge(rng, snr=40, shift=25, angle=100, ratio=0.0))
    assert motion.lobes == 1
    assert np.isnan(motion.shift_px)
    assert np.isnan(motion.shift_err_px)
    assert 0 <= motion.sense_odds <= 1
    assert np.isfinite(motion.surface_brightness_counts)


def test_single_lobe_of_the_earlier_epoch_gives_the_place_where_it_was(
    moving_ridge, rng
):
    pair = moving_ridge(rng, snr=40, shift=24, angle=0, ratio=1e6)
    motion = measure(pair)
    assert motion.lobes == 1
    assert motion.x - 109.5 == pytest.approx(-12.0, abs=1.5)


def test_masked_pixels_are_not_used(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=40, shift=12, angle=90)
    pixels, mask = difference.pixels.copy(), difference.mask.copy()
    pixels[:, 105:112] = 1e6
    mask[:, 105:112] = MaskBit.BLEED
    hurt = replace(difference, pixels=pixels, mask=mask)
    clean, motion = measure((difference, arc)), measure((hurt, arc))
    assert motion.shift_px == pytest.approx(clean.shift_px, abs=3 * clean.shift_err_px)


def test_arc_at_the_edge_of_the_frame_is_measured(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=40, shift=12, angle=90)
    cut = 85  # rows below the early lobe's tail
    near = replace(
        difference,
        pixels=difference.pixels[cut:].copy(),
        variance=difference.variance[cut:].copy(),
        mask=difference.mask[cut:].copy(),
    )
    trace = replace(arc.trace, y=arc.trace.y - cut)
    motion = measure((near, replace(arc, trace=trace, y=arc.y - cut)))
    assert motion.shift_px == pytest.approx(12, abs=5 * motion.shift_err_px)


def test_arc_under_a_mask_is_refused(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=40, shift=12, angle=90)
    hidden = replace(difference, mask=np.full_like(difference.mask, MaskBit.TRAIL))
    with pytest.raises(ValueError, match="12 usable rows of pixels across it, got 0"):
        measure((hidden, arc))


def test_profile_without_a_ridge_of_the_sign_is_refused():
    offsets = np.arange(-20.0, 21.0)
    values = -np.exp(-0.5 * (offsets / 3.0) ** 2)
    profile = Profile(offsets, values, np.ones(41), np.eye(41), 1.0)
    with pytest.raises(ValueError, match="must be a ridge of the sign"):
        fit_one_lobe(profile, LobePrior(4.0, 0.6), sign=1, width=7.0, sense=1)


def test_unknown_epoch_is_refused(moving_ridge, rng):
    pair = moving_ridge(rng, snr=40, shift=12, angle=90)
    with pytest.raises(ValueError, match="'science' or 'template', got 'both'"):
        measure(pair, "both")


def test_inputs_are_not_changed(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=20, shift=12, angle=90)
    before = [
        a.copy() for a in (difference.pixels, arc.trace.x, arc.trace.normal_angle)
    ]
    measure((difference, arc))
    for was, now in zip(
        before, (difference.pixels, arc.trace.x, arc.trace.normal_angle), strict=True
    ):
        np.testing.assert_array_equal(was, now)


def test_same_input_same_motion(moving_ridge, rng):
    pair = moving_ridge(rng, snr=20, shift=12, angle=90)
    assert measure(pair) == measure(pair)


def test_records_are_plain_numbers(moving_ridge, rng):
    difference, arc = moving_ridge(rng, snr=20, shift=12, angle=90)
    assert isinstance(difference, Difference)
    assert isinstance(arc, Arc)
    motion = measure((difference, arc))
    assert isinstance(motion, Motion)
    for name in ("direction_angle", "shift_px", "x", "width_px", "chi2", "sense_odds"):
        assert type(getattr(motion, name)) is float


def test_pair_found_with_the_arc_keeps_other_echoes_out(moving_ridge, rng):
    """A far brighter neighbour of the other sign, 45 px off, is not its lobe."""
    difference, arc = moving_ridge(rng, snr=30, shift=8, angle=90, size=260)
    y = np.arange(260.0)[:, None]
    stripe = -5.0 * np.exp(-0.5 * ((y - 129.5 - 49.0) / 2.5) ** 2)
    crowded = replace(difference, pixels=(difference.pixels + stripe).astype("f4"))
    found_with = replace(arc, shift_px=9.0)
    motion = measure((crowded, found_with))
    assert motion.shift_px == pytest.approx(8.0, abs=5 * motion.shift_err_px)
    assert abs(wrap_180(motion.direction_angle - 90.0)) < 10.0


@pytest.mark.parametrize("flip", [0.0, 180.0])
@pytest.mark.parametrize("later", ["science", "template"])
def test_sense_of_the_pair_found_with_the_arc_counts(moving_ridge, rng, later, flip):
    """A faint single lobe tells no sense; the shift found with the arc does."""
    difference, arc = moving_ridge(
        rng, snr=8, shift=20, angle=70, tail=0.5, ratio=0.0, later=later
    )
    trace = arc.trace
    trace = ArcTrace(trace.x, trace.y, trace.normal_angle + flip)
    signed = []
    for towards in (20.0, -20.0):
        # Along the normal at 70 degrees, from the negative to the positive lobe.
        shift = towards if later == "science" else -towards
        found_with = replace(arc, trace=trace, shift_px=shift)
        motion = measure((difference, found_with), later)
        ahead = abs(wrap_180(motion.direction_angle - 70.0)) < 90.0
        signed.append(motion.sense_odds if ahead else -motion.sense_odds)
    assert signed[0] > signed[1]
