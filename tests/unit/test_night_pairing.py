"""Which frames pair, and what is said about the others."""

from pathlib import Path

import numpy as np
import pytest

from latelight.frames.headers import FrameHeader
from latelight.night.overlap import overlap_fraction
from latelight.night.pairing import plan_pairs, set_aside
from latelight.night.settings import PairSettings


def _square(ra=10.0, dec=-30.0, side=0.2):
    xy = np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]]) * side / 2
    return np.stack(
        [(ra + xy[:, 0] / np.cos(np.radians(dec))) % 360, dec + xy[:, 1]], 1
    )


def header(
    name, mjd=60000.0, *, band="r", field="A", chip="", footprint=None, path=None
):
    return FrameHeader(
        name=f"{name}_{chip}" if chip else name,
        path=Path(path or f"frames/{name}.fits"),
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


def plan(*headers, templates=(), rank=lambda h: h.mjd, **settings):
    return plan_pairs(
        headers, settings=PairSettings(**settings), rank=rank, templates=templates
    )


def names(plan):
    return [(p.science.name, p.template.name) for p in plan.pairs]


def test_every_later_frame_pairs_with_the_earliest_of_its_field_and_filter():
    result = plan(
        header("c", 60400),
        header("a", 60000),
        header("b", 60200),
        header("z", 60000, field="B"),
        header("y", 60001, field="B"),
    )
    assert names(result) == [("b", "a"), ("c", "a"), ("y", "z")]
    assert not result.failed


def test_the_order_of_the_input_does_not_matter():
    frames = [
        header(n, 60000 + i * 10, field=f)
        for i, (n, f) in enumerate(zip("abcdef", "ABABAB", strict=True))
    ]
    assert plan(*frames) == plan(*frames[::-1])


def test_the_frame_of_lowest_rank_is_the_template_of_earlier_frames_too():
    width = {"a": 3.0, "b": 2.0, "c": 2.5}
    frames = [header(n, 60000 + i) for i, n in enumerate("abc")]
    assert names(plan(*frames, rank=lambda h: width[h.name])) == [
        ("a", "b"),
        ("c", "b"),
    ]


def test_different_filters_never_pair_and_each_frame_is_named():
    result = plan(header("a", 60000, band="r"), header("b", 60100, band="g"))
    assert not result.pairs
    assert [row.science for row in result.failed] == ["b", "a"]
    assert all("one epoch only" in row.reason for row in result.failed)
    assert "filter 'g'" in result.failed[0].reason


def test_different_chips_and_fields_never_pair():
    result = plan(
        header("a", 60000, chip="N"),
        header("b", 60100, chip="S"),
        header("c", 60100, chip="N", field="B"),
    )
    assert not result.pairs
    assert len(result.failed) == 3


def test_chips_pair_each_with_its_own():
    frames = [
        header(n, m, chip=c)
        for n, m in (("a", 60000), ("b", 60100))
        for c in ("N", "S")
    ]
    assert names(plan(*frames)) == [("b_N", "a_N"), ("b_S", "a_S")]


@pytest.mark.parametrize(("gap", "pairs"), [(0.49, 0), (0.5, 1)])
def test_min_days_is_the_least_gap(gap, pairs):
    result = plan(header("a", 60000.0), header("b", 60000.0 + gap))
    assert len(result.pairs) == pairs
    assert len(result.failed) == 2 - 2 * pairs


def test_a_frame_of_the_templates_own_epoch_is_a_remark_and_no_failure():
    result = plan(header("a", 60000.0), header("b", 60000.2), header("c", 60010.0))
    assert names(result) == [("c", "a")]
    assert not result.failed
    assert len(result.remarks) == 1
    assert "b: of the same epoch as its template a" in result.remarks[0]


def test_frames_without_a_field_word_pair_when_they_overlap():
    result = plan(
        header("a", 60000, field="", footprint=_square(ra=10.0)),
        header("b", 60100, field="", footprint=_square(ra=10.05)),
        header("c", 60100, field="", footprint=_square(ra=40.0)),
    )
    assert names(result) == [("b", "a")]
    assert [row.science for row in result.failed] == ["c"]
    assert "its place on the sky" in result.failed[0].reason


def test_frames_without_field_word_and_wcs_pair_by_chip():
    result = plan(
        header("a", 60000, field="", chip="1"),
        header("b", 60100, field="", chip="1"),
        header("c", 60100, field="", chip="2"),
    )
    assert names(result) == [("b_1", "a_1")]


def test_a_given_template_serves_its_own_filter_and_field_alone():
    deep = header("deep", 59000)
    result = plan(
        header("a", 60000),
        header("b", 60100, band="g"),
        header("deep", 59000),
        templates=[deep],
    )
    assert names(result) == [("a", "deep")]
    assert [row.science for row in result.failed] == ["b"]
    assert "pairs.template does not show" in result.failed[0].reason


def test_pairs_of_frames_of_one_name_in_two_folders_have_names_of_their_own():
    result = plan(
        header("a", 60000, path="1/a.fits"),
        header("b", 60100, path="1/b.fits"),
        header("b", 60200, path="2/b.fits"),
    )
    assert [p.name for p in result.pairs] == ["b-a", "b-a-2"]


def test_copies_are_left_out_by_bytes_and_by_moment():
    frames = [
        header("a"),
        header("b", 60000.0),
        header("c", 60100.0),
        header("d", 60100.0 + 5e-6),
    ]
    kept, failed = set_aside(frames, {f.path: f.name for f in frames})
    assert [h.name for h in kept] == ["a", "c", "d"]
    assert (
        "duplicate of a.fits (same chip, filter and field at MJD 60000"
        in failed[0].reason
    )

    frames = [header("a", 60000), header("b", 60001)]
    kept, failed = set_aside(frames, dict.fromkeys([f.path for f in frames], "same"))
    assert [h.name for h in kept] == ["a"]
    assert "byte for byte" in failed[0].reason


def test_the_chips_of_one_file_are_no_copies_of_each_other():
    frames = [header("a", chip=c, path="frames/a.fits") for c in "123"]
    kept, failed = set_aside(frames, {frames[0].path: "x"})
    assert len(kept) == 3
    assert not failed


@pytest.mark.parametrize("dec", [0.0, -60.0, 85.0])
@pytest.mark.parametrize("ra", [0.0, 123.0])
def test_overlap_of_shifted_squares(ra, dec):
    # Shifted by a quarter of the side along declination: three quarters remain.
    a = _square(ra=ra, dec=dec, side=0.2)
    b = _square(ra=ra, dec=dec, side=0.2) + np.array([0.0, 0.05])
    assert overlap_fraction(a, b) == pytest.approx(0.75, abs=1 / 32)
    assert overlap_fraction(a, a) == 1.0


def test_a_small_frame_inside_a_large_one_overlaps_wholly():
    assert overlap_fraction(_square(side=0.02), _square(side=1.0)) == 1.0


def test_antipodes_do_not_overlap():
    assert overlap_fraction(_square(ra=10, dec=20), _square(ra=190, dec=-20)) == 0.0
