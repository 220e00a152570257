"""Arcs found, measured and missed."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.arcs.find import find_arcs
from latelight.arcs.settings import ArcSettings
from latelight.threads import n_threads, set_threads

SETTINGS = ArcSettings()
ARC = {
    "x": 260.0,
    "y": 240.0,
    "angle": 0.7,
    "curvature": 1 / 500,
    "length": 120.0,
    "sigma": 3.0,
    "tail": -2.0,
    "shift": 14.0,
    "height": 8.0,
    "ratio": 0.8,
}


@pytest.fixture
def find(make_star_list):
    def run(difference, stars=None, **changes):
        stars = stars or make_star_list(shape=difference.pixels.shape)
        settings = ArcSettings(**changes) if changes else SETTINGS
        return find_arcs(difference, stars=stars, settings=settings)

    return run


def kept(arcs):
    return [arc for arc in arcs if arc.verdict == "arc"]


def test_drawn_arc_is_measured(rng, make_arc_difference, find):
    """S/N about 36; tolerances are 4 sigma of such a fit, and half a block."""
    arcs = find(make_arc_difference(rng, [ARC]))

    (arc,) = kept(arcs)
    turn = (arc.normal_angle - np.degrees(ARC["angle"]) + 90.0) % 180.0 - 90.0
    assert abs(turn) < max(4.0 * arc.normal_angle_err, 0.5) < 4.0
    assert np.hypot(arc.x - ARC["x"], arc.y - ARC["y"]) < 10.0
    # Offset across: position error = sigma / (S/N of the lobe) / sqrt(2).
    across = (arc.x - ARC["x"]) * np.cos(0.7) + (arc.y - ARC["y"]) * np.sin(0.7)
    assert abs(across) < 1.0
    assert arc.curvature == pytest.approx(1 / 500, abs=0.0012)
    assert arc.shift_px == pytest.approx(14.0, abs=2.0)
    assert arc.sign == 1
    assert arc.length_px == pytest.approx(120.0, abs=24.0)
    # FWHM of a Gaussian of 3 px with a tail of 2 px is 8.4 px, 7.7 without the PSF.
    assert arc.width_px == pytest.approx(7.7, rel=0.3)
    assert arc.surface_brightness_counts == pytest.approx(8.0, rel=0.2)


def test_significance_approaches_the_perfect_filter(make_arc_difference, find):
    """The perfect filter knows everything; 85 % of its S/N is the aim."""
    rng = np.random.default_rng(3)
    noiseless = make_arc_difference(None, [ARC])
    bound = np.sqrt(np.sum(noiseless.pixels**2 / noiseless.variance))

    (arc,) = kept(find(make_arc_difference(rng, [ARC])))

    assert 0.85 < arc.snr / bound < 1.15


def test_trace_runs_along_the_brighter_lobe(rng, make_arc_difference, find):
    (arc,) = kept(find(make_arc_difference(rng, [ARC])))
    trace = arc.trace
    step = np.hypot(np.diff(trace.x), np.diff(trace.y))

    np.testing.assert_allclose(step, 1.0, atol=0.05)
    middle = trace.x.size // 2
    assert np.hypot(trace.x[middle] - arc.x, trace.y[middle] - arc.y) < 1.0
    assert abs(trace.normal_angle[middle] - arc.normal_angle) < 1.0
    assert 0.0 <= arc.normal_angle < 180.0
    # Normals are square to the line.
    slope = np.degrees(np.arctan2(np.diff(trace.y), np.diff(trace.x)))
    turn = (slope - trace.normal_angle[:-1]) % 180.0
    np.testing.assert_allclose(turn, 90.0, atol=1.0)


def test_sign_reversal_of_the_difference_flips_the_arc(rng, make_arc_difference, find):
    difference = make_arc_difference(rng, [ARC])

    (arc,) = kept(find(difference))
    (flipped,) = kept(find(replace(difference, pixels=-difference.pixels)))

    assert flipped.sign == -arc.sign
    assert flipped.shift_px == pytest.approx(-arc.shift_px, abs=0.1)
    assert flipped.snr == pytest.approx(arc.snr, rel=1e-3)
    np.testing.assert_allclose(flipped.trace.x, arc.trace.x, atol=0.05)


@pytest.mark.parametrize("turns", [1, 2, 3])
def test_quarter_turns_of_the_frame_turn_the_arc(rng, make_arc_difference, find, turns):
    """Blocks of the binned frame fall differently, and the fit starts elsewhere."""
    difference = make_arc_difference(rng, [ARC])
    turned = replace(
        difference,
        pixels=np.ascontiguousarray(np.rot90(difference.pixels, turns)),
    )

    (arc,) = kept(find(difference))
    (other,) = kept(find(turned))

    assert other.snr == pytest.approx(arc.snr, rel=0.05)
    # rot90 takes +x towards -y of the array's (x, y).
    angle = (other.normal_angle - arc.normal_angle + 90.0 * turns + 90.0) % 180.0 - 90.0
    assert abs(angle) < 1.5
    centre = 0.5 * 511.0
    place = (arc.x - centre) + 1j * (arc.y - centre)
    place *= (-1j) ** turns
    assert abs(place - (other.x - centre) - 1j * (other.y - centre)) < 10.0


def test_holes_in_the_mask_do_not_hide_an_arc(rng, make_arc_difference, find):
    difference = make_arc_difference(rng, [ARC])
    y, x = np.mgrid[0:512, 0:512]
    holes = (x % 40 < 9) & (y % 40 < 9)  # 5 % of the frame
    difference.mask[holes] = 4
    difference.pixels[holes] = 1e5

    (arc,) = kept(find(difference))

    assert np.hypot(arc.x - ARC["x"], arc.y - ARC["y"]) < 14.0


def test_inputs_are_left_alone_and_threads_do_not_matter(
    rng, make_arc_difference, find
):
    difference = make_arc_difference(rng, [ARC])
    before = [
        v.copy() for v in (difference.pixels, difference.variance, difference.mask)
    ]
    threads = n_threads()
    results = []
    try:
        for count in (1, 2, 3):
            set_threads(count)
            results.append(find(difference))
    finally:
        set_threads(threads)

    after = (difference.pixels, difference.variance, difference.mask)
    for old, new in zip(before, after, strict=True):
        np.testing.assert_array_equal(old, new)
    for other in results[1:]:
        assert [a.snr for a in other] == [a.snr for a in results[0]]
        np.testing.assert_array_equal(other[0].trace.x, results[0][0].trace.x)


def test_noise_alone_raises_no_arcs(make_arc_difference, find):
    """At 7.5 sigma under 0.06 false arcs per 1024^2 pixels (measured on 16 frames).

    Four frames of 512^2: two or more have a chance below 0.2 %.
    """
    found = [
        arc
        for seed in range(4)
        for arc in kept(find(make_arc_difference(np.random.default_rng(seed))))
    ]

    assert len(found) <= 1


def test_correlated_noise_raises_no_more(make_arc_difference, find):
    """Half of the noise blurred by 1.5 px, its variance stated as a pixel's."""
    from scipy import ndimage

    found = []
    for seed in range(4):
        rng = np.random.default_rng(100 + seed)
        difference = make_arc_difference(rng)
        blurred = ndimage.gaussian_filter(rng.normal(scale=10.0, size=(512, 512)), 1.5)
        variance = 100.0 * (1.0 + 1.0 / (4.0 * np.pi * 1.5**2))
        difference = replace(
            difference,
            pixels=(difference.pixels + blurred).astype(np.float32),
            variance=np.full((512, 512), variance, np.float32),
        )
        found += kept(find(difference))

    assert len(found) <= 1


