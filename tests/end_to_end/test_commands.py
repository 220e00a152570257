"""The commands as a user runs them, on a small simulated night."""

import fcntl
import json
import os
import pty
import shutil
import signal
import struct
import subprocess
import sys
import termios
import time

import numpy as np
import pytest
from astropy.table import Table

from latelight.cli import main
from latelight.sky import separation_deg

pytestmark = pytest.mark.e2e


@pytest.fixture(scope="module")
def night(small_night, tmp_path_factory):
    """The small night, run once with one job; returns its folder."""
    folder = tmp_path_factory.mktemp("run") / "n"
    shutil.copytree(small_night, folder)
    assert main(["run", str(folder / "night.toml"), "-q"]) == 0
    return folder


def files_of(folder):
    return {
        str(p.relative_to(folder)): p.read_bytes()
        for p in folder.rglob("*")
        if p.is_file()
    }


def latelight(*arguments, **kwargs):
    command = [sys.executable, "-m", "latelight", *map(str, arguments)]
    return subprocess.run(
        command, capture_output=True, text=True, check=False, **kwargs
    )


def test_run_leaves_every_product(night):
    candidates = Table.read(night / "night" / "candidates.ecsv")
    assert len(candidates) > 0
    expected = {
        "candidates.ecsv", "candidates.fits", "candidates.vot", "arcs.ecsv",
        "pairs.ecsv", "residuals.ecsv", "run.json", "log.jsonl", "series.ecsv",
        "tracks.ecsv", "tracks.fits", "tracks.vot", "track_points.ecsv",
        "interpretations.ecsv",
    }  # fmt: skip
    for name in candidates["id"]:
        expected |= {f"cutouts/{name}.fits", f"cutouts/{name}.png"}
    assert set(files_of(night / "night")) == expected


def test_the_tables_of_a_run_agree(night):
    tables = {
        n: Table.read(night / "night" / f"{n}.ecsv")
        for n in ("candidates", "arcs", "pairs")
    }
    pairs = tables["pairs"]
    assert list(pairs["status"]) == ["done", "done"]
    assert pairs["n_candidates"].sum() == len(tables["candidates"])
    assert pairs["n_arcs"].sum() == len(tables["arcs"])
    kept = tables["arcs"][tables["arcs"]["verdict"] == "arc"]
    assert set(kept["candidate"]) == set(tables["candidates"]["id"])
    assert list(tables["candidates"]["snr"]) == sorted(
        tables["candidates"]["snr"], reverse=True
    )


def test_the_record_of_a_run(night):
    record = json.loads((night / "night" / "run.json").read_text())
    assert record["status"] == "ended"
    assert (record["pairs_done"], record["pairs_failed"]) == (2, 0)
    assert len(record["inputs"]) == 4
    assert all(len(entry["sha256"]) == 64 for entry in record["inputs"])
    assert record["settings"]["pairs"]["min_days"] == 0.5
    assert record["versions"]["latelight"]
    log = (night / "night" / "log.jsonl").read_text()
    lines = [json.loads(line) for line in log.splitlines()]
    assert {line["run"] for line in lines} == {record["run"]}
    stages = {line["stage"] for line in lines if "seconds" in line and line["pair"]}
    assert stages >= {
        "frames", "stars", "registration", "resampling", "matching", "subtraction",
        "arcs", "motion", "origin", "products",
    }  # fmt: skip
    assert not [line for line in lines if line["level"] in ("warning", "error")]


def test_any_number_of_jobs_gives_the_same_catalogues(night, tmp_path):
    said = latelight(
        "run", night / "night.toml", "--jobs", 2, "--output", tmp_path / "two"
    )
    assert said.returncode == 0, said.stderr
    one, two = files_of(night / "night"), files_of(tmp_path / "two")
    # Times and memory differ from run to run, nothing else does.
    varying = {"pairs.ecsv", "run.json", "log.jsonl"}
    assert {n: b for n, b in one.items() if n not in varying} == {
        n: b for n, b in two.items() if n not in varying
    }
    pairs = [Table.read(f / "pairs.ecsv") for f in (night / "night", tmp_path / "two")]
    for table in pairs:
        table.remove_columns(["seconds", "peak_memory"])
    assert pairs[0].pformat() == pairs[1].pformat()


