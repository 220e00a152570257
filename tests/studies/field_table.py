"""Measure tracks over many epochs against simulated truth, on fields never seen before.

    python tests/studies/field_table.py [--fields 12] [--seed N] [--jobs 2]

Each field of five epochs is run as a night; then again without its last epoch, at
which the places of its tracks are forecast and compared with the truth.  Further
fields hold no echo but every nuisance, and fields of faint echoes tell how much
fainter an arc all epochs together show than the best pair.  The seed comes from the
clock unless given, and is printed.  Exit code 1 when a line misses its target.
"""

import argparse
import contextlib
import dataclasses
import io
import sys
import tempfile
import time
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path

import numpy as np
from courses import Course, stated_to_true, true_sky
from depth import run_depth_field, summarise_depth
from figures import Table, fraction, robust_width

SETTINGS = """\
[night]
frames = [{frames}]
output = "{output}"

[pairs]
template = "{template}"

[origin]
source_table = "sources.ecsv"
"""


@dataclasses.dataclass
class Match:
    """One echo, and the track that follows it, if any."""

    bound: float
    bound_best: float
    surface_brightness: float
    found: bool
    found_in: str = ""
    verdict: str = ""
    efficiency: float = np.nan
    right_sense: bool = False
    direction_error: float = np.nan
    direction_pull: float = np.nan
    speed_ratio: float = np.nan
    speed_pull: float = np.nan
    place_error: float = np.nan
    place_pull: float = np.nan
    right_source: bool = False


@dataclasses.dataclass
class Forecast:
    """One track's forecast for the epoch that was held out."""

    bound: float
    moved: float
    error: float
    pull: float


@dataclasses.dataclass
class Result:
    """What one field gave."""

    index: int
    kind: str
    status: str
    seconds: float = np.nan
    matches: list = dataclasses.field(default_factory=list)
    false: list = dataclasses.field(default_factory=list)
    repeated: int = 0
    forecasts: list = dataclasses.field(default_factory=list)


def run_night(folder, name, paths, template):
    """Run a night on some frames; return its output folder and its seconds."""
    from latelight.cli import main as latelight

    output = folder / name
    frames = ", ".join(f'"{path}"' for path in paths)
    settings = folder / f"{name}.toml"
    settings.write_text(
        SETTINGS.format(frames=frames, output=output, template=template)
    )
    start = time.perf_counter()
    with contextlib.redirect_stdout(io.StringIO()):
        code = latelight(["run", str(settings), "--quiet"])
    if code != 0:
        msg = f"the run of {settings} ended with {code}"
        raise RuntimeError(msg)
    return output, time.perf_counter() - start


def tracks_of(output):
    """Return the tracks of a night that are worth a look, and the others."""
    from latelight.products.reading import read_tracks

    rows = read_tracks(output)
    kept = [row for row in rows if row.verdict == "track"]
    return kept, [row for row in rows if row.verdict != "track"]


class Sky:
    """The true sky of what is found on the frames of a field."""

    def __init__(self, field, paths):
        self.truth = field.truth
        self._frames = dict(
            zip((path.stem for path in paths), field.truth.frames, strict=True)
        )
        self._headers = dict(
            zip(
                (path.stem for path in paths),
                (frame.header for frame in field.frames),
                strict=True,
            )
        )

    def place(self, row):
        """Return where a track truly is, by its pixels."""
        return true_sky(self._frames[row.grid], row.x, row.y)

    def corrected(self, grid, ra, dec):
        """Return the true place of one that a grid's header states."""
        from astropy.wcs import WCS

        return stated_to_true(self._frames[grid], WCS(self._headers[grid]), ra, dec)

    def on(self, course, row):
        """Tell whether a track lies on an echo."""
        mjds = (row.mjd,)
        return course.holds(*self.place(row), length=row.length or 0.0, mjds=mjds)


def measure(match, course, row, sky, sources):
    """Compare a track with the truth."""
    from latelight.sky import wrap_180

    echo = course.echo
    match.efficiency = row.snr / echo.bound_all
    match.found_in = row.found_in
    match.right_source = row.source == echo.source
    ahead = course.ahead(*sky.place(row), row.mjd, length=row.length or 0.0)
    match.place_error = ahead
    if row.place_err:
        match.place_pull = ahead / row.place_err
    if row.normal_pa is not None:
        error = float(wrap_180(row.normal_pa - echo.normal_pa))
        match.right_sense = abs(error) < 90.0
        folded = error if match.right_sense else float(wrap_180(error + 180.0))
        match.direction_error = abs(folded)
        if row.normal_pa_err:
            match.direction_pull = folded / row.normal_pa_err
    if row.speed is not None and row.speed_err:
        speed, err = mean_speed(row, echo.mjd)
        match.speed_ratio = speed / echo.speed_arcsec_yr
        match.speed_pull = (speed - echo.speed_arcsec_yr) / err


