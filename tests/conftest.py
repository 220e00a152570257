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
    sources in ``sources.ecsv``, which ``night.toml`` names.
    """
    from latelight.simulation.scenes import random_pair
    from latelight.simulation.tables import source_rows, write_table

    folder = tmp_path_factory.mktemp("small_night")
    for field, seed, kind in (("A", 5, "echoes"), ("B", 6, "nuisances")):
        pair = random_pair(seed, kind=kind, size=384)
        for path, epoch in zip(pair.write(folder / "frames"), (1, 2), strict=True):
            path.rename(path.with_name(f"{field}_{epoch}.fits"))
        if field == "A":
            rows = source_rows(pair.truth.sources)
            write_table(folder / "sources.ecsv", rows)
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