def test_results_go_to_stdout_and_plain_lines_to_stderr(night, tmp_path):
    said = latelight("run", night / "night.toml", "--output", tmp_path / "out")
    assert said.returncode == 0
    lines = said.stderr.splitlines()
    assert [line.split("]")[0] for line in lines] == ["[1/2", "[2/2"]
    assert "\r" not in said.stderr
    assert said.stdout.splitlines()[0].split() == [
        "candidate", "position", "S/N", "arcsec/yr", "towards", "source", "score",
    ]  # fmt: skip
    ids = Table.read(tmp_path / "out" / "candidates.ecsv")["id"]
    shown = [line.split()[0] for line in said.stdout.splitlines()[1 : len(ids) + 1]]
    assert shown == list(ids)
    assert said.stdout.splitlines()[-1].startswith("2 pairs done, 0 failed;")


def test_a_second_run_clears_what_the_first_one_left(night, tmp_path):
    shutil.copytree(night, tmp_path / "n")
    folder = tmp_path / "n"
    (folder / "night" / "cutouts" / "mine.txt").write_text("a note of the user")
    for path in (folder / "frames").glob("A_*"):
        path.unlink()
    assert main(["run", str(folder / "night.toml"), "-q"]) == 0
    left = {p.name for p in (folder / "night" / "cutouts").iterdir()}
    ids = Table.read(folder / "night" / "candidates.ecsv")["id"]
    assert left == {"mine.txt"} | {
        f"{i}.{kind}" for i in ids for kind in ("fits", "png")
    }


def test_check_lists_the_pairs_and_writes_nothing(small_night, capsys):
    before = files_of(small_night)
    assert main(["check", str(small_night / "night.toml")]) == 0
    said = capsys.readouterr().out
    assert "A_1" in said
    assert "4 frames in 2 pairs, 0 unusable" in said
    assert files_of(small_night) == before


@pytest.mark.parametrize("choice", ["sharpest", "deepest"])
def test_check_can_measure_frames_to_choose_a_template(
    small_night, tmp_path, capsys, choice
):
    text = (
        (small_night / "night.toml")
        .read_text()
        .replace("frames/", f"{small_night}/frames/")
    )
    text = text.replace("sources.ecsv", f"{small_night}/sources.ecsv")
    (tmp_path / "n.toml").write_text(f'{text}\n[pairs]\ntemplate = "{choice}"\n')
    assert main(["check", str(tmp_path / "n.toml")]) == 0
    assert "4 frames in 2 pairs" in capsys.readouterr().out


def test_the_proper_method_runs_too(small_night, tmp_path):
    text = (
        (small_night / "night.toml")
        .read_text()
        .replace("frames/*", f"{small_night}/frames/A_*")
    )
    text = text.replace("sources.ecsv", f"{small_night}/sources.ecsv")
    text += '[subtraction]\nmethod = "proper"\n[products]\ndifferences = true\n'
    (tmp_path / "n.toml").write_text(text)
    assert main(["run", str(tmp_path / "n.toml"), "-q"]) == 0
    pairs = Table.read(tmp_path / "night" / "pairs.ecsv")
    stem = tmp_path / "night" / "differences" / pairs["pair"][0]
    assert stem.with_name(stem.name + ".fits").exists()
    assert stem.with_name(stem.name + ".png").exists()


