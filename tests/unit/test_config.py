"""The settings file: every fault at once, each named with its rule and its cure."""

import glob
import tomllib
from pathlib import Path
from typing import get_args, get_origin

import pytest

from latelight.config import NightConfig, describe_keys, load_config
from latelight.errors import SettingsError

CONFIGS = Path(__file__).parents[2] / "configs"
SMALLEST = '[night]\nframes = ["frames/*.fits*"]\noutput = "night"\n'


@pytest.fixture
def load(tmp_path):
    def _load(text):
        path = tmp_path / "night.toml"
        path.write_text(text, encoding="utf-8")
        return load_config(path)

    return _load


def faults_of(load, text):
    with pytest.raises(SettingsError) as caught:
        load(text)
    return caught.value.faults


def test_the_smallest_file_takes_every_default(load):
    config = load(SMALLEST)
    assert config.header.mjd == "MJD-OBS"
    assert config.pairs.template == "earliest"
    assert config.pairs.min_days == 0.5
    assert config.sources == ()


def test_paths_are_relative_to_the_file(load, tmp_path):
    text = (
        SMALLEST
        + '[pairs]\ntemplate = "deep/a.fits"\n[origin]\nsource_table = "s.ecsv"\n'
    )
    config = load(text)
    assert config.night.output == str(tmp_path / "night")
    assert config.night.frames == (str(tmp_path / "frames/*.fits*"),)
    assert config.pairs.template == str(tmp_path / "deep/a.fits")
    assert config.origin.source_table == str(tmp_path / "s.ecsv")


def test_absolute_paths_stay(load):
    config = load('[night]\nframes = ["/data/*.fits"]\noutput = "/results"\n')
    assert config.night.frames == ("/data/*.fits",)
    assert config.night.output == "/results"


def test_signs_in_the_folder_of_the_file_are_no_wildcards(tmp_path):
    folder = tmp_path / "run[1]"
    (folder / "frames").mkdir(parents=True)
    (folder / "frames" / "a.fits").touch()
    (folder / "n.toml").write_text(SMALLEST)
    (pattern,) = load_config(folder / "n.toml").night.frames
    assert glob.glob(pattern) == [str(folder / "frames" / "a.fits")]  # noqa: PTH207


def test_a_whole_number_is_a_number(load):
    assert load(SMALLEST + "[pairs]\nmin_days = 3\n").pairs.min_days == 3.0


def test_sources_are_read_with_all_their_keys(load):
    (source,) = load(
        SMALLEST
        + '[[sources]]\nname = "Ember"\nra = 12\ndec = -3.5\ndistance_pc = 3000\n'
        "age_yr = 400\nage_at_mjd = 60000\n"
    ).sources
    assert (source.name, source.ra, source.distance_pc) == ("Ember", 12.0, 3000.0)


def test_all_faults_are_told_at_once_in_the_order_of_the_file(load, tmp_path):
    text = """
[night]
frames = "frames/*.fits"
outputt = "night"
[pairs]
min_days = "2 days"
[arcs]
threshold = -1
[motions]
x = 1
[[sources]]
name = "Ember"
ra = 400.0
dec = true
"""
    faults = faults_of(load, text)
    keys = [fault.split(":")[0] for fault in faults]
    assert set(keys) == {
        "night.frames", "night.output", "night.outputt", "pairs.min_days",
        "arcs.threshold", "motions", "sources[0].ra", "sources[0].dec",
    }  # fmt: skip
    said = dict(zip(keys, faults, strict=True))
    assert "must be an array in [ ]" in said["night.frames"]
    assert 'got "frames/*.fits"' in said["night.frames"]
    assert "missing (Folder for the results" in said["night.output"]
    assert "did you mean 'output'?" in said["night.outputt"]
    assert 'got "2 days"; write 2, without quotes or a unit' in said["pairs.min_days"]
    assert "[day]" in said["pairs.min_days"]
    assert "should be greater than or equal to" in said["arcs.threshold"]
    assert "got -1" in said["arcs.threshold"]
    assert "did you mean 'motion'?" in said["motions"]
    assert "got 400" in said["sources[0].ra"]
    assert "must be a number" in said["sources[0].dec"]
    assert "got true" in said["sources[0].dec"]


