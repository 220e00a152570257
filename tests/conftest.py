"""Fixtures shared by all tests."""

import os

# Before numpy is loaded: one thread a process, so that parallel tests share a
# machine, and the same results everywhere.
for _variable in (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "NUMBA_NUM_THREADS",
):
    os.environ.setdefault(_variable, "1")

import numpy as np  # noqa: E402
import pytest  # noqa: E402

DEFAULT_SEED = 20260117


@pytest.fixture
def rng():
    """A seeded generator; LATELIGHT_TEST_SEED hunts for rare failures."""
    return np.random.default_rng(
        int(os.environ.get("LATELIGHT_TEST_SEED", DEFAULT_SEED))
    )


@pytest.fixture(scope="session")
def small_night(tmp_path_factory):
    """Write a folder of two small fields, two epochs each; do not change it.

    ``frames/`` holds A_1, A_2, B_1 and B_2 (``.fits``); field A has echoes of the
    sources in ``sources.ecsv``, which ``night.toml`` names; ``truth.ecsv`` has them.
    """
    from latelight.simulation.scenes import random_pair
    from latelight.simulation.tables import echo_rows, source_rows, write_table

    folder = tmp_path_factory.mktemp("small_night")
    for field, seed, kind in (("A", 5, "echoes"), ("B", 6, "nuisances")):
        pair = random_pair(seed, kind=kind, size=384)
        for path, epoch in zip(pair.write(folder / "frames"), (1, 2), strict=True):
            path.rename(path.with_name(f"{field}_{epoch}.fits"))
        if field == "A":
            rows = source_rows(pair.truth.sources)
            write_table(folder / "sources.ecsv", rows)
            write_table(folder / "truth.ecsv", echo_rows(pair.truth))
    (folder / "night.toml").write_text(
        '[night]\nframes = ["frames/*.fits*"]\noutput = "night"\n'
        '[origin]\nsource_table = "sources.ecsv"\n'
    )
    return folder


@pytest.fixture(scope="session")
def star_plane():
    """Return a maker of planes of Gaussian stars sampled at pixel centres.

    ``make(x, y, flux, shape=..., sigma=..., sky=..., noise=..., rng=...)``: white
    noise of that sigma, or none without ``rng``.
    """
    from latelight.records import Plane

    def make(x, y, flux, *, shape, sigma=1.5, sky=200.0, noise=5.0, rng=None):
        pixels = np.full(shape, sky)
        reach = int(np.ceil(7 * sigma))
        for star_x, star_y, star_flux in zip(x, y, flux, strict=True):
            col = np.arange(round(star_x) - reach, round(star_x) + reach + 1)
            row = np.arange(round(star_y) - reach, round(star_y) + reach + 1)
            col = col[(col >= 0) & (col < shape[1])]
            row = row[(row >= 0) & (row < shape[0])]
            profile = np.outer(
                np.exp(-0.5 * ((row - star_y) / sigma) ** 2),
                np.exp(-0.5 * ((col - star_x) / sigma) ** 2),
            )
            pixels[np.ix_(row, col)] += star_flux * profile / (2 * np.pi * sigma**2)
        if rng is not None:
            pixels += rng.normal(0.0, noise, shape)
        return Plane(
            pixels.astype(np.float32),
            np.full(shape, noise**2, np.float32),
            np.zeros(shape, np.uint16),
        )

    return make


