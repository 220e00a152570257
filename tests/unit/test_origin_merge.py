"""Arcs seen several times: what is one arc, and what are two."""

import numpy as np
import pytest

from latelight.origin.joint_arcs import moving_arcs
from latelight.origin.joint_merge import Sightings, same_arcs
from latelight.sky import offset_position

YEAR = 365.25


def sightings(*rows):
    """Each row: (dx, dy) arcsec east and north of a place, years, and changes."""
    columns = {name: [] for name in Sightings.__dataclass_fields__}
    for dx, dy, years, changes in rows:
        pa, gap = np.degrees(np.arctan2(dx, dy)), np.hypot(dx, dy) / 3600.0
        ra, dec = offset_position(359.9999, 70.0, pa, gap)
        values = {
            "ra": float(ra), "dec": float(dec), "mjd": 60000.0 + years * YEAR,
            "pa": 90.0, "pa_err": 2.0, "speed": 10.0, "speed_err": 0.5,
            "length": 40.0, "width": 3.0, "snr": 20.0, "sure": True, "rank": 1,
        } | changes  # fmt: skip
        for name, value in values.items():
            columns[name].append(value)
    return Sightings(**{name: np.array(v) for name, v in columns.items()})


def n_arcs(*rows):
    return same_arcs(sightings(*rows))[1].size


def test_an_arc_is_followed_along_its_motion():
    assert n_arcs((0, 0, 0, {}), (20, 0, 2, {}), (-10, 0, -1, {})) == 1
    # 20 arcsec ahead at the same epoch is another arc.
    assert n_arcs((0, 0, 0, {}), (20, 0, 0, {})) == 2
    # Behind it two years later as well.
    assert n_arcs((0, 0, 0, {}), (-20, 0, 2, {})) == 2


def test_pieces_far_along_the_ridge_are_other_arcs():
    assert n_arcs((0, 0, 0, {}), (0, 15, 0, {})) == 1
    assert n_arcs((0, 0, 0, {}), (0, 35, 0, {})) == 2


def test_other_directions_are_other_arcs():
    assert n_arcs((0, 0, 0, {}), (0, 0, 0, {"pa": 95.0})) == 1
    assert n_arcs((0, 0, 0, {}), (0, 0, 0, {"pa": 130.0})) == 2
    assert n_arcs((0, 0, 0, {}), (0, 0, 0, {"pa": 270.0})) == 2
    # Unless the sense is not known.
    assert n_arcs((0, 0, 0, {}), (0, 0, 0, {"pa": 270.0, "sure": False})) == 1


def test_other_speeds_are_other_arcs():
    assert n_arcs((0, 0, 0, {}), (0, 0, 0, {"speed": 11.0})) == 1
    assert n_arcs((0, 0, 0, {}), (0, 0, 0, {"speed": 20.0})) == 2


def test_unknown_speeds_reach_as_far_as_echoes_go():
    one_lobe = {"speed": np.nan, "speed_err": np.nan}
    assert n_arcs((0, 0, 0, {}), (20, 0, 2, one_lobe)) == 1
    assert n_arcs((0, 0, 0, one_lobe), (25, 0, 1, one_lobe)) == 1
    assert n_arcs((0, 0, 0, one_lobe), (60, 0, 1, one_lobe)) == 2


def test_tracks_stand_for_the_arc_before_stronger_candidates():
    rows = [
        (0, 0, 0, {"snr": 50.0}),
        (0, 0, 0, {"snr": 10.0, "rank": 0}),
        (0, 200, 0, {"snr": 9.0}),
    ]
    group, best = same_arcs(sightings(*rows))
    assert group[0] == group[1] != group[2]
    assert set(best) == {1, 2}


def test_no_sightings_no_arcs():
    group, best = same_arcs(sightings())
    assert (group.size, best.size) == (0, 0)


def test_motions_must_be_known():
    with pytest.raises(ValueError, match="pa must be finite"):
        moving_arcs([1.0, 2.0], [0.0, 0.0], [10.0, np.nan], pa_err=2.0)
