"""How faint an echo may be: every pair of a field's epochs against all together.

Fields of faint echoes are put through the chain with every pair of their epochs,
and all epochs are searched along trial velocities.  An echo counts for

- ``one pair`` when it is found in the one pair of its field in which the echoes are
  most significant (largest median bound); false ridges are those of a mean pair;
- ``own pair`` when it is found in the pair in which it is itself most significant, a
  choice only the truth can make; false ridges as before;
- ``any pair`` when it is found in at least one; false ridges are counted once
  a place;
- ``stack`` when the search along trial velocities finds it;
- ``tracks`` when it becomes a track, found by either.

Thresholds are raised until none has more false ridges a field than the cleanest of
them, or than one in all fields.  Completeness is a logistic curve in magnitudes, fit
by maximum likelihood; errors are those of bootstraps of the echoes.
"""

import dataclasses
import itertools
import tempfile
import time
from pathlib import Path

import numpy as np
from courses import Course, true_sky

METHODS = ("one pair", "own pair", "any pair", "stack", "tracks")
SINGLE = ("one pair", "own pair")
SAME_PLACE = 6.0  # arcsec
LUCK = 3.0  # sigma
BOOTSTRAPS = 200
WIDTHS = (0.05, 0.1, 0.15, 0.2, 0.3, 0.4, 0.6, 0.9)  # of a logistic curve, mag


@dataclasses.dataclass
class FaintEcho:
    """One echo, and the S/N at which each method found it (nan if it did not)."""

    surface_brightness: float
    bound_one: float
    bound_best: float
    bound_all: float
    snr: dict


@dataclasses.dataclass
class DepthField:
    """What one field gave."""

    index: int
    seconds: float
    echoes: list
    false: dict  # S/N of the false ridges of each method
    n_pairs: int


@dataclasses.dataclass
class Ridge:
    """Something found, in the true sky."""

    ra: float
    dec: float
    length: float
    mjds: tuple
    snr: float


def pair_ridges(field, paths, folder):
    """Put all pairs through the chain; return the ridges of each, and the series."""
    from latelight.config import NightConfig
    from latelight.night.chain import PairTask, process_pair
    from latelight.night.scan import plan_night

    truth, names = field.truth, [path.stem for path in paths]
    ridges, parts = {}, []
    for early in range(len(paths) - 1):
        config = NightConfig.model_validate(
            {
                "night": {
                    "frames": tuple(str(p) for p in paths[early:]),
                    "output": str(folder / "out"),
                },
                "pairs": {"template": str(paths[early])},
            }
        )
        scratch = folder if early == 0 else None
        for pair in plan_night(config, jobs=1).plan.pairs:
            outcome = process_pair(PairTask(pair, config, (), scratch))
            late = names.index(pair.science.name)
            ridges[early, late] = [
                Ridge(
                    *true_sky(truth.frames[late], arc.x, arc.y),
                    arc.length_px * 0.4,
                    (truth.mjds[late], truth.mjds[early]),
                    arc.snr,
                )
                for arc in outcome.findings.arcs
                if arc.verdict == "arc"
            ]
            if outcome.part is not None:
                parts.append(outcome.part)
    return ridges, parts, config


def series_ridges(field, parts, config):
    """Search all epochs together; return the ridges of the stack and the tracks."""
    from latelight.motion.tracks.build import build_tracks
    from latelight.motion.velocity_stack.search import search_velocities
    from latelight.night.series import build_series

    series = build_series(sorted(parts, key=lambda part: part.mjd))
    stacked = search_velocities(series, settings=config.velocity_stack)
    seeds = [seed for part in parts for seed in part.seeds]
    tracks = build_tracks(
        series, [*seeds, *stacked], settings=config.tracks, motion=config.motion
    )
    grid = field.truth.frames[0]

    def ridge(x, y, trace, mjd, snr):
        length = np.hypot(np.diff(trace.x), np.diff(trace.y)).sum() * 0.4
        return Ridge(*true_sky(grid, x, y), float(length), (mjd,), snr)

    def middle(trace):
        half = trace.x.size // 2
        return trace.x[half], trace.y[half]

    return (
        [ridge(*middle(s.trace), s.trace, s.mjd, s.snr) for s in stacked],
        [
            ridge(t.x, t.y, t.trace, t.mjd, t.snr)
            for t in tracks
            if t.verdict == "track"
        ],
    )