def interrupted_run(settings, output):
    """Stop a run of two pairs after its first; return its exit code and talk."""
    command = [
        sys.executable, "-m", "latelight", "run", str(settings),
        "--output", str(output),
    ]  # fmt: skip
    with subprocess.Popen(
        command, stderr=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as run:
        assert run.stderr.readline().startswith("[1/2]")
        run.send_signal(signal.SIGINT)
        start = time.monotonic()
        _, stderr = run.communicate(timeout=60)
    assert time.monotonic() - start < 30
    return run.returncode, stderr


def test_an_interrupt_keeps_what_was_finished(small_night, tmp_path):
    """The first pair is finished, the second one is stopped."""
    for attempt in range(5):
        output = tmp_path / f"out{attempt}"
        code, stderr = interrupted_run(small_night / "night.toml", output)
        # The signal may come too late, but not five times.
        if "[2/2]" not in stderr:
            break
    assert code == 130
    assert "Traceback" not in stderr
    pairs = Table.read(output / "pairs.ecsv")
    assert sorted(pairs["status"]) == ["done", "failed"]
    assert any("interrupted" in reason for reason in pairs["reason"])


def test_version_and_help_are_quick():
    import latelight as package

    assert latelight("--version").stdout.strip() == f"latelight {package.__version__}"
    seconds = []
    for _ in range(3):
        start = time.monotonic()
        assert latelight("--help").returncode == 0
        seconds.append(time.monotonic() - start)
    assert min(seconds) < 1.0  # 0.1 s on an idle machine


@pytest.mark.parametrize(
    "arguments",
    [
        [],
        ["run"],
        ["walk", "n.toml"],
        ["run", "n.toml", "--jobs", "0"],
        ["run", "n.toml", "--jobs", "x"],
    ],
)
def test_wrong_usage_is_exit_2(arguments, capsys):
    with pytest.raises(SystemExit) as ended:
        main(arguments)
    assert ended.value.code == 2


def test_output_to_a_closed_pipe_is_no_traceback(small_night):
    read, write = os.pipe()
    os.close(read)
    command = [
        sys.executable,
        "-m",
        "latelight",
        "check",
        str(small_night / "night.toml"),
    ]
    run = subprocess.run(
        command, stdout=write, stderr=subprocess.PIPE, text=True, check=False
    )
    os.close(write)
    assert "Traceback" not in run.stderr


def test_a_terminal_gets_a_bar(small_night, tmp_path):
    """Standard error is a terminal here, standard output is not."""
    ours, theirs = pty.openpty()
    rows_and_columns = struct.pack("HHHH", 24, 80, 0, 0)
    fcntl.ioctl(theirs, termios.TIOCSWINSZ, rows_and_columns)
    command = [
        sys.executable,
        "-m",
        "latelight",
        "run",
        str(small_night / "night.toml"),
    ]
    command += ["--output", str(tmp_path / "o")]
    with subprocess.Popen(
        command, stderr=theirs, stdout=subprocess.PIPE, text=True
    ) as run:
        os.close(theirs)
        shown = b""
        while True:
            try:
                piece = os.read(ours, 4096)
            except OSError:  # the other side has closed
                break
            if not piece:
                break
            shown += piece
        said, _ = run.communicate(timeout=60)
    os.close(ours)
    assert run.returncode == 0
    assert "\r" not in said
    assert b"pairs:" in shown
    assert b"2/2" in shown


def test_more_talk_tells_every_stage(small_night, tmp_path, capsys):
    output = ["--output", str(tmp_path / "o")]
    assert main(["run", str(small_night / "night.toml"), "-vv", *output]) == 0
    said = capsys.readouterr().err
    assert "A_2-A_1: subtraction done (" in said


def test_motion_runs_from_the_earlier_to_the_later_epoch(night, small_night, tmp_path):
    """With the later frame as the template the arcs still move the same way."""
    (tmp_path / "n.toml").write_text(
        f'[night]\nframes = ["{small_night}/frames/A_*"]\noutput = "o"\n'
        f'[pairs]\ntemplate = "{small_night}/frames/A_2.fits"\n'
    )
    assert main(["run", str(tmp_path / "n.toml"), "-q"]) == 0
    swapped = Table.read(tmp_path / "o" / "candidates.ecsv")[0]
    plain = Table.read(night / "night" / "candidates.ecsv")
    plain = plain[plain["field"] == swapped["field"]][0]
    assert (swapped["template"], swapped["science"]) == ("A_2", "A_1")
    gap = (swapped["normal_pa"] - plain["normal_pa"] + 180.0) % 360.0 - 180.0
    assert abs(gap) < 5.0 * np.hypot(swapped["normal_pa_err"], plain["normal_pa_err"])
    # The bright ridge is where each science frame shows it: it moves that way.
    error = np.hypot(swapped["speed_err"], plain["speed_err"])
    assert abs(swapped["speed"] - plain["speed"]) < 5.0 * error


def test_an_echo_is_found_where_it_is_and_traced_to_its_source(night, small_night):
    truth = Table.read(small_night / "truth.ecsv")
    truth = truth[truth["bound"] > 20.0]
    found = Table.read(night / "night" / "candidates.ecsv")
    assert len(truth) > 0
    for echo in truth:
        gap = (
            separation_deg(echo["ra"], echo["dec"], found["ra"], found["dec"]) * 3600.0
        )
        nearest = found[int(np.argmin(gap))]
        assert gap.min() < 10.0
        turn = (nearest["normal_pa"] - echo["normal_pa"] + 180.0) % 360.0 - 180.0
        assert abs(turn) < 10.0
        assert nearest["speed"] == pytest.approx(echo["speed_arcsec_yr"], rel=0.25)
        assert nearest["source"] == echo["source"]
