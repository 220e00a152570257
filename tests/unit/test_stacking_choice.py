"""Which epochs are stacked, and which is the reference."""

import pytest

from latelight.stacking.choice import EpochQuality, choose_epochs
from latelight.stacking.settings import StackingSettings


def choose(seeing, noise=None, overlap=None, **settings):
    n = len(seeing)
    epochs = [
        EpochQuality(*values)
        for values in zip(seeing, noise or [1.0] * n, overlap or [1.0] * n, strict=True)
    ]
    return choose_epochs(epochs, settings=StackingSettings(**settings))


def test_the_broadest_member_is_the_reference():
    choice = choose([1.0, 1.3, 1.1, 1.2])
    assert choice.members == (0, 1, 2, 3)
    assert choice.references == (1, 3, 2, 0)
    assert choice.left_out == {}


def test_ties_go_to_the_first():
    assert choose([1.0, 1.0, 1.0]).references == (0, 1, 2)


def test_broad_epochs_are_left_out_with_the_reason():
    choice = choose([1.0, 1.2, 2.0, 1.1, 1.49], max_seeing=1.5)
    assert choice.members == (0, 1, 3, 4)
    assert choice.references[0] == 4
    assert choice.left_out[2].startswith("seeing 2.00 times that of the sharpest")
    assert "stacking.max_seeing = 1.5" in choice.left_out[2]


def test_one_very_sharp_night_does_not_cost_the_stack():
    choice = choose([0.5, 1.2, 1.1, 1.3])
    assert choice.members == (0, 1, 2)


def test_shallow_epochs_are_left_out():
    choice = choose([1.0] * 5, noise=[1.0, 3.1, 3.2, 1.0, 1.0])
    # Weights 0.104 and 0.098 of the deepest's.
    assert choice.members == (0, 1, 3, 4)
    assert "weight 0.098" in choice.left_out[2]


def test_epochs_that_point_elsewhere_are_left_out():
    choice = choose([1.0] * 4, overlap=[0.9, 1.0, 0.4, 0.8])
    assert choice.members == (0, 1, 3)
    assert choice.left_out[2].startswith("40 % of it")


def test_the_deepest_are_kept_when_there_are_too_many():
    choice = choose([1.0] * 5, noise=[1.0, 1.4, 1.1, 1.3, 1.2], max_epochs=3)
    assert choice.members == (0, 2, 4)
    assert set(choice.left_out) == {1, 3}
    assert "stacking.max_epochs" in choice.left_out[1]


def test_one_epoch_is_its_own_reference():
    assert choose([1.4]).references == (0,)


def test_no_epoch_is_refused():
    with pytest.raises(ValueError, match="epochs must not be empty"):
        choose_epochs([], settings=StackingSettings())