def test_arcs_of_twice_the_threshold_are_found(make_arc_difference, find):
    """Perfect S/N of 15: with 85 % of it, 12.7, five sigma above the threshold."""
    rng = np.random.default_rng(8)
    wanted, found = 0, 0
    for _ in range(3):
        arcs = []
        for x, y in ((130.0, 130.0), (380.0, 130.0), (130.0, 380.0), (380.0, 380.0)):
            arc = ARC | {
                "x": x,
                "y": y,
                "angle": rng.uniform(0.0, 2.0 * np.pi),
                "curvature": rng.uniform(-1.0, 1.0) / 400.0,
                "length": rng.uniform(60.0, 150.0),
                "sigma": rng.uniform(2.0, 5.0),
                "shift": rng.uniform(5.0, 30.0),
            }
            alone = make_arc_difference(None, [arc | {"height": 1.0}]).pixels
            arcs.append(arc | {"height": 150.0 / np.sqrt(np.sum(alone**2))})
        result = kept(find(make_arc_difference(rng, arcs)))
        for arc in arcs:
            distance = [np.hypot(a.x - arc["x"], a.y - arc["y"]) for a in result]
            wanted += 1
            found += min(distance, default=np.inf) < 50.0

    # 95 % of 12 is 11.4: two misses have a chance of 12 %, three of 2 %.
    assert wanted - found <= 2


def test_most_significant_come_first(rng, make_arc_difference, find):
    faint = ARC | {"x": 120.0, "y": 400.0, "angle": 2.0, "height": 5.0}

    arcs = find(make_arc_difference(rng, [faint, ARC]))

    snr = [arc.snr for arc in arcs]
    assert len(kept(arcs)) == 2
    assert snr == sorted(snr, reverse=True)


@pytest.mark.parametrize("shape", [(16, 16), (40, 300), (301, 97)])
def test_small_and_oblong_frames_are_searched(rng, make_arc_difference, find, shape):
    assert kept(find(make_arc_difference(rng, shape=shape))) == []


def test_frames_without_data_or_signal_have_no_arcs(make_arc_difference, find):
    empty = make_arc_difference(None, shape=(128, 128))
    masked = replace(empty, mask=np.ones((128, 128), np.uint16))

    assert find(empty) == ()
    assert find(masked) == ()
