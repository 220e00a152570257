"""Time tracing many arcs back to common origins.

    python tests/benchmarks/bench_origins.py [--arcs 10000] [--runs 3] [--seed 1]

Arcs of three events among random ones, in fields of 5 arcmin over 60 degrees of sky;
the clock covers what ``latelight origins`` does with them: merging, search, regions,
calibration, sources, tables, map and picture, after one untimed small run that
compiles the loops.  Prints seconds, arcs a second and the ratio to a tenth of the arcs.
"""

from __future__ import annotations

import argparse
import json
import statistics
import tempfile
import time
from pathlib import Path

import numpy as np

UNKNOWN = (
    "away_angle", "score", "dust_depth", "dust_depth_err", "shift_px", "shift_err_px",
    "width_err", "width_err_px", "surface_brightness", "surface_brightness_err",
    "surface_brightness_err_counts", "profile_chi2", "curvature_radius",
    "source_separation",
)  # fmt: skip
LIT, EVENTS = 0.4, ((40.0, 10.0), (62.0, -8.0), (75.0, 22.0))


def catalogue(rng, count):
    """Return rows of a night's candidates."""
    from latelight.products.rows import CandidateRow
    from latelight.sky import offset_position, position_angle

    n_fields = max(6, count // 5)
    around = np.array(EVENTS)[rng.integers(len(EVENTS), size=n_fields)]
    field_ra, field_dec = offset_position(
        around[:, 0],
        around[:, 1],
        rng.uniform(0.0, 360.0, n_fields),
        rng.uniform(0.5, 30.0, n_fields),
    )
    field = rng.integers(n_fields, size=count)
    ra, dec = offset_position(
        field_ra[field],
        field_dec[field],
        rng.uniform(0.0, 360.0, count),
        0.04 * np.sqrt(rng.random(count)),
    )
    event = around[field]
    pa = position_angle(ra, dec, event[:, 0], event[:, 1]) + 180.0
    pa = np.where(
        rng.random(count) < LIT,
        pa + rng.normal(0.0, 10.0, count),
        rng.uniform(0.0, 360.0, count),
    )
    err = rng.uniform(1.0, 4.0, count)
    speed = 15.0 * 10.0 ** rng.normal(0.0, 0.2, count)
    unknown = dict.fromkeys(UNKNOWN)
    return [
        CandidateRow(
            **unknown,
            id=f"A{index:05d}",
            field=f"F{field[index]}",
            filter="r",
            template="first",
            science="second",
            mjd_template=60_000.0,
            mjd_science=60_300.0,
            ra=float(ra[index]),
            dec=float(dec[index]),
            snr=15.0,
            length=30.0,
            width=3.0,
            normal_pa=float(pa[index] % 360.0),
            normal_pa_err=float(err[index]),
            speed=float(speed[index]),
            speed_err=1.0,
            source="",
            verdict="arc",
            pair="second-first",
            x=0.0,
            y=0.0,
            normal_angle=0.0,
            normal_angle_err=2.0,
            length_px=75.0,
            width_px=7.0,
            surface_brightness_counts=10.0,
            sense_odds=5.0,
            lobes=2,
        )
        for index in range(count)
    ]


def write_night(folder, rows):
    """Write the tables that the command reads."""
    from latelight.origin.settings import OriginSettings
    from latelight.products.tables import candidate_table, to_ecsv

    folder.mkdir()
    (folder / "candidates.ecsv").write_bytes(to_ecsv(candidate_table(rows)))
    source = {"name": "Marrow", "ra": 40.0, "dec": 10.0, "distance_pc": 3000.0}
    record = {
        "settings": {"origin": OriginSettings().model_dump(), "sources": [source]}
    }
    (folder / "run.json").write_text(json.dumps(record))


def main():
    """Run the benchmark."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--arcs", type=int, default=10_000)
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    from latelight.reports.origins import trace_origins
    from latelight.threads import quiet_libraries

    quiet_libraries()
    rng = np.random.default_rng(options.seed)
    with tempfile.TemporaryDirectory() as scratch:
        nights = {}
        for count in (60, max(options.arcs // 10, 60), options.arcs):
            nights[count] = Path(scratch) / f"night{count}"
            if not nights[count].exists():
                write_night(nights[count], catalogue(rng, count))
        trace_origins([nights[60]])
        medians = {}
        for count in sorted(set(nights) - {60}):
            seconds, work = [], []
            for _ in range(options.runs):
                start, spent = time.perf_counter(), time.process_time()
                result = trace_origins([nights[count]])
                seconds.append(time.perf_counter() - start)
                work.append(time.process_time() - spent)
            medians[count] = statistics.median(seconds)
            found = ", ".join(
                f"{row.ra:.3f} {row.dec:+.3f} ({row.n_arcs} arcs)"
                for row in result.origins
            )
            print(
                f"{count} arcs: {medians[count]:.2f} s (worst {max(seconds):.2f}; of "
                f"all cores {statistics.median(work):.2f}), "
                f"{count / medians[count]:.0f} a second; origins {found or 'none'}",
                flush=True,
            )
    few, many = min(medians), max(medians)
    print(
        f"{many / few:.0f} times the arcs take {medians[many] / medians[few]:.1f} "
        "times as long"
    )


if __name__ == "__main__":
    main()