@pytest.fixture(scope="session")
def moving_ridge():
    """Return a drawer of echoes moved between two epochs, in noise.

    ``draw(rng, snr=..., shift=..., angle=..., later=...)`` gives a difference, its
    arc and nothing else: on a circle of ``radius`` the early and the late ridge lie
    ``shift`` pixels apart, sharp in front (towards ``angle``) and slow behind, and
    the S/N of a perfect filter is ``snr``.  The arc's trace is off by a little.  With
    ``blurred`` half of the noise is that of a frame convolved by so many pixels.
    """
    from scipy import ndimage

    from latelight.records import Arc, ArcTrace, Difference

    def lobe(u, sigma, tail):
        """A Gaussian blurred backwards by an exponential, by its definition."""
        steps = (np.arange(200) + 0.5) / 20.0
        weight = np.exp(-steps) / np.exp(-steps).sum()
        return sum(
            w * np.exp(-0.5 * ((u + tail * t) / sigma) ** 2)
            for w, t in zip(weight, steps, strict=True)
        )

    def draw(
        rng,
        *,
        snr,
        shift,
        angle,
        later="science",
        ratio=1.0,
        sigma=2.0,
        tail=2.5,
        radius=400.0,
        length=90.0,
        size=220,
        blurred=0.0,
        misplaced=True,
    ):
        centre = 0.5 * (size - 1)
        normal = np.array([np.cos(np.radians(angle)), np.sin(np.radians(angle))])
        y, x = np.mgrid[:size, :size] - centre
        distance = np.hypot(x - radius * normal[0], y - radius * normal[1])
        u, s = radius - distance, y * normal[0] - x * normal[1]
        fine = np.linspace(-40.0, 40.0, 1601)
        profile = lobe(fine, sigma, tail)
        peak = fine[np.argmax(profile)]
        light = np.exp(-np.log(2.0) * (2.0 * s / length) ** 4)
        late = np.interp(u - 0.5 * shift + peak, fine, profile) * light
        early = np.interp(u + 0.5 * shift + peak, fine, profile) * light * ratio
        signal = (late - early) * (1 if later == "science" else -1)
        noise = rng.normal(size=signal.shape)
        variance = power = 1.0
        if blurred:
            # The other frame's noise, equal but convolved: less of it in a pixel,
            # all of it over a lobe's width.
            other = rng.normal(size=signal.shape)
            noise += ndimage.gaussian_filter(other, blurred, mode="wrap")
            variance, power = 1.0 + 1.0 / (4.0 * np.pi * blurred**2), 2.0
        signal *= snr * np.sqrt(power / (signal**2).sum())
        on_late = ratio <= 1.0
        place = 0.5 * shift if on_late else -0.5 * shift
        own = radius - place
        turn, off = rng.normal(0.0, [np.radians(1.5), 0.4]) if misplaced else (0.0, 0.0)
        theta = np.arange(-length / 2, length / 2 + 1) / own + np.arctan2(
            -normal[1], -normal[0]
        )
        middle = radius * normal - own * normal
        px = radius * normal[0] + own * np.cos(theta) - middle[0]
        py = radius * normal[1] + own * np.sin(theta) - middle[1]
        trace = ArcTrace(
            centre
            + middle[0]
            + np.cos(turn) * px
            - np.sin(turn) * py
            + off * normal[0],
            centre
            + middle[1]
            + np.sin(turn) * px
            + np.cos(turn) * py
            + off * normal[1],
            np.degrees(theta + np.pi + turn),
        )
        half = trace.x.size // 2
        arc = Arc(
            trace=trace,
            sign=1 if on_late == (later == "science") else -1,
            snr=snr,
            x=float(trace.x[half]),
            y=float(trace.y[half]),
            normal_angle=float(trace.normal_angle[half] % 180.0),
            normal_angle_err=1.5,
            curvature=1.0 / own,
            length_px=length,
            width_px=3.0,
            surface_brightness_counts=1.0,
            shift_px=np.nan,
            verdict="arc",
        )
        difference = Difference(
            pixels=(signal + noise).astype(np.float32),
            variance=np.full(signal.shape, variance, np.float32),
            mask=np.zeros(signal.shape, np.uint16),
            fwhm_px=4.0,
            noise_ratio=1.0,
            method="kernel",
            compact=(),
            star_scatter=0.0,
            star_shift_px=0.0,
        )
        return difference, arc

    return draw