def test_every_line_of_the_text_names_the_file(load, tmp_path):
    with pytest.raises(SettingsError) as caught:
        load("[night]\nx = 1\n")
    lines = str(caught.value).splitlines()
    assert len(lines) == 3
    assert all(line.startswith(f"{tmp_path / 'night.toml'}: night.") for line in lines)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("[pairs]\ngain = 2\n", "pairs.gain: unknown key here; it belongs in [header]"),
        ("[header]\nfielt = 'A'\n", "header.fielt: unknown key; did you mean 'field'?"),
        ("[pairs]\nqqq = 2\n", "known here: template, min_days"),
        ("[pairs]\nmin_days = inf\n", "pairs.min_days: should be a finite number"),
        ("[pairs]\nmin_days = '12 px'\n", 'got "12 px"; write 12, without quotes'),
        ("[pairs]\nmin_days = 'long'\n", "write a plain number without quotes"),
        ("[pairs]\nmin_days = 0\n", "should be greater than 0"),
        ("[registration]\nmin_stars = 6.0\n", "must be a whole number"),
        ("[registration]\nmin_stars = '8 stars'\n", "write 8, without quotes"),
        ("[header]\nimage_hdu = 1.5\n", "header.image_hdu: must be"),
        ("[header]\nmjd = 3\n", "header.mjd: must be text in quotes"),
        ("pairs = 3\n", "pairs: must be a table"),
        ("[products]\ndifferences = 1\n", "differences: must be true or false"),
        (
            "[registration]\ninterpolation = 'cubic'\n",
            "should be 'least-squares', 'lanczos4' or 'lanczos3'",
        ),
        (
            "[[sources]]\nname='a'\nra=1\ndec=1\nage_yr=3\n",
            "sources[0]: age_yr and age_at_mjd belong together",
        ),
    ],
)  # fmt: skip
def test_each_kind_of_fault(load, text, expected):
    before, after = (text, "") if text.startswith("pairs =") else ("", text)
    (fault,) = faults_of(load, before + SMALLEST + after)
    assert expected in fault


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (b"[night]\nframes = [oops]\n", "line 2, column 11"),
        (b"[night\n", "line 1"),
        (b"[night]\na = 1\na = 2\n", "line 3"),
        (b"[night]\noutput = '\xff'\n", "not UTF-8 text"),
    ],
)
def test_text_that_is_no_toml(tmp_path, text, expected):
    path = tmp_path / "night.toml"
    path.write_bytes(text)
    with pytest.raises(SettingsError, match=expected):
        load_config(path)


def test_a_file_that_is_not_there(tmp_path):
    with pytest.raises(SettingsError, match="cannot be read: No such file"):
        load_config(tmp_path / "none.toml")


def test_the_file_of_every_key_is_the_models_own_text():
    path = CONFIGS / "every_key.toml"
    assert path.read_text(encoding="utf-8") == describe_keys(), (
        "run: python -m latelight.config > configs/every_key.toml"
    )


def test_the_file_of_every_key_holds_every_default(tmp_path):
    (tmp_path / "e.toml").write_text(describe_keys(), encoding="utf-8")
    config = load_config(tmp_path / "e.toml")
    plain = NightConfig(night=config.night)
    assert config == plain


def test_every_key_has_a_description_and_stands_in_the_file():
    text = describe_keys()
    written = tomllib.loads(text)
    for table, info in NightConfig.model_fields.items():
        many = get_origin(info.annotation) is tuple
        model = get_args(info.annotation)[0] if many else info.annotation
        assert f"# [[{table}]]" in text if many else table in written
        for key, field in model.model_fields.items():
            assert field.description, f"{table}.{key}"
            assert f"# {key} =" in text or key in written[table]


@pytest.mark.parametrize("path", sorted(CONFIGS.glob("*.toml")), ids=lambda p: p.name)
def test_the_settings_of_the_repository_load(path):
    load_config(path)


def test_the_output_is_named_without_detours(tmp_path):
    path = tmp_path / "configs" / "night.toml"
    path.parent.mkdir()
    path.write_text('[night]\nframes = ["a.fits"]\noutput = "../night"\n')

    assert load_config(path).night.output == str(tmp_path.resolve() / "night")
