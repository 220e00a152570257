"""A field's epochs together: what goes wrong costs a row, and names tie up."""

import logging
from pathlib import Path

import numpy as np
import pytest

from latelight.config import NightConfig
from latelight.night.calibration import Calibration
from latelight.night.series import Epoch, Grid, SeriesPart, write_part
from latelight.night.tracking import SeriesTask, failed_series, process_series

SHAPE = (320, 320)
CONFIG = NightConfig.model_validate({"night": {"frames": ("*.fits",), "output": "o"}})


def grid(mjd=60_000.0):
    return Grid(
        name="t_1", field="F", filter="r", chip="", mjd=mjd, fwhm_px=3.0,
        variance=1.0, shape=SHAPE, calibration=Calibration(None, None),
    )  # fmt: skip


def part(file, mjd, template_variance=1.0):
    return SeriesPart(
        file=file, grid=grid(), pair=f"s{mjd}-t_1", name=f"s{mjd}", mjd=mjd,
        fwhm_px=3.0, template_variance=template_variance, seeds=(),
    )  # fmt: skip


def noise(folder, rng, mjd, ridge=None):
    pixels = rng.normal(0.0, np.sqrt(2.0), SHAPE)
    if ridge is not None:
        y, x = np.mgrid[: SHAPE[0], : SHAPE[1]]
        along = 8.0 * np.exp(-(((y - 160.0) / 45.0) ** 4))
        now, then = (np.exp(-0.5 * ((x - at) / 2.2) ** 2) for at in (ridge, 130.0))
        pixels += along * (now - then)
    file = folder / f"{mjd}.npy"
    ones = np.ones(SHAPE, np.float32)
    mask = np.zeros(SHAPE, np.uint16)
    write_part(file, Epoch(pixels.astype(np.float32), ones, mask, 1.0))
    return part(file, mjd)


def test_a_series_whose_epochs_cannot_be_read_is_a_failed_row(tmp_path):
    parts = (part(tmp_path / "gone.npy", 60_100.0), part(Path("also"), 60_200.0))
    outcome = process_series(SeriesTask(parts, CONFIG, ()))
    assert outcome.row.status == "failed"
    assert "FileNotFoundError" in outcome.row.reason
    assert outcome.tracks == ()
    (event,) = [e for e in outcome.events if e.level == logging.ERROR]
    assert event.pair == "t_1"
    assert "Traceback" in event.trace


@pytest.mark.parametrize(
    ("own", "count", "first"), [(1.0, 3, 60_000), (0.0, 2, 60_100)]
)
def test_a_failed_series_still_says_which_epochs_it_had(own, count, first):
    parts = [part(Path("a"), 60_100.0, own), part(Path("b"), 60_200.0, own)]
    row = failed_series(parts, "because")
    assert (row.n_epochs, row.mjd_first, row.mjd_last) == (count, first, 60_200.0)
    assert (row.grid, row.field, row.filter) == ("t_1", "F", "r")
    assert (row.status, row.reason) == ("failed", "because")


def test_a_moving_ridge_becomes_a_track_without_sky_columns(tmp_path, rng):
    """Five epochs, 10 px apart; the template's own lobe is negative in all."""
    parts = []
    for k, mjd in enumerate((60_100.0, 60_200.0, 60_300.0, 60_400.0)):
        made = noise(tmp_path, rng, mjd, ridge=140.0 + 10.0 * k)
        parts.append(made)
    outcome = process_series(SeriesTask(tuple(parts), CONFIG, ()))
    assert (outcome.row.status, outcome.row.n_epochs) == ("done", 5)
    assert outcome.row.n_from_pairs == 0
    assert outcome.row.n_from_stack >= 1
    (track,) = [t for t in outcome.tracks if t.row.verdict == "track"]
    assert track.row.ra is None
    assert track.row.speed is None
    # 10 px in 100 days.
    assert track.row.speed_px == pytest.approx(36.5, abs=4.0 * track.row.speed_err_px)
    assert len(track.points) == 5
    named = track.named(track.row)
    assert {p.track for p in named.points} == {track.row.id}
    assert {line.stage for line in outcome.events if line.seconds} >= {
        "series", "velocities", "tracks", "products",
    }  # fmt: skip
