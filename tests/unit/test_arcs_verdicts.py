"""Each artefact is named, and genuine arcs survive every question."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from latelight.arcs import verdicts
from latelight.arcs.bright import bright_stars
from latelight.arcs.evidence import Flanks
from latelight.arcs.find import find_arcs
from latelight.arcs.settings import ArcSettings
from latelight.arcs.verdicts import ARTEFACTS
from latelight.masks import MaskBit

SETTINGS = ArcSettings()
ARC = {
    "x": 260.0,
    "y": 240.0,
    "angle": 0.7,
    "curvature": 1 / 500,
    "length": 120.0,
    "sigma": 3.0,
    "shift": 14.0,
    "height": 8.0,
}
SATURATED = np.uint16(MaskBit.SATURATED)
SPIKE = np.uint16(MaskBit.SPIKE)


def distance_from(x, y):
    rows, cols = np.mgrid[0:512, 0:512]
    return np.hypot(cols - x, rows - y)


def lit(difference, light):
    return replace(difference, pixels=difference.pixels + light.astype(np.float32))


@pytest.fixture
def search(make_star_list):
    def run(difference, stars=None):
        stars = stars or make_star_list()
        return find_arcs(difference, stars=stars, settings=SETTINGS)

    return run


def assert_only(arcs, word):
    """Every ridge is set aside, the most significant one for this reason."""
    assert arcs
    assert arcs[0].verdict.startswith(word), arcs[0].verdict
    assert all(arc.verdict != "arc" for arc in arcs)


@pytest.mark.parametrize("height", [6.0, 40.0, 1500.0])
def test_trail(rng, make_arc_difference, search, height):
    across = distance_line(255.0, 255.0, 0.4)
    trail = height * np.exp(-0.5 * (across / 1.6) ** 2)

    assert_only(search(lit(make_arc_difference(rng), trail)), "trail")


def distance_line(x, y, angle):
    rows, cols = np.mgrid[0:512, 0:512]
    return (cols - x) * np.cos(angle) + (rows - y) * np.sin(angle)


def test_arc_beside_a_trail_survives(rng, make_arc_difference, search):
    difference = make_arc_difference(rng, [ARC | {"x": 150.0, "y": 360.0}])
    trail = 60.0 * np.exp(-0.5 * (distance_line(255.0, 255.0, 0.1) / 1.6) ** 2)

    arcs = search(lit(difference, trail))

    assert [a.verdict for a in arcs].count("arc") == 1
    assert any(a.verdict.startswith("trail") for a in arcs)


def test_spike_of_a_saturated_star(rng, make_arc_difference, search):
    difference = make_arc_difference(rng)
    core = distance_from(200.0, 220.0) < 7.0
    difference.mask[core] = SATURATED
    u, v = (
        distance_line(200.0, 220.0, 0.5),
        distance_line(200.0, 220.0, 0.5 + np.pi / 2),
    )
    spike = 40.0 * np.exp(-np.abs(v) / 40.0 - 0.5 * (u / 1.6) ** 2)

    assert_only(search(lit(difference, spike)), "spike")


def test_halo_of_a_saturated_star(rng, make_arc_difference, search):
    difference = make_arc_difference(rng)
    r = distance_from(250.0, 250.0)
    difference.mask[r < 9.0] = SATURATED
    halo = 8.0 * np.exp(-0.5 * ((r - 60.0) / 3.0) ** 2)

    arcs = search(lit(difference, halo))

    assert all(arc.verdict != "arc" for arc in arcs)
    assert any(arc.verdict.startswith("halo") for arc in arcs)


@pytest.mark.parametrize("radius", [30.0, 45.0, 80.0])
def test_ghost_without_its_star(rng, make_arc_difference, search, radius):
    r = distance_from(250.0, 250.0)
    ghost = 6.0 / (1.0 + np.exp((r - radius) / 1.5))

    arcs = search(lit(make_arc_difference(rng), ghost))

    assert all(arc.verdict != "arc" for arc in arcs)


def test_a_variable_star_is_a_lump_or_stub(rng, make_arc_difference, search):
    star = 400.0 * np.exp(-0.5 * (distance_from(250.0, 250.0) / 1.6) ** 2)

    arcs = search(lit(make_arc_difference(rng), star))

    assert all(arc.verdict != "arc" for arc in arcs)


def test_trailed_mover_is_too_short(rng, make_arc_difference, search):
    mover = ARC | {"length": 16.0, "sigma": 1.6, "height": 60.0}
    mover.pop("shift")

    assert_only(search(make_arc_difference(rng, [mover])), "stub")


def test_misplaced_line_is_a_dipole(rng, make_arc_difference, search):
    line = ARC | {"curvature": 0.0, "sigma": 1.5, "shift": 1.0, "height": 60.0}

    assert_only(search(make_arc_difference(rng, [line])), "dipole")


def test_strongly_bent_ridge_is_curled(rng, make_arc_difference, search):
    bent = ARC | {"curvature": 1 / 50, "length": 80.0, "height": 20.0}

    arcs = search(make_arc_difference(rng, [bent]))

    assert all(arc.verdict != "arc" for arc in arcs)
    assert any(arc.verdict.startswith("curled") for arc in arcs)


def test_broad_ripple_is_no_arc(rng, make_arc_difference, search):
    ripple = ARC | {"sigma": 20.0, "length": 300.0, "height": 3.0, "curvature": 0.0}
    ripple.pop("shift")

    arcs = search(make_arc_difference(rng, [ripple]))

    assert all(arc.verdict != "arc" for arc in arcs)


def test_two_sources_in_line_are_no_arc(rng, make_arc_difference, search):
    light = sum(
        150.0 * np.exp(-0.5 * (distance_from(x, 250.0) / 2.0) ** 2)
        for x in (200.0, 300.0)
    )

    arcs = search(lit(make_arc_difference(rng), light))

    assert all(arc.verdict != "arc" for arc in arcs)


def test_masked_ridge_is_not_judged(rng, make_arc_difference, search):
    difference = make_arc_difference(rng, [ARC | {"curvature": 0.0}])
    along = distance_line(ARC["x"], ARC["y"], ARC["angle"] + np.pi / 2)
    difference.mask[(np.abs(along) < 100.0) & (np.mod(along, 16.0) < 12.5)] = 1

    arcs = search(difference)

    assert arcs
    assert arcs[0].verdict.startswith("masked")


def test_the_end_of_a_masked_spike_is_a_streak(rng, make_arc_difference, search):
    """What a turned spike leaves beyond its mask: two narrow lines of either sign."""
    along = distance_line(150.0, 250.0, 0.3 + np.pi / 2)
    across = distance_line(150.0, 250.0, 0.3)
    fading = np.where(along > 0.0, np.exp(-along / 60.0), 0.0)
    lines = np.exp(-0.5 * ((across - 2.5) / 1.6) ** 2)
    lines -= np.exp(-0.5 * ((across + 2.5) / 1.6) ** 2)
    difference = lit(make_arc_difference(rng), 60.0 * fading * lines)
    difference.mask[(along > 0.0) & (along < 80.0) & (np.abs(across) < 9.0)] = SPIKE

    arcs = search(difference)

    assert_only(arcs, "streak")


def test_arc_crossed_by_a_masked_trail_survives(rng, make_arc_difference, search):
    difference = make_arc_difference(rng, [ARC])
    crossing = distance_line(ARC["x"], ARC["y"], ARC["angle"] + 1.0)
    difference.mask[np.abs(crossing) < 10.0] = np.uint16(MaskBit.TRAIL)

    assert [arc.verdict for arc in search(difference)][:1] == ["arc"]


def test_background_left_at_a_dead_border_is_no_arc(rng, make_arc_difference, search):
    """A glow towards dead rows, bent as glows are: data on one side only."""
    rows, cols = np.mgrid[0:512, 0:512]
    glow = 9.0 * np.exp(-(rows - 60.0) / 12.0) * (cols / 512.0)
    difference = lit(make_arc_difference(rng), np.where(rows >= 60, glow, 0.0))
    difference.mask[:60] = 1

    arcs = search(difference)

    assert arcs
    assert all(arc.verdict != "arc" for arc in arcs)


@pytest.mark.parametrize(
    "change",
    [
        {},
        {"sigma": 1.7, "shift": 6.0, "height": 15.0},
        {"sigma": 6.0, "tail": 8.0, "shift": 30.0},
        {"length": 56.0, "height": 14.0},
        {"length": 180.0, "curvature": 0.0, "height": 6.0},
        {"length": 300.0, "curvature": 0.0, "sigma": 1.7, "height": 9.0},
        {"ratio": 0.4, "height": 12.0},
        {"curvature": -1 / 200, "height": 12.0},
    ],
)
def test_genuine_arcs_survive_every_question(
    make_arc_difference, make_star_list, change
):
    """Two noise seeds each; every arc has S/N over 20."""
    stars = make_star_list([100.0, 400.0], [100.0, 380.0], [5e5, 2e5])
    for seed in (1, 2):
        difference = make_arc_difference(np.random.default_rng(seed), [ARC | change])

        arcs = find_arcs(difference, stars=stars, settings=SETTINGS)

        assert [arc.verdict for arc in arcs][:1] == ["arc"], change


@pytest.mark.parametrize(
    ("question", "yes", "no"),
    [
        # The share of the significance that is left without the best piece.
        (verdicts.lump, {"trimmed_snr": 4.0}, {"trimmed_snr": 5.0}),
        (verdicts.lump, {"pair_snr": 40.0, "trimmed_snr": 9.0}, {"trimmed_snr": 9.0}),
        (verdicts.patches, {"filled": 0.45}, {"filled": 0.55}),
        (verdicts.wide, {"lobe_width_px": 31.0}, {"lobe_width_px": 29.0}),
        (verdicts.residue, {"away_share": 0.45}, {"away_share": 0.55}),
        (verdicts.apart, {"shift_px": 39.5}, {"shift_px": 38.5}),
        (verdicts.single, {"two_lobed": False}, {"two_lobed": True}),
        (verdicts.single, {"two_lobed": False}, {"two_lobed": False, "snr": 16.0}),
        (verdicts.masked, {"masked": 0.45}, {"masked": 0.35}),
        (verdicts.masked, {"masked": 0.75, "snr": 20.0}, {"masked": 0.65, "snr": 20.0}),
        (verdicts.stubby, {"length_px": 40.0}, {"length_px": 50.0}),
        # 1.7 x (10 + 25) = 60 px; 1.3 x (10 + 35) = 58 px when plain; 4.4 x 20 = 88.
        (verdicts.stubby, {"shift_px": 25.0, "length_px": 58.0}, {"shift_px": 25.0}),
        (
            verdicts.stubby,
            {"shift_px": 35.0, "length_px": 57.0, "snr": 16.0},
            {"shift_px": 35.0, "length_px": 60.0, "snr": 16.0},
        ),
        (
            verdicts.stubby,
            {"lobe_width_px": 20.0, "length_px": 86.0},
            {"lobe_width_px": 20.0, "length_px": 90.0},
        ),
        (verdicts.streak, {"streak_px": 45.0}, {"streak_px": 35.0}),
        (
            verdicts.streak,
            {"streak_px": 60.0, "weaker_share": 0.3},
            {"streak_px": 60.0, "weaker_share": 0.5},
        ),
        (
            verdicts.streak,
            {"streak_px": 55.0, "length_px": 200.0},
            {"streak_px": 45.0, "length_px": 200.0},
        ),
        (
            verdicts.ledge,
            {"two_lobed": False, "flanks": Flanks(0.35, 0.1)},
            {"two_lobed": False, "flanks": Flanks(0.45, 0.1)},
        ),
        (
            verdicts.ledge,
            {"two_lobed": False, "flanks": Flanks(1.0, 0.75)},
            {"two_lobed": False, "flanks": Flanks(1.0, 0.65)},
        ),
        (
            verdicts.ledge,
            {"single_snr": 9.2, "flanks": Flanks(0.1, 2.0)},
            {"single_snr": 8.6, "flanks": Flanks(0.1, 2.0)},
        ),
    ],
)
def test_questions_answer_by_their_limits(question, yes, no):
    facts = {
        "settings": SETTINGS,
        "snr": 10.0,
        "pair_snr": 10.0,
        "single_snr": 7.5,
        "trimmed_snr": 8.0,
        "filled": 1.0,
        "lobe_width_px": 10.0,
        "away_share": 1.0,
        "shift_px": 10.0,
        "two_lobed": True,
        "masked": 0.0,
        "length_px": 100.0,
        "streak_px": 0.0,
        "fwhm_px": 3.0,
        "weaker_share": 0.3,
        "flanks": Flanks(1.0, 0.0),
    }

    assert question(SimpleNamespace(**(facts | yes)))
    assert not question(SimpleNamespace(**(facts | no)))


def test_reasons_are_distinct_and_named():
    words = [artefact.reason.split(":")[0] for artefact in ARTEFACTS]

    assert len(set(words)) == len(words)
    assert all(": " in artefact.reason for artefact in ARTEFACTS)


def test_saturated_cores_become_bright_stars(make_arc_difference, make_star_list):
    difference = make_arc_difference(None)
    difference.mask[distance_from(100.0, 60.0) < 6.5] = SATURATED
    stars = make_star_list([300.0, 400.0], [300.0, 10.0], [5e5, 1e3])

    found = bright_stars(difference, stars, least_snr=300.0)

    np.testing.assert_allclose(found.x, [300.0, 100.0])
    np.testing.assert_allclose(found.y, [300.0, 60.0])
    # The core's area is 137 pixels.
    np.testing.assert_allclose(found.core_px, [0.0, 6.6], atol=0.1)
    assert found.residues[60, 100]
    assert found.residues[300, 300]
    assert not found.residues[10, 400]
