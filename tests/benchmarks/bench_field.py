"""Time a field of several epochs, files to tracks, against one pair of its frames.

    python tests/benchmarks/bench_field.py [--epochs 5] [--size 1024] [--runs 3]

Both are whole runs of ``latelight run`` on the same files in processes of their
own, in turn, on an otherwise idle machine; each clock starts after the imports and
after one untimed run on a small field, so that neither pays for compilation.  The
pair is the first and the last epoch.
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


def write_settings(folder, name, frames, template):
    """Write a settings file for some frames; return its path."""
    listed = ", ".join(f'"{frame}"' for frame in frames)
    path = folder / f"{name}.toml"
    path.write_text(
        f'[night]\nframes = [{listed}]\noutput = "{folder}/out-{name}"\n'
        f'[pairs]\ntemplate = "{template}"\n'
    )
    return path


def make(folder, seed, size, epochs, template):
    """Write a field; return the settings of one pair and of the whole field."""
    from latelight.simulation.fields import random_field

    place = folder / f"field-{size}"
    paths = random_field(seed, epochs=epochs, size=size).write(place)
    pair = write_settings(folder, f"pair-{size}", (paths[0], paths[-1]), "earliest")
    return pair, write_settings(folder, f"field-{size}", paths, template)


def run_here(small, timed):
    """Warm up on a small field, time a run, print one JSON line."""
    from latelight.cli import main as latelight

    latelight(["run", small, "--quiet"])
    start = time.perf_counter()
    if latelight(["run", timed, "--quiet"]) != 0:
        sys.exit("the run failed")
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
    print(json.dumps({"seconds": seconds, "peak_gb": peak}))


def measure(small, timed):
    """Time a run in a process of its own."""
    command = [sys.executable, __file__, "--here", str(small), str(timed)]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    return json.loads(done.stdout.splitlines()[-1])


def stages(folder):
    """Return seconds a stage, all pairs and series together, from the run's log."""
    total = {}
    for line in (folder / "log.jsonl").read_text().splitlines():
        event = json.loads(line)
        if event["stage"] and "seconds" in event:
            total[event["stage"]] = total.get(event["stage"], 0) + event["seconds"]
    return total


def main():
    """Time the runs in turn and print the ratio."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--epochs", type=int, default=5)
    parser.add_argument("--size", type=int, default=1024)
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--template", default="earliest", help="of the field's run")
    parser.add_argument("--here", nargs=2, help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.here:
        return run_here(*options.here)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        _, small = make(folder, options.seed, 384, 3, options.template)
        pair, field = make(
            folder, options.seed, options.size, options.epochs, options.template
        )
        ratios = []
        for _ in range(options.runs):
            one, all_epochs = measure(small, pair), measure(small, field)
            ratios.append(all_epochs["seconds"] / one["seconds"])
            print(
                f"pair {one['seconds']:.2f} s, {one['peak_gb']:.2f} GB; "
                f"{options.epochs} epochs {all_epochs['seconds']:.2f} s, "
                f"{all_epochs['peak_gb']:.2f} GB; ratio {ratios[-1]:.2f}"
            )
        print(f"median ratio {statistics.median(ratios):.2f} (aim: under 6)")
        for stage, seconds in stages(folder / f"out-field-{options.size}").items():
            print(f"  {stage:14s} {seconds / (options.runs or 1):7.2f} s")
    return 0


if __name__ == "__main__":
    sys.exit(main())
