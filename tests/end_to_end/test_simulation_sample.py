"""The sample night can be remade and stays small."""

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from latelight.simulation.__main__ import main

pytestmark = pytest.mark.e2e

SAMPLE = Path(__file__).parents[2] / "sample_frames"


def test_sample_is_remade_by_its_command(tmp_path, capsys):
    assert main([str(tmp_path)]) == 0
    made = sorted(tmp_path.iterdir())
    assert "thornapple_1.fits.fz" in capsys.readouterr().out
    kept = sorted(p for p in SAMPLE.iterdir() if p.name != "README.md")
    assert [p.name for p in made] == [p.name for p in kept]
    assert sum(p.stat().st_size for p in kept) < 12e6
    for new, old in zip(made, kept, strict=True):
        if ".fits" in new.name:
            _compare_frames(new, old)
        else:
            _compare_tables(new, old)


def _compare_frames(new: Path, old: Path) -> None:
    """Same layout and words; pixels may differ where libraries round differently."""
    with fits.open(new) as a, fits.open(old) as b:
        assert len(a) == len(b)
        for one, other in zip(a, b, strict=True):
            assert one.name == other.name
            if one.data is None:
                continue
            assert one.data.shape == other.data.shape
            assert np.mean(one.data != other.data) < 1e-4


def _compare_tables(new: Path, old: Path) -> None:
    one = Table.read(new, format="ascii.ecsv")
    other = Table.read(old, format="ascii.ecsv")
    assert one.colnames == other.colnames
    for name in one.colnames:
        if one[name].dtype.kind == "f":
            assert np.allclose(one[name], other[name], rtol=1e-4, equal_nan=True)
        else:
            assert list(one[name]) == list(other[name])


def test_one_pair_can_be_written_for_trying_out(tmp_path, capsys):
    arguments = ["--pair", "7", "--size", "256", "--science-sharper", str(tmp_path)]
    assert main(arguments) == 0
    names = {p.name for p in tmp_path.iterdir()}
    assert names == {
        "template.fits",
        "science.fits",
        "truth_echoes.ecsv",
        "sources.ecsv",
    }
    assert main(["--pair", "7", "--size", "100", str(tmp_path)]) == 2
    assert "at least 256" in capsys.readouterr().err
