"""Time one pair, files to candidates, beside the chain composed by hand.

    python tests/benchmarks/bench_pair.py [--size 2048] [--runs 3] [--seed 1]

Both read the same two files and run in processes of their own, in turn, on an
otherwise idle machine; the clock of each starts after its imports and after one
untimed run on a small pair, so that neither pays for compilation.  Cosmic-ray
masks, tables, cutouts and pictures are part of latelight's time.  Memory is the
peak of the whole process.
"""

from __future__ import annotations

import argparse
import json
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

HAND_CHAIN = Path(__file__).with_name("hand_chain.py")
STARS_PER_PIXEL = 10_000 / 2048**2


def settings_text(folder, pair, sources):
    """Return a settings file for one pair."""
    text = (
        f'[night]\nframes = ["{pair}/science.fits"]\n'
        f'output = "{folder}/out-{pair.name}"'
        f'\n[pairs]\ntemplate = "{pair}/template.fits"\n'
    )
    for source in sources:
        text += (
            f'[[sources]]\nname = "{source.name}"\nra = {source.ra!r}\n'
            f"dec = {source.dec!r}\ndistance_pc = {source.distance_pc!r}\n"
            f"age_yr = {source.age_yr!r}\nage_at_mjd = {source.age_at_mjd!r}\n"
        )
    return text


def make(folder, seed, size, n_stars):
    """Write a pair and its settings file; return the path of the latter."""
    from latelight.simulation.scenes import random_pair

    pair = random_pair(seed, kind="echoes", size=size, n_stars=n_stars)
    place = folder / f"pair-{size}"
    place.mkdir()
    pair.write(place)
    path = folder / f"night-{size}.toml"
    path.write_text(settings_text(folder, place, pair.truth.sources))
    return path


def run_here(small, large):
    """Warm up on the small night, time the large one, print one JSON line."""
    from latelight.cli import main as latelight

    latelight(["run", small, "--quiet"])
    start = time.perf_counter()
    if latelight(["run", large, "--quiet"]) != 0:
        sys.exit("the pair failed")
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
    print(json.dumps({"total": round(seconds, 3), "peak_gb": round(peak, 3)}))


def measure(*command):
    """Run a command and return the JSON of its last line."""
    done = subprocess.run(
        [sys.executable, *map(str, command)], capture_output=True, text=True, check=True
    )
    return json.loads(done.stdout.splitlines()[-1])


def stage_seconds(output):
    """Return seconds a stage from the run's log, in order."""
    events = [json.loads(line) for line in (output / "log.jsonl").open()]
    return {
        event["stage"] + (" written" if not event.get("pair") else ""): event["seconds"]
        for event in events
        if event["run"] == events[-1]["run"]
        and event.get("stage")
        and event.get("seconds") is not None
    }


def main():
    """Print the comparison."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--size", type=int, default=2048)
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--here", nargs=2, help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.here:
        run_here(*options.here)
        return
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        n_stars = round(STARS_PER_PIXEL * options.size**2)
        small = make(folder, options.seed + 1, 512, None)
        large = make(folder, options.seed, options.size, n_stars)
        frames = folder / f"pair-{options.size}"
        ours, theirs = [], []
        for _ in range(options.runs):
            theirs.append(
                measure(HAND_CHAIN, frames / "template.fits", frames / "science.fits")
            )
            ours.append(measure(__file__, "--here", small, large))
            ratio = ours[-1]["total"] / theirs[-1]["total"]
            print(f"latelight {ours[-1]}  by hand {theirs[-1]}  ratio {ratio:.3f}")
        ratios = [a["total"] / b["total"] for a, b in zip(ours, theirs, strict=True)]
        print(f"{options.size} x {options.size}, {n_stars} stars, {options.runs} runs")
        print(f"ratio: median {statistics.median(ratios):.3f}, all {ratios}")
        print(f"peak memory, GB: {max(o['peak_gb'] for o in ours)}")
        print("seconds a stage, last run:")
        for stage, seconds in stage_seconds(
            folder / f"out-pair-{options.size}"
        ).items():
            print(f"  {stage:<16}{seconds:8.3f}")


if __name__ == "__main__":
    main()
