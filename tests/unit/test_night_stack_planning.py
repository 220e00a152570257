"""Which fields get a stack, and what a stack pair says of time."""

from pathlib import Path

import numpy as np
import pytest

from latelight.config import NightConfig
from latelight.errors import SettingsError
from latelight.frames.headers import FrameHeader
from latelight.night import scan
from latelight.night.settings import PairSettings
from latelight.night.stack_planning import plan_stacks


def header(name, mjd, *, band="r", field="A", chip="", footprint=None, folder="frames"):
    return FrameHeader(
        name=name,
        path=Path(f"{folder}/{name}.fits"),
        chip=chip,
        shape=(256, 256),
        mjd=mjd,
        exposure_s=60.0,
        filter=band,
        field=field,
        gain=1.0,
        read_noise=5.0,
        saturation=6e4,
        zero_point=25.0,
        footprint=footprint,
        notes=(),
    )


def square(ra):
    xy = np.array([[-0.1, -0.1], [0.1, -0.1], [0.1, 0.1], [-0.1, 0.1]])
    return xy + np.array([ra, 0.0])


def plan(*headers, min_epochs=3, **settings):
    return plan_stacks(
        headers, settings=PairSettings(**settings), min_epochs=min_epochs
    )


def names(stacks):
    return [[pair.name for pair in stack.pairs] for stack in stacks]


FOUR = [header(n, 60000.0 + 30 * i) for i, n in enumerate("abcd")]


def test_every_epoch_is_compared_with_the_others():
    made = plan(*FOUR[::-1])
    assert names(made.stacks) == [["a-stack", "b-stack", "c-stack", "d-stack"]]
    assert not made.rest
    assert not made.remarks
    first = made.stacks[0].pairs[0]
    assert first.science is FOUR[0]
    assert first.template.name == "stack of 3"
    assert first.template.mjd == pytest.approx(60060.0)


def test_the_sense_of_time_is_known_at_the_ends_alone():
    pairs = plan(*FOUR).stacks[0].pairs
    assert [pair.later for pair in pairs] == ["template", None, None, "science"]


def test_two_epochs_are_left_to_pairs_with_a_remark():
    made = plan(*FOUR[:2])
    assert not made.stacks
    assert made.rest == tuple(FOUR[:2])
    assert len(made.remarks) == 1
    assert made.remarks[0].startswith("2 epochs only of field 'A', filter 'r'")
    assert "stacking.min_epochs" in made.remarks[0]


def test_one_epoch_is_left_to_pairs_without_a_word():
    made = plan(FOUR[0])
    assert made.rest == (FOUR[0],)
    assert not made.remarks


def test_more_epochs_can_be_asked_for():
    assert not plan(*FOUR, min_epochs=5).stacks


def test_frames_of_one_night_are_one_epoch():
    night = [header(f"n{i}", 60000.0 + 0.1 * i) for i in range(3)]
    assert not plan(*night, FOUR[1]).stacks
    (stack,) = plan(*night, FOUR[1], FOUR[2]).stacks
    of_night, of_later = stack.pairs[1], stack.pairs[3]
    assert of_night.template.mjds == (60030.0, 60060.0)
    assert of_later.template.name == "stack of 4"


def test_fields_filters_and_chips_stay_apart_in_order():
    others = [
        header(f"{f}{b}{c}{i}", 60000.0 + 30 * i, field=f, band=b, chip=c)
        for f, b, c in (("B", "r", ""), ("A", "g", ""), ("A", "r", "2"))
        for i in range(3)
    ]
    made = plan(*others, *FOUR)
    assert [stack.pairs[0].name for stack in made.stacks] == [
        "Ag0-stack", "a-stack", "Ar20-stack", "Br0-stack"
    ]  # fmt: skip


def test_frames_without_a_field_word_go_where_they_overlap():
    known = [
        header(n, 60000.0 + 30 * i, footprint=square(10.0)) for i, n in enumerate("ab")
    ]
    near = header("c", 60100.0, field="", footprint=square(10.05))
    far = header("d", 60100.0, field="", footprint=square(40.0))
    made = plan(*known, near, far)
    assert names(made.stacks) == [["a-stack", "b-stack", "c-stack"]]
    assert made.rest == (far,)


def test_frames_of_one_name_in_two_folders_have_names_of_their_own():
    made = plan(*FOUR[:2], header("a", 60090.0, folder="more"))
    assert names(made.stacks) == [["a-stack", "b-stack", "a-stack-2"]]


@pytest.fixture
def night(tmp_path, monkeypatch):
    """Plan a night of made-up headers."""

    def make(headers, **tables):
        (tmp_path / "a.fits").touch()
        config = NightConfig.model_validate(
            {
                "night": {
                    "frames": (str(tmp_path / "*.fits"),),
                    "output": str(tmp_path / "out"),
                },
                "pairs": {"template": "stack"},
                **tables,
            }
        )
        monkeypatch.setattr(
            scan,
            "_read_all",
            lambda paths, config: (
                list(headers),
                [],
                {h.path: h.name for h in headers},
            ),
        )
        return scan.plan_night(config, jobs=1)

    return make


def test_a_night_holds_stacks_and_pairs(night):
    two = [header(f"x{i}", 60000.0 + i, field="B") for i in range(2)]
    made = night([*FOUR, *two]).plan
    assert [pair.name for pair in made.comparisons] == [
        "x1-x0", "a-stack", "b-stack", "c-stack", "d-stack"
    ]  # fmt: skip
    assert len(made.remarks) == 1
    assert not made.failed


def test_a_lone_frame_is_told_as_ever(night):
    made = night([*FOUR, header("x", 60000.0, field="B")]).plan
    assert [row.science for row in made.failed] == ["x"]
    assert "one epoch only" in made.failed[0].reason


def test_other_methods_of_subtraction_are_refused(night):
    with pytest.raises(SettingsError, match=r'subtraction.method: must be "kernel"'):
        night(FOUR, subtraction={"method": "proper"})
