"""What is claimed of an arc seen against a stack."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from latelight.config import NightConfig
from latelight.frames.headers import FrameHeader
from latelight.night.findings import _motions
from latelight.night.pairing import Pair, StackPair, StackTemplate
from latelight.night.stacked import _at_science

CONFIG = NightConfig.model_validate({"night": {"frames": ("a.fits",), "output": "o"}})


def header(name, mjd):
    return FrameHeader(
        name=name, path=Path(f"{name}.fits"), chip="", shape=(220, 220), mjd=mjd,
        exposure_s=60.0, filter="r", field="A", gain=1.0, read_noise=5.0,
        saturation=6e4, zero_point=25.0, footprint=None, notes=(),
    )  # fmt: skip


def against(*mjds, science=60000.0):
    template = StackTemplate("stack", float(np.mean(mjds)), mjds)
    return StackPair("s-stack", template, header("s", science))


@pytest.fixture
def ridge(moving_ridge, rng):
    return moving_ridge(rng, snr=40.0, shift=12.0, angle=25.0)


def motion_of(ridge, pair):
    (arc,), moving = _motions(*ridge, pair, CONFIG)
    assert arc.verdict == "arc"
    return moving[0]


@pytest.fixture
def plain(ridge):
    return motion_of(
        (ridge[0], (ridge[1],)), Pair("s-t", header("t", 59000.0), header("s", 60000.0))
    )


@pytest.mark.parametrize("mjds", [(59000.0, 59500.0), (59000.0, 61000.0)])
def test_no_shift_is_told_against_a_stack(ridge, plain, mjds):
    motion = motion_of((ridge[0], (ridge[1],)), against(*mjds))
    assert np.isfinite(plain.shift_px)
    assert np.isnan(motion.shift_px)
    assert np.isnan(motion.shift_err_px)
    assert motion.lobes == 1
    assert motion.direction_angle == plain.direction_angle
    assert motion.width_px == plain.width_px


def test_the_sense_is_told_when_all_of_the_stack_was_earlier(ridge, plain):
    motion = motion_of((ridge[0], (ridge[1],)), against(59000.0, 59500.0))
    assert motion.sense_odds == plain.sense_odds > 1.0


def test_the_sense_turns_when_all_of_the_stack_was_later(ridge, plain):
    motion = motion_of((ridge[0], (ridge[1],)), against(60500.0, 61000.0))
    turn = (motion.direction_angle - plain.direction_angle) % 360.0
    assert turn == pytest.approx(180.0, abs=10.0)


def test_no_sense_is_told_when_the_stack_was_on_both_sides(ridge):
    motion = motion_of((ridge[0], (ridge[1],)), against(59000.0, 61000.0))
    assert motion.sense_odds == 0.0


def test_a_ridge_of_the_stack_alone_is_set_aside(ridge):
    """The early lobe alone, the other half of the difference emptied."""
    difference, arc = ridge
    y, x = np.mgrid[:220, :220] - 109.5
    ahead = x * np.cos(np.radians(25.0)) + y * np.sin(np.radians(25.0)) > 1.0
    rng = np.random.default_rng(5)
    noise = np.sqrt(difference.variance) * rng.normal(size=ahead.shape)
    alone = replace(
        difference,
        pixels=np.where(ahead, noise, difference.pixels).astype(np.float32),
    )
    way = np.array([np.cos(np.radians(25.0)), np.sin(np.radians(25.0))]) * -12.0
    trace = replace(arc.trace, x=arc.trace.x + way[0], y=arc.trace.y + way[1])
    early = replace(
        arc, sign=-1, trace=trace, x=arc.x + way[0], y=arc.y + way[1], shift_px=np.nan
    )
    (judged,), moving = _motions(alone, (early,), against(59000.0, 59500.0), CONFIG)
    assert judged.verdict == "not measurable: only the stack shows it, in other epochs"
    assert not moving


def test_a_ridge_whose_deeper_lobe_is_the_stacks_stays(ridge):
    """Traced on the negative lobe, it is placed on the positive one."""
    difference, arc = ridge
    way = np.array([np.cos(np.radians(25.0)), np.sin(np.radians(25.0))]) * -12.0
    trace = replace(arc.trace, x=arc.trace.x + way[0], y=arc.trace.y + way[1])
    early = replace(arc, sign=-1, trace=trace, x=arc.x + way[0], y=arc.y + way[1])
    motion = motion_of((difference, (early,)), against(59000.0, 59500.0))
    # The trace is off by a little; the lobes are 12 px apart.
    assert np.hypot(motion.x - arc.x, motion.y - arc.y) < 4.0
    moved = _at_science(early, motion)
    assert moved.sign == 1
    assert (
        np.hypot(moved.trace.x - arc.trace.x, moved.trace.y - arc.trace.y).max() < 4.0
    )
    assert _at_science(arc, motion) is arc
