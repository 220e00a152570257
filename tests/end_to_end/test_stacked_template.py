"""A field whose every epoch is searched against a stack of the others."""

import os
import shutil
from types import SimpleNamespace

import numpy as np
import pytest
from astropy.io import fits

from latelight.cli import main
from latelight.config import NightConfig
from latelight.night.scan import plan_night
from latelight.night.series import build_series, group_parts
from latelight.night.stacked import StackTask, process_stack
from latelight.simulation.fields import random_field

pytestmark = pytest.mark.e2e

EPOCHS = 4
# Broadest, and so the reference, is the last of them.
SEED = 6


@pytest.fixture(scope="module")
def field(tmp_path_factory):
    """Four epochs of two bright echoes, on disk."""
    made = random_field(
        SEED, epochs=EPOCHS, size=384, n_echoes=2, brightness=(21.5, 22.5)
    )
    folder = tmp_path_factory.mktemp("stacked") / "frames"
    made.write(folder)
    assert np.argmax([frame.fwhm_px for frame in made.truth.frames]) == EPOCHS - 1
    return SimpleNamespace(folder=folder, truth=made.truth)


def work(folder, sources=(), scratch=None, **tables):
    """Return the outcomes of a folder of frames."""
    config = NightConfig.model_validate(
        {
            "night": {
                "frames": (str(folder / "*.fits"),),
                "output": str(folder / "out"),
            },
            "pairs": {"template": "stack"},
            "products": {"differences": True},
            **tables,
        }
    )
    (stack,) = plan_night(config, jobs=1).plan.stacks
    return process_stack(StackTask(stack, config, sources, scratch))


@pytest.fixture(scope="module")
def done(field, tmp_path_factory):
    scratch = tmp_path_factory.mktemp("scratch")
    return work(field.folder, field.truth.sources, scratch)


def distance_arcsec(row, echo, epoch):
    ra, dec = echo.ridges[epoch]
    across = (ra - row.ra) * np.cos(np.radians(row.dec))
    return float(np.hypot(across, dec - row.dec).min() * 3600.0)


def test_every_epoch_has_a_row_of_its_own(done):
    assert [o.row.pair for o in done] == [f"epoch_{i}-stack" for i in range(1, 5)]
    assert {o.row.status for o in done} == {"done"}
    assert done[0].row.template == "stack of 3: epoch_2, epoch_3, epoch_4"
    for outcome in done:
        assert outcome.row.notes.endswith("pixels and counts are those of epoch_4")
        others = [o.row.mjd_science for o in done if o is not outcome]
        assert min(others) < outcome.row.mjd_template < max(others)


def test_noise_is_as_predicted(done):
    """Some 100 blocks of 32 x 32 correlated pixels: good to 1 %."""
    for outcome in done:
        assert outcome.row.noise_ratio == pytest.approx(1.0, abs=0.03)
        assert outcome.row.held_out_chi2 is None or outcome.row.held_out_chi2 < 1.3


def test_echoes_are_found_where_each_epoch_has_them(done, field):
    """Both echoes at every epoch, but where a trail runs along one."""
    found = 0
    for epoch, outcome in enumerate(done):
        rows = [finding.cutout.row for finding in outcome.findings.candidates]
        near = [
            [row for row in rows if distance_arcsec(row, echo, epoch) < 3.0]
            for echo in field.truth.echoes
        ]
        found += sum(bool(rows) for rows in near)
        # Beyond what the truth calls the ridge its faint end may be one of its own.
        assert len(rows) <= sum(len(rows) for rows in near) + 1
    assert found >= 2 * EPOCHS - 1


def test_no_speed_and_no_sense_are_claimed_beside_a_stack_of_both_sides(done):
    for epoch, outcome in enumerate(done):
        for finding in outcome.findings.candidates:
            row = finding.cutout.row
            assert row.speed is None
            assert row.shift_px is None
            assert (row.sense_odds == 0.0) == (0 < epoch < EPOCHS - 1)