@pytest.fixture(scope="session")
def ridge_series():
    """Return a drawer of straight ridges that move evenly over several epochs.

    ``draw(rng, ridges, years=..., noise=..., size=...)`` gives an EpochSeries of
    white noise, or of none without ``rng``, with the ridges in it: dicts of
    ``angle`` (degrees, of the motion), ``speed`` (pixels a year), ``height`` (a
    number, or one an epoch), ``sigma``, ``tail`` (Gaussian and exponential, pixels),
    ``length`` and ``place`` (x, y at time 0, MJD 60000).  ``seed_of(series, ridge,
    epoch, ...)`` is a first guess of one, off by ``turn`` degrees and ``off`` pixels.
    """
    from types import SimpleNamespace

    from latelight.records import ArcTrace, EpochSeries, TrackSeed

    def profile(u, sigma, tail):
        """A Gaussian blurred backwards by an exponential, peak 1 at 0."""
        fine = np.arange(-60.0, 30.0, 0.02)
        gauss = np.exp(-0.5 * (fine / sigma) ** 2)
        decay = np.exp(-np.arange(0.0, 12.0 * tail + 0.02, 0.02) / max(tail, 1e-9))
        height = np.convolve(gauss, decay[::-1])[decay.size - 1 :] if tail else gauss
        height = height[: fine.size] / height[: fine.size].max()
        top = fine[np.argmax(height)]
        return np.interp(u + top, fine, height, left=0.0, right=0.0)

    usual = {
        "angle": 30.0,
        "speed": 20.0,
        "height": 1.0,
        "sigma": 2.2,
        "tail": 2.0,
        "length": 80.0,
        "place": None,
    }

    def complete(ridge, size):
        full = {**usual, **ridge}
        if full["place"] is None:
            full["place"] = (0.5 * (size - 1), 0.5 * (size - 1))
        return full

    def draw(
        rng=None,
        ridges=({},),
        *,
        years=(-1.0, -0.4, 0.1, 0.5, 1.0),
        noise=0.3,
        size=180,
        template=None,
    ):
        n = len(years)
        y, x = np.mgrid[:size, :size].astype(float)
        pixels = np.zeros((n, size, size))
        for ridge in ridges:
            full = complete(ridge, size)
            c, d = np.cos(np.radians(full["angle"])), np.sin(np.radians(full["angle"]))
            u = (x - full["place"][0]) * c + (y - full["place"][1]) * d
            s = (y - full["place"][1]) * c - (x - full["place"][0]) * d
            light = np.exp(-np.log(2.0) * (2.0 * s / full["length"]) ** 6)
            for i, height in enumerate(np.broadcast_to(full["height"], n)):
                at = u - full["speed"] * years[i]
                pixels[i] += height * light * profile(at, full["sigma"], full["tail"])
        if rng is not None:
            pixels += rng.normal(0.0, noise, pixels.shape)
        if template is not None:
            pixels -= pixels[template].copy()
        return EpochSeries(
            pixels=pixels.astype(np.float32),
            variance=np.full(pixels.shape, noise**2, np.float32),
            mask=np.zeros(pixels.shape, np.uint16),
            mjd=60000.0 + 365.25 * np.array(years),
            fwhm_px=np.full(n, 3.0),
            noise_ratio=np.ones(n),
            names=tuple(f"larkspur_{i}" for i in range(n)),
        )

    def seed_of(series, ridge=None, epoch=2, *, turn=0.0, off=0.0, **changes):
        full = complete(ridge or {}, series.pixels.shape[1])
        years = (series.mjd[epoch] - 60000.0) / 365.25
        angle = full["angle"] + turn
        c, d = np.cos(np.radians(angle)), np.sin(np.radians(angle))
        way = full["speed"] * years
        x0 = full["place"][0] + way * np.cos(np.radians(full["angle"])) + off * c
        y0 = full["place"][1] + way * np.sin(np.radians(full["angle"])) + off * d
        half = 0.5 * full["length"]
        s = np.arange(-half, half + 1.0)
        guess = {
            "trace": ArcTrace(x0 - s * d, y0 + s * c, np.full(s.size, angle)),
            "direction_angle": angle % 360.0,
            "speed_px_yr": full["speed"],
            "mjd": float(series.mjd[epoch]),
            "width_px": 7.0,
            "snr": 10.0,
            "origin": f"larkspur_{epoch}-larkspur_0",
            "arc": epoch,
        }
        return TrackSeed(**{**guess, **changes})

    return SimpleNamespace(draw=draw, seed_of=seed_of)