def mean_speed(row, mjd):
    """Return a track's speed at the middle of the span, and its error."""
    if row.speed_change is None or row.speed_change_err is None:
        return row.speed, row.speed_err
    years = (mjd - row.mjd) / 365.25
    variance = (
        row.speed_err**2
        + 2.0 * years * (row.speed_change_cov or 0.0)
        + (years * row.speed_change_err) ** 2
    )
    return row.speed + years * row.speed_change, np.sqrt(max(variance, 1e-12))


def judge_tracks(result, field, courses, output, sky):
    """Match a night's tracks with the echoes of its field."""
    kept, aside = tracks_of(output)
    used = set()
    grid = field.truth.grid
    for course in courses:
        echo = course.echo
        on = [row for row in kept if sky.on(course, row)]
        match = Match(
            echo.bound_all, echo.bound_best, echo.surface_brightness[grid], bool(on)
        )
        result.matches.append(match)
        used.update(row.id for row in on)
        if on:
            best = max(on, key=lambda row: row.snr)
            measure(match, course, best, sky, field.truth.sources)
        else:
            near = [row for row in aside if sky.on(course, row)]
            match.verdict = near[0].verdict if near else "nothing there"
    result.false = [
        f"({row.x:.0f}, {row.y:.0f}) snr {row.snr:.1f} length {row.length_px:.0f} px "
        f"speed {row.speed or np.nan:.1f} arcsec/yr from {row.found_in}"
        for row in kept
        if row.id not in used
    ]
    result.repeated = len(used) - sum(match.found for match in result.matches)


def judge_forecasts(field, courses, output, sky):
    """Compare the places forecast for the last epoch with the truth."""
    from latelight.forecast.predict import predict
    from latelight.products.reading import read_track_points
    from latelight.reports.moving_arcs import arc_of_track

    kept, _ = tracks_of(output)
    points = read_track_points(output)
    last = field.truth.mjds[-1]
    forecasts = []
    for row in kept:
        followed = arc_of_track(row, points)
        on = [course for course in courses if sky.on(course, row)]
        if followed is None or not on:
            continue
        there = predict(followed.arc, last)
        place = sky.corrected(row.grid, there.ra, there.dec)
        error = on[0].ahead(*place, last, length=row.length or 0.0)
        forecasts.append(
            Forecast(
                on[0].echo.bound_all, there.offset, error, error / there.offset_err
            )
        )
    return forecasts


def run_field(index, seed, kind, options):
    """Simulate one field, run it, run it without its last epoch, and judge both."""
    from latelight.simulation.fields import random_field
    from latelight.simulation.tables import source_rows, write_table
    from latelight.threads import set_threads

    set_threads(1)
    field = random_field(seed, kind=kind, size=options.size, epochs=options.epochs)
    folder = Path(options.keep or tempfile.mkdtemp()) / f"field{index:02d}"
    paths = field.write(folder)
    sources = field.truth.sources + field.decoys
    write_table(folder / "sources.ecsv", source_rows(sources))
    result = Result(index, kind, "done")
    sky = Sky(field, paths)
    courses = [Course(field.truth, echo) for echo in field.truth.echoes]
    try:
        output, result.seconds = run_night(folder, "all", paths, options.template)
        judge_tracks(result, field, courses, output, sky)
        if courses and not options.no_forecast:
            output, _ = run_night(folder, "before", paths[:-1], options.template)
            result.forecasts = judge_forecasts(field, courses, output, sky)
    except RuntimeError as error:
        result.status = str(error)
    return result


def summarise(results, table):
    """Print the table of tracks."""
    done = [r for r in results if r.status == "done"]
    matches = [m for r in done for m in r.matches]
    found = [m for m in matches if m.found]
    strong = [m for m in found if m.bound >= 20]
    table.at_least("fields done", [r.status == "done" for r in results], 1.0)
    for low, high, limit in ((20, np.inf, 0.95), (10, 20, 0.75)):
        inside = [m.found for m in matches if low <= m.bound < high]
        table.at_least(f"tracks found, bound {low}-{high:g}", inside, limit)
    inside = [m.found for m in matches if m.bound < 10]
    print(f"{'tracks found, bound < 10':<52}{sum(inside)} of {len(inside)}")
    for where in ("pairs", "stack", "both"):
        n = sum(m.found_in == where for m in found)
        print(f"{f'  found in {where}':<52}{n} of {len(found)}")
    false = [len(r.false) for r in done]
    table.at_most("false tracks a field", false, 0.3, "", statistic=np.mean)
    for kind in ("echoes", "nuisances"):
        n = [len(r.false) for r in done if r.kind == kind]
        print(f"{'  of them, ' + kind:<52}{sum(n)} in {len(n)} fields")
    errors = [m.direction_error for m in strong]
    table.at_most("direction: median error, bound >= 20", errors, 2.0, "deg")
    table.at_least("sense right, bound >= 20", [m.right_sense for m in strong], 0.95)
    errors = [100 * abs(m.speed_ratio - 1) for m in strong]
    table.at_most("speed: median error, bound >= 20", errors, 6.0, "%")
    directed = [m for m in found if m.right_sense]
    table.pull("direction pulls", [m.direction_pull for m in directed])
    table.pull("speed pulls", [m.speed_pull for m in directed])
    table.pull("place pulls", [m.place_pull for m in directed])
    right = [m.right_source for m in found]
    table.at_least("right source first, 6 decoys", right, 0.95)
    forecasts = [f for r in done for f in r.forecasts]
    table.pull("forecast of the held-out epoch: pulls", [f.pull for f in forecasts])
    if forecasts:
        errors = [abs(f.error) for f in forecasts]
        moved = [abs(f.moved) for f in forecasts]
        print(
            f"{'  median error of the forecast':<52}{np.median(errors):.2f} arcsec "
            f"after {np.median(moved):.1f} arcsec from the track's own place"
        )
        middle = np.median([f.pull for f in forecasts])
        print(f"{'  median pull':<52}{middle:+.2f}")
    if found:
        print(
            f"{'significance / bound of what was found, median':<52}"
            f"{np.median([m.efficiency for m in found]):.3f}"
        )
        faint = [m for m in directed if m.bound < 20]
        width, err = robust_width([m.speed_pull for m in faint])
        print(f"{'  speed pulls, bound < 20':<52}{width:.2f} +- {err:.2f}")
        missing = fraction(np.isfinite(m.speed_ratio) for m in found)
        print(f"{'  of them with a speed':<52}{100 * missing:.0f} %")
    print(f"{'echoes in more than one track':<52}{sum(r.repeated for r in done)}")
    seconds = [r.seconds for r in done]
    print(f"{'seconds a field, one thread: median':<52}{np.median(seconds):.1f}")