def run_depth_field(index, seed, size, brightness):
    """Simulate one field of faint echoes and look for them in every way."""
    from latelight.simulation.fields import random_field
    from latelight.threads import set_threads

    set_threads(1)
    field = random_field(seed, size=size, brightness=brightness)
    start = time.perf_counter()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        ridges, parts, config = pair_ridges(field, field.write(folder), folder)
        stack, tracks = series_ridges(field, parts, config)
    courses = [Course(field.truth, echo) for echo in field.truth.echoes]
    every = list(itertools.chain.from_iterable(ridges.values()))
    found = {"any pair": every, "stack": stack, "tracks": tracks}
    bounds = np.array([echo.bound_pairs for echo in field.truth.echoes])
    one = strongest(np.median(bounds, axis=0))
    echoes = []
    for course, own in zip(courses, bounds, strict=True):
        echo = course.echo
        snr = {way: best_on(course, there) for way, there in found.items()}
        snr["one pair"] = best_on(course, ridges.get(one, []))
        snr["own pair"] = best_on(course, ridges.get(strongest(own), []))
        echoes.append(
            FaintEcho(
                echo.surface_brightness[field.truth.grid],
                float(own[one]),
                echo.bound_best,
                echo.bound_all,
                snr,
            )
        )
    false = {way: false_snr(courses, there) for way, there in found.items()}
    of_pairs = [false_snr(courses, there) for there in ridges.values()]
    for way in SINGLE:
        false[way] = [snr for there in of_pairs for snr in there]
    seconds = time.perf_counter() - start
    return DepthField(index, seconds, echoes, false, len(ridges))


def strongest(bounds):
    """Return the pair of epochs (early, late) with the largest bound."""
    pair = np.unravel_index(np.triu(bounds).argmax(), bounds.shape)
    return tuple(int(k) for k in pair)


def best_on(course, ridges):
    """Return the largest S/N of what lies on an echo, nan for nothing."""
    on = [r.snr for r in ridges if holds(course, r)]
    return max(on, default=np.nan)


def holds(course, ridge):
    """Tell whether a ridge lies on an echo, as significant as it may be."""
    if ridge.snr > 1.1 * course.echo.bound_all + LUCK:
        return False
    return course.holds(ridge.ra, ridge.dec, length=ridge.length, mjds=ridge.mjds)


def false_snr(courses, ridges):
    """Return the S/N of what lies on no echo, the best of each place."""
    kept = []
    for ridge in sorted(ridges, key=lambda r: -r.snr):
        if any(holds(course, ridge) for course in courses):
            continue
        cos = np.cos(np.radians(ridge.dec))
        if all(
            3600.0 * np.hypot((ridge.ra - k.ra) * cos, ridge.dec - k.dec) > SAME_PLACE
            for k in kept
        ):
            kept.append(ridge)
    return [ridge.snr for ridge in kept]


def half_way(magnitudes, hits, counts):
    """Return where logistic curves of completeness pass 50 %, mag.

    Parameters
    ----------
    magnitudes, hits : array, shape (n,)
        Faintness of each echo, and whether it was found.
    counts : array, shape (k, n)
        How often each echo counts in each of k samples.

    Returns
    -------
    array, shape (k,)
        The likeliest places, to 0.02 mag.
    """
    middles = np.arange(magnitudes.min() - 1.0, magnitudes.max() + 1.0, 0.02)
    middle, width = (v.ravel() for v in np.meshgrid(middles, WIDTHS))
    z = (magnitudes[:, None] - middle) / width
    sign = np.where(hits, 1.0, -1.0)[:, None]
    likelihood = counts @ -np.logaddexp(0.0, sign * z)
    return middle[np.argmax(likelihood, axis=1)]


