"""The sample nights as a newcomer runs them, against their exact truth."""

from pathlib import Path

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.table import Table

from latelight.cli import main

ROOT = Path(__file__).parents[2]
pytestmark = pytest.mark.e2e
# Files that hold seconds and memory; all others are the same to the byte.
TELL_THE_TIME = ("run.json", "log.jsonl", "pairs.ecsv", "series.ecsv")


def run(settings, output, jobs):
    """Run a settings file of the repository; return its output folder."""
    path = str(ROOT / "configs" / settings)
    assert main(["run", path, "--output", str(output), "--jobs", jobs, "-q"]) == 0
    return output


@pytest.fixture(scope="module")
def sample(tmp_path_factory):
    return run("sample_night.toml", tmp_path_factory.mktemp("sample") / "night", "1")


@pytest.fixture(scope="module")
def other_words(tmp_path_factory):
    return run("other_words.toml", tmp_path_factory.mktemp("other") / "night", "2")


def match(output, field):
    """Return truth and candidates of a field, and the candidate of each echo."""
    truth = Table.read(ROOT / "sample_frames" / "truth_echoes.ecsv")
    truth = truth[truth["field"] == field]
    found = Table.read(output / "candidates.ecsv")
    found = found[found["field"] == field]
    places = SkyCoord(found["ra"], found["dec"])
    pairs = []
    for echo in truth:
        # A frame of several chips is named file_NAME-CHIP.
        name = echo["science"] + (f"_CHIP-{echo['chip']}" if echo["chip"] else "")
        of_pair = found["science"] == name
        centre = SkyCoord(echo["ra"], echo["dec"], unit="deg")
        gap = np.where(of_pair, centre.separation(places).arcsec, np.inf)
        best = int(np.argmin(gap))
        # A traced ridge and its truth may differ along the arc, by half a length.
        near = gap[best] < 0.5 * max(echo["length_arcsec"], found["length"][best])
        pairs.append((echo, found[best] if near else None))
    return pairs, found


def test_every_echo_of_the_sample_night_is_found(sample):
    pairs, found = match(sample, "THORNAPPLE")
    assert len(pairs) == 10
    assert [echo["bound"] for echo, row in pairs if row is None] == []
    assert len(found) == 10


def test_motion_and_origin_of_the_sample_night(sample):
    for echo, row in match(sample, "THORNAPPLE")[0]:
        gap = (row["normal_pa"] - echo["normal_pa"] + 180.0) % 360.0 - 180.0
        # Five sigma, with the floor of the sheet's relief (about 2 deg).
        assert abs(gap) < 5.0 * np.hypot(row["normal_pa_err"], 2.0)
        assert abs(row["speed"] - echo["speed_arcsec_yr"]) < 5.0 * row["speed_err"]
        assert row["source"] == echo["source"]


def test_the_field_of_nuisances_shows_nothing(sample):
    assert len(match(sample, "FALLOWMERE")[1]) == 0


def test_another_observatory_s_frames_are_read_by_its_words(other_words):
    pairs, found = match(other_words, "MARLPIT")
    assert len(pairs) == len(found) == 2
    assert all(row is not None for _, row in pairs)
    assert set(found["source"]) == {"Gorse Event"}


def test_every_echo_is_followed_over_its_epochs(sample):
    """One track an echo, the same arc at all three epochs, and nothing else."""
    tracks = Table.read(sample / "tracks.ecsv")
    tracks = tracks[tracks["verdict"] == "track"]
    assert len(tracks) == 5
    assert set(tracks["n_epochs"]) == {3}
    assert set(tracks["found_in"]) == {"both"}
    assert set(tracks["source"]) == {"Sorrel 1713"}


def test_two_workers_give_the_catalogues_of_one(sample, tmp_path):
    other = run("sample_night.toml", tmp_path / "night", "2")
    names = sorted(
        p.relative_to(sample)
        for p in sample.rglob("*")
        if p.is_file() and p.name not in TELL_THE_TIME
    )
    assert len(names) > 20
    for name in names:
        assert (sample / name).read_bytes() == (other / name).read_bytes(), name
