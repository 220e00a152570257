"""Bad frames, bad settings, bad disks: a clear message, and nothing else lost."""

import errno
import gzip
import json
import re
import resource
import shutil
import subprocess
import sys

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from latelight.cli import main
from latelight.products import atomic

pytestmark = pytest.mark.e2e


# --- one bad frame is one failed row -----------------------------------------


def _with(header, **words):
    """Return a copy of a header with words set, or taken out where None."""
    header = header.copy()
    for word, value in words.items():
        name = word.replace("__", "-")
        if value is None:
            header.remove(name, ignore_missing=True)
        else:
            header[name] = value
    return header


def _write(path, pixels, header):
    fits.writeto(path, pixels, header, output_verify="ignore")


def _sip(header, *, suffix):
    names = {"CTYPE1": f"RA---TAN{suffix}", "CTYPE2": f"DEC--TAN{suffix}"}
    return _with(header, A_ORDER=2, B_ORDER=2, A_2_0=1e-5, B_0_2=1e-5, **names)


def _write_bad_frames(folder, pixels, header):
    """Write one file of every kind of fault, named for it, beside the good ones."""
    raw = (folder / "A_2.fits").read_bytes()
    (folder / "empty.fits").write_bytes(b"")
    (folder / "truncated.fits").write_bytes(raw[: len(raw) // 2])
    (folder / "cut_gzip.fits.gz").write_bytes(gzip.compress(raw)[:50_000])
    (folder / "no_fits.fits").write_bytes(b"a letter, not a frame\n" * 500)
    fits.PrimaryHDU(header=_with(header)).writeto(folder / "no_image.fits")
    _write(folder / "one_axis.fits", pixels[0], header)
    _write(folder / "cube.fits", np.stack([pixels] * 3), header)
    _write(folder / "bad_mjd.fits", pixels, _with(header, MJD__OBS="yesterday"))
    _write(folder / "far_mjd.fits", pixels, _with(header, MJD__OBS=1.0))
    _write(folder / "negative_gain.fits", pixels, _with(header, GAIN=-1.5))
    _write(folder / "no_exposure.fits", pixels, _with(header, EXPTIME=None))
    _write(folder / "no_filter.fits", pixels, _with(header, FILTER=None))
    no_time = {"MJD__OBS": None, "DATE__OBS": None}
    _write(folder / "no_time.fits", pixels, _with(header, **no_time))
    flat = {
        f"{kind}{i}_{j}": 0.0 for kind in ("PC", "CD") for i in (1, 2) for j in (1, 2)
    }
    singular = _with(header, **dict.fromkeys(flat), CDELT1=None, CDELT2=None)
    for word in ("CD1_1", "CD1_2", "CD2_1", "CD2_2"):
        singular[word] = 1e-4
    _write(folder / "singular_cd.fits", pixels, singular)
    _write(folder / "sip_unnamed.fits", pixels, _sip(header, suffix=""))
    both = _with(_sip(header, suffix="-SIP"), PV1_5=1e-4, PV2_5=1e-4)
    _write(folder / "sip_and_pv.fits", pixels, both)


def _write_bad_pixels(folder, pixels, header):
    """Write frames whose headers are right and whose pixels are useless."""
    shape = pixels.shape
    noise = np.random.default_rng(1).normal(300.0, 12.0, shape).astype(np.float32)

    def later(days):
        return _with(header, MJD__OBS=header["MJD-OBS"] + days, DATE__OBS=None)

    full = np.full(shape, header["SATURATE"], dtype=np.float32)
    _write(folder / "all_nan.fits", np.full(shape, np.nan, np.float32), later(1))
    _write(folder / "all_saturated.fits", full, later(2))
    _write(folder / "constant.fits", np.full(shape, 300.0, np.float32), later(3))
    _write(folder / "too_few_stars.fits", noise, later(4))
    away = _with(later(5), CRVAL2=header["CRVAL2"] + 3.0)
    _write(folder / "no_overlap.fits", pixels, away)
    _write(folder / "other_filter.fits", pixels, _with(later(6), FILTER="elsewhere"))
    _write(folder / "one_epoch.fits", pixels, _with(later(7), OBJECT="LONELY"))
    shutil.copy(folder / "A_2.fits", folder / "copy_of_A_2.fits")


@pytest.fixture(scope="module")
def bad_night(small_night, tmp_path_factory):
    """A night of two good pairs among bad frames: its folder, code and pairs."""
    folder = tmp_path_factory.mktemp("bad")
    shutil.copytree(small_night, folder, dirs_exist_ok=True)
    with fits.open(folder / "frames" / "A_2.fits") as file:
        pixels = file[0].data.astype(np.float32)
        header = file[0].header.copy()
    for word in ("BZERO", "BSCALE", "BITPIX"):
        header.remove(word, ignore_missing=True)
    _write_bad_frames(folder / "frames", pixels, header)
    _write_bad_pixels(folder / "frames", pixels, header)
    code = main(["run", str(folder / "night.toml"), "-q"])
    return folder, code, Table.read(folder / "night" / "pairs.ecsv")


REASONS = {
    "empty": "the file is empty",
    "truncated": "truncated|damaged",
    "cut_gzip": "truncated|damaged",
    "no_fits": "damaged or of another kind",
    "no_image": "no .*image",
    "one_axis": "axis|axes|dimension|2-D|no .*image",
    "cube": "axes|dimension|2-D|no .*image",
    "bad_mjd": "MJD-OBS must be a date like .*got 'yesterday'",
    "far_mjd": "between MJD 15020 and 88069",
    "negative_gain": r"GAIN \(gain\) must be above 0, got -1.5",
    "no_exposure": r"no word 'EXPTIME' \(exposure time\)",
    "no_filter": r"no word 'FILTER' \(filter\)",
    "no_time": r"no word 'MJD-OBS' \(epoch\), nor DATE-OBS",
    "singular_cd": "CD|matrix|singular",
    "sip_unnamed": "SIP",
    "sip_and_pv": "SIP.*PV|PV.*SIP",
    "all_nan": "NaN|no (valid|usable|good)|finite|blank|value",
    "all_saturated": "saturat",
    "constant": "constant|same value|no noise",
    "too_few_stars": "star",
    "no_overlap": "overlap",
    "other_filter": "one epoch only.*filter 'elsewhere'",
    "one_epoch": "one epoch only.*field 'LONELY'",
    "copy_of_A_2": r"duplicate of A_2.fits \(the files are byte for byte the same\)",
}


@pytest.mark.parametrize("name", REASONS)
def test_a_bad_frame_is_one_failed_row_with_its_reason(bad_night, name):
    _, _, pairs = bad_night
    (row,) = [row for row in pairs if row["science"] == name]
    assert row["status"] == "failed"
    assert "unexpected" not in row["reason"]
    found = re.search(REASONS[name], row["reason"])
    assert found, row["reason"]


def test_every_other_pair_is_finished(bad_night, small_night, tmp_path):
    folder, code, pairs = bad_night
    assert code == 1
    assert set(pairs["pair"][pairs["status"] == "done"]) == {"A_2-A_1", "B_2-B_1"}
    assert len(pairs) == 2 + len(REASONS)
    output = ["--output", str(tmp_path / "clean")]
    assert main(["run", str(small_night / "night.toml"), "-q", *output]) == 0
    for name in ("candidates.ecsv", "arcs.ecsv", "residuals.ecsv"):
        clean = (tmp_path / "clean" / name).read_bytes()
        assert (folder / "night" / name).read_bytes() == clean


def test_the_log_and_check_name_every_bad_frame_too(bad_night, capsys):
    folder, _, pairs = bad_night
    lines = (folder / "night" / "log.jsonl").read_text().splitlines()
    told = {line["pair"] for line in map(json.loads, lines) if line["level"] == "error"}
    assert told == set(pairs["pair"][pairs["status"] == "failed"])
    assert main(["check", str(folder / "night.toml")]) == 1
    said = capsys.readouterr().out
    for name in ("empty", "bad_mjd", "copy_of_A_2", "one_epoch"):
        assert f"unusable  {name}: " in said


WORDS = [
    *("SIMPLE", "BITPIX", "NAXIS", "NAXIS1", "NAXIS2", "MJD-OBS", "EXPTIME"),
    *("FILTER", "OBJECT", "GAIN", "RDNOISE", "SATURATE", "MAGZERO"),
]


def test_a_night_without_wcs_is_worked_in_pixels(small_night, tmp_path):
    (tmp_path / "frames").mkdir()
    for epoch in (1, 2):
        with fits.open(small_night / "frames" / f"A_{epoch}.fits") as file:
            header = fits.Header([file[0].header.cards[w] for w in WORDS])
            _write(tmp_path / "frames" / f"A_{epoch}.fits", file[0].data, header)
    (tmp_path / "n.toml").write_text('[night]\nframes = ["frames/*"]\noutput = "o"\n')
    assert main(["run", str(tmp_path / "n.toml"), "-q"]) == 0
    found = Table.read(tmp_path / "o" / "candidates.ecsv")
    assert len(found) > 0
    for name in ("ra", "dec", "speed", "normal_pa", "surface_brightness"):
        assert found[name].mask.all(), name
    assert (found["shift_px"] > 0).any()
    assert all(name.startswith("A_2-A_1_X") for name in found["id"])
    log = (tmp_path / "o" / "log.jsonl").read_text()
    assert "sky columns are empty: the science frame has no celestial WCS" in log


# --- settings and output: exit code 2 ----------------------------------------


def test_all_faults_of_the_settings_are_told_at_once(tmp_path, capsys):
    path = tmp_path / "n.toml"
    path.write_text(
        '[night]\nframes = ["*.fits"]\nouput = "o"\n[pairs]\nmin_days = "1 d"\n'
        "[arcs]\nthreshold = -3\n"
    )
    for command in ("run", "check"):
        assert main([command, str(path)]) == 2
        lines = capsys.readouterr().err.splitlines()
        assert len(lines) == 4
        assert all(line.startswith(f"{path}: ") for line in lines)
        assert any(
            "night.ouput: unknown key; did you mean 'output'?" in x for x in lines
        )


@pytest.mark.parametrize(
    ("more", "expected"),
    [
        ("", "night.frames: no file matches"),
        ('[pairs]\ntemplate = "none.fits"\n', "pairs.template: "),
        ('[origin]\nsource_table = "none.ecsv"\n', "none.ecsv: cannot be read"),
        (
            '[[sources]]\nname="E"\nra=1\ndec=1\n[[sources]]\nname="E"\nra=2\ndec=1\n',
            "sources: names must differ, got 'E' twice",
        ),
    ],
)  # fmt: skip
def test_faults_that_show_only_on_the_disk(
    small_night, tmp_path, capsys, more, expected
):
    frames = tmp_path / "none*.fits" if not more else small_night / "frames" / "*.fits"
    path = tmp_path / "n.toml"
    path.write_text(f'[night]\nframes = ["{frames}"]\noutput = "o"\n{more}')
    assert main(["run", str(path)]) == 2
    said = capsys.readouterr().err
    assert expected in said
    assert said.startswith(str(tmp_path))


@pytest.mark.parametrize("place", ["taken", "taken/below", "/proc/nothing_can_be_made"])
def test_an_output_folder_that_cannot_be_made(small_night, tmp_path, capsys, place):
    (tmp_path / "taken").write_text("a file")
    output = tmp_path / place
    assert main(["run", str(small_night / "night.toml"), "--output", str(output)]) == 2
    said = capsys.readouterr().err
    assert "cannot be written" in said
    assert "set another output folder" in said or "make it first" in said


def test_a_disk_that_fills_up_leaves_no_half_file(
    small_night, tmp_path, capsys, monkeypatch
):
    """The system refuses the third file, after its bytes were handed over."""
    calls = []

    def fsync(_):
        calls.append(1)
        if len(calls) == 3:
            raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(atomic.os, "fsync", fsync)
    output = tmp_path / "o"
    assert (
        main(["run", str(small_night / "night.toml"), "-q", "--output", str(output)])
        == 2
    )
    said = capsys.readouterr().err
    assert "No space left on device" in said
    assert "free some space" in said
    assert not list(output.rglob("*.part"))
    assert not (output / "candidates.ecsv").exists()


def test_a_file_too_large_for_the_system_is_told(small_night, tmp_path):
    """The same from outside: the process may write no file of 60 kB or more."""
    run = subprocess.run(
        [sys.executable, "-m", "latelight", "run", str(small_night / "night.toml"),
         "--output", str(tmp_path / "o")],
        capture_output=True, text=True, check=False,
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (60_000, 60_000)),
    )  # fmt: skip
    assert run.returncode == 2
    assert "File too large" in run.stderr
    assert "Traceback" not in run.stderr
    assert not list((tmp_path / "o").rglob("*.part"))


def test_a_fault_of_the_program_costs_one_pair(small_night, tmp_path, monkeypatch):
    from latelight.night import chain

    find_all = chain.find_all

    def faulty(difference, matched, *, pair, **rest):
        if pair.name == "A_2-A_1":
            raise ZeroDivisionError("a fault of the program")
        return find_all(difference, matched, pair=pair, **rest)

    monkeypatch.setattr(chain, "find_all", faulty)
    output = ["--output", str(tmp_path / "o")]
    assert main(["run", str(small_night / "night.toml"), "-q", *output]) == 1
    pairs = Table.read(tmp_path / "o" / "pairs.ecsv")
    assert list(pairs["pair"]) == ["A_2-A_1", "B_2-B_1"]
    assert list(pairs["status"]) == ["failed", "done"]
    assert "unexpected ZeroDivisionError: a fault of the program" in pairs["reason"][0]
    # What went well before stays in the row, and the log tells the rest.
    assert pairs["noise_ratio"][0] > 0
    log = (tmp_path / "o" / "log.jsonl").read_text()
    assert "Traceback" in log