@pytest.fixture(scope="session")
def star_pair(star_plane):
    """Return a maker of two registered frames of the same Gaussian stars.

    ``make(n_stars, size=..., science_sigma=..., template_sigma=..., scale=...,
    offset=..., shift=..., noise=..., rng=...)``: fluxes 2e4-2e5 counts on a
    jittered grid; the science frame is ``scale`` times as deep, ``offset`` counts
    brighter and ``shift`` pixels to the right.  White noise, or none
    without ``rng``.  The result has the attributes ``science, template,
    science_stars, template_stars, alignment`` (the arguments of ``match_pair``) and
    ``x, y, flux``.
    """
    from types import SimpleNamespace

    from latelight.records import Alignment, PixelMap, StarList

    def star_list(x, y, flux, sigma, shape):
        n = x.size
        return StarList(
            x=x,
            y=y,
            position_err=np.full(n, 0.01),
            flux=flux,
            flux_err=np.full(n, 50.0),
            peak=flux / (2 * np.pi * sigma**2),
            fwhm=np.full(n, 2.3548 * sigma),
            elongation=np.ones(n),
            saturated=np.zeros(n, dtype=bool),
            clean=np.ones(n, dtype=bool),
            sky=np.full(shape, 200.0, np.float32),
            fwhm_px=2.3548 * sigma,
        )

    def make(
        n_stars=60,
        *,
        size=320,
        science_sigma=1.8,
        template_sigma=1.4,
        scale=1.0,
        offset=0.0,
        shift=0.0,
        noise=5.0,
        rng=None,
    ):
        place = np.random.default_rng(42)
        side = int(np.ceil(np.sqrt(n_stars)))
        step = size / side
        row, col = np.divmod(np.arange(n_stars), side)
        x = (col + 0.5) * step + place.uniform(-0.2, 0.2, n_stars) * step
        y = (row + 0.5) * step + place.uniform(-0.2, 0.2, n_stars) * step
        flux = np.sort(10 ** place.uniform(4.3, 5.3, n_stars))[::-1]
        shape = (size, size)
        common = {"shape": shape, "noise": noise, "rng": rng}
        science = star_plane(
            x + shift, y, scale * flux, sigma=science_sigma,
            sky=200.0 * scale + offset, **common,
        )  # fmt: skip
        template = star_plane(x, y, flux, sigma=template_sigma, sky=200.0, **common)
        rows = np.arange(n_stars)
        nodes = np.array([0.0, size - 1.0])
        pixel_map = PixelMap(
            nodes, nodes, *np.meshgrid(nodes, nodes, indexing="ij"), error_px=0.005
        )
        return SimpleNamespace(
            science=science,
            template=template,
            science_stars=star_list(x + shift, y, scale * flux, science_sigma, shape),
            template_stars=star_list(x, y, flux, template_sigma, shape),
            alignment=Alignment(pixel_map, rows, rows, 0.01, "wcs"),
            x=x,
            y=y,
            flux=flux,
        )

    return make


@pytest.fixture(scope="session")
def make_arc_difference():
    """Return a maker of differences with drawn arcs in white noise of sigma 10.

    ``make(rng, arcs, shape=..., fwhm_px=...)``; an arc is a dict of x, y, angle
    (radians), curvature, length, sigma, tail, shift (signed, from the negative to
    the positive lobe along the normal), height, and ratio of the lobes.
    """
    from latelight.arcs.geometry import Circle
    from latelight.arcs.profiles import lobe_profile
    from latelight.records import Difference

    def draw(shape, arc):
        y, x = np.mgrid[0 : shape[0], 0 : shape[1]]
        circle = Circle(arc["x"], arc["y"], arc["angle"], arc.get("curvature", 0.0))
        s, u = circle.coordinates(x, y)
        inside = np.abs(s) <= 0.5 * arc["length"]
        sigma, tail = arc.get("sigma", 3.0), arc.get("tail", 0.0)
        lobes = lobe_profile(u, sigma, tail)
        if "shift" in arc:
            lobes = lobes - arc.get("ratio", 1.0) * lobe_profile(
                u + arc["shift"], sigma, tail
            )
        return np.where(inside, arc["height"] * lobes, 0.0)

    def make(rng, arcs=(), *, shape=(512, 512), fwhm_px=3.5):
        pixels = rng.normal(scale=10.0, size=shape) if rng is not None else 0.0
        pixels = pixels + sum((draw(shape, arc) for arc in arcs), np.zeros(shape))
        return Difference(
            pixels=pixels.astype(np.float32),
            variance=np.full(shape, 100.0, np.float32),
            mask=np.zeros(shape, np.uint16),
            fwhm_px=fwhm_px,
            noise_ratio=1.0,
            method="kernel",
            compact=(),
            star_scatter=0.0,
            star_shift_px=0.0,
        )

    return make


@pytest.fixture(scope="session")
def make_star_list():
    """Return a maker of star lists: ``make(x, y, flux, shape=...)``, unsaturated."""
    from latelight.records import StarList

    def make(x=(), y=(), flux=(), *, shape=(512, 512)):
        x, y, flux = (np.asarray(v, dtype=float) for v in (x, y, flux))
        full, no = np.ones(x.size), np.zeros(x.size, dtype=bool)
        return StarList(
            x=x,
            y=y,
            position_err=0.02 * full,
            flux=flux,
            flux_err=100.0 * full,
            peak=flux / 14.0,
            fwhm=3.5 * full,
            elongation=full,
            saturated=no,
            clean=~no,
            sky=np.zeros(shape, np.float32),
            fwhm_px=3.5,
        )

    return make
