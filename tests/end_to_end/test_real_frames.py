"""Real survey frames without an echo: everything up to "nothing here".

The frames may not be redistributed.  Name the folder that holds them in the
environment variable LATELIGHT_REAL_FRAMES; without it these tests are skipped.
Nothing real moves like an echo in any of them, so every candidate is false.
"""

import os
from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

from latelight.cli import main

ROOT = os.environ.get("LATELIGHT_REAL_FRAMES", "")
pytestmark = [
    pytest.mark.e2e,
    pytest.mark.real_frames,
    pytest.mark.skipif(
        not Path(ROOT, "ogle_blg171_i").is_dir(),
        reason="LATELIGHT_REAL_FRAMES names no folder of real frames",
    ),
]


def run(tmp_path, template, science, *, min_days=0.5, extra=""):
    """Run one pair of real frames; return its row and the tables."""
    settings = tmp_path / "night.toml"
    settings.write_text(
        f'[night]\nframes = ["{Path(ROOT, science)}"]\noutput = "out"\n'
        f'[pairs]\ntemplate = "{Path(ROOT, template)}"\nmin_days = {min_days}\n{extra}'
    )
    code = main(["run", str(settings), "--quiet"])
    out = tmp_path / "out"
    row = Table.read(out / "pairs.ecsv")[0]
    assert code == 0, row["reason"]
    return row, Table.read(out / "candidates.ecsv"), Table.read(out / "residuals.ecsv")


@pytest.mark.parametrize(
    ("template", "science"),
    [
        ("o200350.7s.fts", "o230994.7s.fts"),  # 368 days apart, equal seeing
        ("o209136.7s.fts", "o189499.7s.fts"),  # seeing 4.6 and 6.8 px
    ],
)
def test_a_crowded_field_is_quiet(tmp_path, template, science):
    folder = "ogle_blg171_i"
    row, candidates, _ = run(tmp_path, f"{folder}/{template}", f"{folder}/{science}")
    assert 0.9 <= row["noise_ratio"] <= 1.15
    assert len(candidates) == 0


def test_a_real_variable_is_listed_where_it_is(tmp_path):
    """A microlensing event at x = 100, y = 101 (0-based) of the named frame."""
    folder = "ogle_blg171_i"
    _, candidates, residuals = run(
        tmp_path, f"{folder}/o204172.7s.fts", f"{folder}/o207131.7s.fts"
    )
    brightest = residuals[np.argmax(np.abs(residuals["snr"]))]
    assert brightest["flux"] > 0
    # The published place is on another frame of the series; the event itself is
    # the one star of this pair that rose.  The frames share a grid to a pixel.
    assert np.hypot(brightest["x"] - 101.0, brightest["y"] - 100.0) <= 1.5
    assert len(candidates) == 0


def test_frames_without_wcs_far_apart_are_registered(tmp_path):
    """221 px and 0.4 deg apart, no WCS, sky columns empty."""
    folder = "hatp32_microobs"
    row, candidates, _ = run(
        tmp_path,
        f"{folder}/HATP-32171220013912.FITS",
        f"{folder}/HATP-32171220065412.FITS",
        min_days=0.1,
    )
    assert row["registration_method"] == "asterisms"
    assert row["registration_rms"] < 0.1
    assert len(candidates) == 0