def test_epochs_make_a_series_minus_one_and_the_same_sky(done, field):
    """Echo by echo the mean over the epochs vanishes but for what was left out."""
    (group,) = group_parts([outcome.part for outcome in done])
    series = build_series(group)
    assert series.names == tuple(f"epoch_{i}" for i in range(1, 5))
    np.testing.assert_allclose(series.noise_ratio, 1.0, atol=0.03)
    np.testing.assert_allclose(series.fwhm_px, series.fwhm_px[0])
    use = (series.mask == 0).all(axis=0)
    weight = 1.0 / np.array([np.median(v[use]) for v in series.variance])
    weight /= weight.sum()
    mean = np.tensordot(weight, series.pixels, axes=1)[use]
    # The stack is that mean: rest is what each background took from its difference.
    noise = np.sqrt(np.median(series.variance[0][use]))
    assert np.median(np.abs(mean)) < 0.1 * noise
    assert all(seed.mjd == part.mjd for part in group for seed in part.seeds)
    assert all(np.isnan(seed.speed_px_yr) for part in group for seed in part.seeds)


def shuffled(pixels, rng):
    """Return the tiles of 48 x 48 pixels of a frame in another order: other stars."""
    tiles = pixels.reshape(8, 48, 8, 48).swapaxes(1, 2).reshape(64, 48, 48)
    tiles = tiles[rng.permutation(64)].reshape(8, 8, 48, 48)
    return tiles.swapaxes(1, 2).reshape(384, 384)


def test_a_broadest_frame_of_another_place_costs_its_own_row(field, tmp_path, rng):
    shutil.copytree(field.folder, tmp_path / "frames")
    path = tmp_path / "frames" / "epoch_4.fits"
    with fits.open(path) as file:
        header, pixels = file[0].header, shuffled(file[0].data, rng)
    fits.writeto(path, pixels, header, overwrite=True)
    rows = [outcome.row for outcome in work(tmp_path / "frames")]
    assert [row.status for row in rows] == ["done"] * 3 + ["failed"]
    assert "no match" in rows[3].reason
    assert rows[0].template == "stack of 2: epoch_2, epoch_3"
    assert all(row.noise_ratio == pytest.approx(1.0, abs=0.03) for row in rows[:3])


def test_a_broken_file_costs_its_own_row(field, tmp_path):
    shutil.copytree(field.folder, tmp_path / "frames")
    path = tmp_path / "frames" / "epoch_2.fits"
    with fits.open(path) as file:
        header, pixels = file[0].header, np.full_like(file[0].data, 7)
    fits.writeto(path, pixels, header, overwrite=True)
    outcomes = work(tmp_path / "frames")
    rows = [outcome.row for outcome in outcomes]
    assert [row.status for row in rows] == ["done", "failed", "done", "done"]
    assert rows[1].reason
    assert any("too few to tell outliers" in e.message for e in outcomes[0].events)


def test_an_epoch_too_poor_for_the_stack_is_searched_nonetheless(field):
    """Only three may be stacked: the one left out is matched with the stack."""
    outcomes = work(field.folder, stacking={"max_epochs": 3})
    rows = [outcome.row for outcome in outcomes]
    assert {row.status for row in rows} == {"done"}
    alone = [o for o in outcomes if o.row.template.startswith("stack of 3")]
    assert len(alone) == 1
    assert any("not stacked" in e.message for e in alone[0].events)
    assert alone[0].row.noise_ratio == pytest.approx(1.0, abs=0.03)
    assert alone[0].findings.candidates


def test_check_lists_the_epochs_with_their_stacks(field, tmp_path, capsys):
    text = (
        f'[night]\nframes = ["{os.path.relpath(field.folder, tmp_path)}/*.fits"]\n'
        'output = "night"\n[pairs]\ntemplate = "stack"\n'
    )
    (tmp_path / "night.toml").write_text(text)
    assert main(["check", str(tmp_path / "night.toml")]) == 0
    said = capsys.readouterr().out
    assert said.count("stack of 3") == EPOCHS
    assert "4 frames in 4 pairs" in said