def equal_thresholds(fields):
    """Return the false ridges a field at which all compare, and the thresholds."""
    units = {way: len(fields) for way in METHODS}
    for way in SINGLE:
        units[way] = sum(field.n_pairs for field in fields)
    false = {way: sorted(s for f in fields for s in f.false[way]) for way in METHODS}
    rates = {way: len(false[way]) / units[way] for way in METHODS}
    allowed = max(min(rates.values()), 1.0 / len(fields))
    thresholds = {}
    for way in METHODS:
        spare = int(allowed * units[way])
        above = false[way][: len(false[way]) - spare]
        thresholds[way] = np.nextafter(above[-1], np.inf) if above else 0.0
    return rates, allowed, thresholds


def summarise_depth(fields, table, rng):
    """Print the table of depths; the gain goes against its target."""
    echoes = [echo for field in fields for echo in field.echoes]
    rates, allowed, thresholds = equal_thresholds(fields)
    faintness = -2.5 * np.log10([echo.bound_best for echo in echoes])
    brightness = np.array([echo.surface_brightness for echo in echoes])
    snr = {way: np.array([e.snr[way] for e in echoes]) for way in METHODS}
    # Not found compares false with any threshold.
    hits = {way: snr[way] >= thresholds[way] for way in METHODS}
    even = np.full(len(echoes), 1.0 / len(echoes))
    counts = rng.multinomial(len(echoes), even, size=BOOTSTRAPS)
    counts = np.vstack([np.ones(len(echoes)), counts])
    depth = {
        way: [half_way(x, hits[way], counts) for x in (faintness, brightness)]
        for way in METHODS
    }
    print(f"\ndepth: {len(fields)} fields, {len(echoes)} echoes, 50 % points at")
    print(f"{allowed:.2f} false ridges a field (a mean pair for single ones)")
    print("                false as set   S/N    found   bound of own pair     mag")
    for way in METHODS:
        bound, mag = depth[way]
        shown = f"{thresholds[way]:.1f}" if thresholds[way] else "as set"
        print(
            f"  {way:<12}{rates[way]:>10.2f}{shown:>11}"
            f"{100 * np.mean(hits[way]):>7.0f} %"
            f"{10 ** (-0.4 * bound[0]):>10.1f} +- "
            f"{0.921 * 10 ** (-0.4 * bound[0]) * bound[1:].std():<6.1f}"
            f"{mag[0]:>8.2f} +- {mag[1:].std():.2f}"
        )
    for edge in np.arange(23.5, 26.0, 0.5):
        inside = (brightness >= edge) & (brightness < edge + 0.5)
        if inside.any():
            shares = ", ".join(
                f"{way} {100 * np.mean(hits[way][inside]):.0f} %" for way in METHODS
            )
            print(f"  {edge:.1f}-{edge + 0.5:.1f} mag, {inside.sum():2d}: {shares}")
    for pair, bound in (("one pair", "bound_one"), ("own pair", "bound_best")):
        ratio = [echo.bound_all / getattr(echo, bound) for echo in echoes]
        print(
            f"{f'perfect filters: all epochs over {pair}, median':<52}"
            f"{2.5 * np.log10(np.median(ratio)):.2f} mag"
        )
    for way, pair in itertools.product(("stack", "tracks"), SINGLE):
        gain = depth[way][0] - depth[pair][0]
        text = f"{gain[0]:.2f} +- {gain[1:].std():.2f} mag"
        name = f"{way}: fainter than in {pair}"
        if pair == "one pair":
            table.line(name, gain[0], f"{text} (>= 0.6)", gain[0] >= 0.6)
        else:
            print(f"{name:<52}{text:>30}")