def tell(result):
    """Print what one field gave."""
    n_found = sum(m.found for m in result.matches)
    print(
        f"field {result.index:2d} {result.kind:<9} {result.status[:60]}: "
        f"found {n_found}/{len(result.matches)}, false {len(result.false)}, "
        f"repeated {result.repeated}, {result.seconds:.1f} s",
        flush=True,
    )
    for text in result.false:
        print(f"    false: {text}")
    for m in result.matches:
        if not m.found and m.bound >= 10:
            print(
                f"    missed: bound {m.bound:.1f}, best pair {m.bound_best:.1f}, "
                f"SB {m.surface_brightness:.1f}: {m.verdict}"
            )
        if m.found and (m.direction_error > 10 or not m.right_sense):
            print(
                f"    astray: bound {m.bound:.1f}, direction {m.direction_error:.0f} "
                f"deg off, sense {'right' if m.right_sense else 'WRONG'}"
            )
        if m.found and max(abs(m.speed_pull), abs(m.place_pull)) > 4:
            print(
                f"    off: bound {m.bound:.1f}, speed {m.speed_ratio:.3f} of the true "
                f"one, pull {m.speed_pull:+.1f}; place {m.place_error:+.2f} arcsec, "
                f"pull {m.place_pull:+.1f}"
            )
    for f in result.forecasts:
        if abs(f.pull) > 4:
            print(
                f"    forecast off: bound {f.bound:.1f}, moved {f.moved:.1f} arcsec, "
                f"error {f.error:+.2f} arcsec, pull {f.pull:+.1f}"
            )


def parse():
    """Read the command line."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--fields", type=int, default=12, help="with echoes")
    parser.add_argument("--nuisances", type=int, default=4, help="fields without")
    parser.add_argument("--depth-fields", type=int, default=6, help="of faint echoes")
    parser.add_argument("--brightness", type=float, nargs=2, default=(23.5, 26.0))
    parser.add_argument("--seed", type=int, default=time.time_ns() // 1_000_000)
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--size", type=int, default=1024)
    parser.add_argument("--epochs", type=int, default=5)
    parser.add_argument("--template", default="earliest", help="as pairs.template")
    parser.add_argument("--no-forecast", action="store_true")
    parser.add_argument("--keep", help="folder for the frames, kept for a look")
    return parser.parse_args()


def main():
    """Run the study."""
    options = parse()
    print(
        f"seed {options.seed}, {options.fields} fields, {options.nuisances} of "
        f"nuisances, {options.depth_fields} of faint echoes, "
        f"template {options.template}",
        flush=True,
    )
    kinds = ["echoes"] * options.fields + ["nuisances"] * options.nuisances
    seeds = [(options.seed + 7919 * k) % 2**63 for k in range(1000)]
    results, faint = [], []
    with ProcessPoolExecutor(options.jobs, get_context("forkserver")) as pool:
        futures = [
            pool.submit(run_field, k, seeds[k], kind, options)
            for k, kind in enumerate(kinds)
        ]
        deep = [
            pool.submit(
                run_depth_field, k, seeds[500 + k], options.size, options.brightness
            )
            for k in range(options.depth_fields)
        ]
        for future in futures:
            results.append(future.result())
            tell(results[-1])
        for future in deep:
            faint.append(future.result())
    table = Table()
    if results:
        summarise(results, table)
    if faint:
        summarise_depth(faint, table, np.random.default_rng(options.seed))
    missed = table.missed
    print("all targets met" if not missed else f"{missed} targets missed")
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
