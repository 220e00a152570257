"""Rings and cells of a plan against the light's path and areas on the sphere."""

import numpy as np
import pytest

from latelight.echo.geometry import angle_deg, delay_yr
from latelight.echo.tilted_plane import tilted_plane_curve
from latelight.planning.cells import (
    Cells,
    cell_places,
    cells_of,
    joined,
    likeliest,
    uniq,
)
from latelight.planning.outlook import Dust, outlook
from latelight.planning.rings import Layer, ring_of
from latelight.sky import offset_position, separation_deg

pytestmark = pytest.mark.theory

POLE = {"ra": 31.0, "dec": 89.2}
SEAM = {"ra": 359.9, "dec": 12.0}


def layer(depth=60.0, **changes):
    plain = {"name": "sheet", "depth_pc": depth, "distance_pc": None}
    return Layer(**{**plain, "thickness_pc": 0.5, **changes})


@pytest.mark.parametrize("depth", [-40.0, 0.0, 60.0, 900.0])
@pytest.mark.parametrize("place", [POLE, SEAM])
def test_light_by_a_flat_ring_is_as_late_as_the_outburst_is_old(depth, place):
    """(r + l - D) / c = age anywhere on it, by the definition of the ellipsoid."""
    ring = ring_of(layer(depth), **place, age_yr=320.0, distance_pc=2500.0)
    ra, dec = offset_position(
        ring.ra, ring.dec, np.arange(0.0, 360.0, 30.0), ring.radius_deg
    )
    theta = separation_deg(place["ra"], place["dec"], ra, dec)
    assert delay_yr(theta, depth, 2500.0) == pytest.approx(320.0, rel=1e-7)
    assert ring.radius_deg == pytest.approx(angle_deg(depth, 320.0, 2500.0), rel=1e-9)


@pytest.mark.parametrize("slope", [0.3, 1.2, 4.0])
def test_the_echo_of_a_tilted_plane_is_a_circle_on_the_sky(slope):
    """Every point of the exact curve lies at the ring's radius from its centre."""
    tilted = layer(100.0, slope=slope, slope_pa=70.0)
    ring = ring_of(tilted, **SEAM, age_yr=400.0, distance_pc=1000.0)
    theta, pa = tilted_plane_curve(
        np.arange(0.0, 360.0, 20.0),
        400.0,
        1000.0,
        depth_pc=100.0,
        tilt_deg=np.degrees(np.arctan(slope)),
        tilt_pa_deg=70.0,
    )
    ra, dec = offset_position(SEAM["ra"], SEAM["dec"], pa, theta)
    radius = separation_deg(ring.ra, ring.dec, ra, dec)
    assert radius == pytest.approx(ring.radius_deg, rel=1e-9)


def test_small_tilts_shift_the_ring_by_the_light_path_times_the_slope():
    """Tylenda 2004: the centre lies c t tan(tilt) away (from memory); here to the
    order of c t / D, 1 %."""
    ring = ring_of(layer(30.0, slope=0.2), **SEAM, age_yr=30.0, distance_pc=50_000.0)
    light = 30.0 * 0.30660139 / 50_000.0
    assert ring.shift_deg == pytest.approx(np.degrees(0.2 * light), rel=0.01)


def test_the_error_of_a_ring_is_that_of_its_age():
    """drho/d(ct) = (z + c t) / rho for a distant source."""
    ring = ring_of(
        layer(300.0), **SEAM, age_yr=410.0, distance_pc=50_000.0, age_err_yr=5.0
    )
    path = 410.0 * 0.30660139
    rho = np.sqrt(2.0 * 300.0 * path + path**2)
    expected = np.degrees((300.0 + path) / rho * 5.0 * 0.30660139 / 50_000.0)
    assert ring.radius_err_deg == pytest.approx(expected, rel=0.01)


@pytest.mark.parametrize("place", [POLE, SEAM])
def test_cells_of_an_uncertain_age_have_the_area_of_the_annulus(place):
    """The likeliest 68.27 % lie between age - 1 and + 1 sigma.

    Area 2 pi (cos a - cos b) between the two radii; the cells on the two rims may each
    be in or out, hence the tolerance of half a cell's side along both.
    """
    known = {**place, "age_yr": 300.0, "distance_pc": 3000.0}
    cells = cells_of(layer(), **known, age_err_yr=30.0, order=8)
    kept = likeliest(cells, 0.6827)
    low, high = (
        np.radians(ring_of(layer(), **{**known, "age_yr": age}).radius_deg)
        for age in (270.0, 330.0)
    )
    sky = 12.0 * 4.0**8
    area = kept.cell.size / sky * 4.0 * np.pi
    side = np.sqrt(4.0 * np.pi / sky)
    rims = 2.0 * np.pi * (np.sin(low) + np.sin(high))
    expected = 2.0 * np.pi * (np.cos(low) - np.cos(high))
    assert area == pytest.approx(expected, abs=0.5 * side * rims)


def test_cells_of_a_sharp_ring_cover_it_without_a_gap():
    """Every point of the ring lies within half a diagonal of a listed cell."""
    cells = cells_of(
        layer(thickness_pc=1e-4), **SEAM, age_yr=300.0, distance_pc=3000.0, order=9
    )
    ring = ring_of(layer(), **SEAM, age_yr=300.0, distance_pc=3000.0)
    ra, dec = cell_places(likeliest(cells, 0.99).cell, 9)
    edge = offset_position(
        ring.ra, ring.dec, np.arange(0.0, 360.0, 2.0), ring.radius_deg
    )
    apart = separation_deg(edge[0][:, None], edge[1][:, None], ra, dec).min(axis=1)
    # Cells are diamonds: up to 1.3 sides from corner to corner away from the poles.
    assert apart.max() < 0.75 * 58.6 / 2**9


def test_the_probability_lies_on_the_ring_and_adds_up():
    tilted = layer(40.0, slope=0.7, slope_pa=200.0)
    known = {**POLE, "age_yr": 300.0, "distance_pc": 3000.0}
    cells = cells_of(tilted, **known, age_err_yr=6.0, order=9)
    ring = ring_of(tilted, **known, age_err_yr=6.0)
    away = separation_deg(ring.ra, ring.dec, *cell_places(cells.cell, 9))
    assert cells.probability.sum() == pytest.approx(1.0, abs=1e-12)
    mean = np.sum(cells.probability * away)
    assert mean == pytest.approx(ring.radius_deg, abs=3.0 * ring.radius_err_deg)


def test_uniq_numbers_name_the_same_sky():
    """Opened again to the finest order they are the cells that went in."""
    cell = np.array([0, 1, 2, 3, 7, 16, 17, 18, 19, 20, 21, 22, 23, *range(24, 32)])
    numbers = uniq(Cells(2, cell, np.full(cell.size, 1.0 / cell.size)))
    opened = []
    for number in numbers:
        order = int(np.log2(number / 4) / 2)
        first = (number - 4 * 4**order) * 4 ** (2 - order)
        opened += range(first, first + 4 ** (2 - order))
    assert sorted(opened) == sorted(cell)
    # 16-31 is one cell of order 0, 0-3 one of order 1, 7 alone.
    assert list(numbers) == [4 + 1, 16 + 0, 64 + 7]


def test_layers_together_are_worth_the_same():
    a = Cells(3, np.array([1, 2]), np.array([0.25, 0.75]))
    b = Cells(3, np.array([2, 9]), np.array([0.5, 0.5]))
    both = joined([a, b])
    assert list(both.cell) == [1, 2, 9]
    assert both.probability == pytest.approx([0.125, 0.625, 0.25])


def test_the_baseline_separates_two_widths_and_the_tilts_bracket_the_flat_sheet():
    dust = Dust(
        visual_extinction=0.5, thickness_pc=0.1, wavelength_um=0.62,
        seeing_arcsec=1.0, tilt_scale=0.35,
    )  # fmt: skip
    there = outlook(2.0, 300.0, 3000.0, dust=dust, duration_days=60.0)
    moved = there.baseline.value / 365.25 * there.speed.value
    assert moved == pytest.approx(2.0 * there.width.value, rel=1e-12)
    assert there.slow < there.speed.value < there.fast
    assert there.brightness is None


def test_the_range_of_speeds_is_that_of_random_tilts(rng):
    """The 16 % quantile of 40,000 scatters by 0.2 % in rank, under 0.4 % in speed."""
    from latelight.echo.geometry import delay_gradient, observer_distance_pc

    dust = Dust(
        visual_extinction=0.5, thickness_pc=0.1, wavelength_um=0.62,
        seeing_arcsec=1.0, tilt_scale=0.35,
    )  # fmt: skip
    there = outlook(2.0, 300.0, 3000.0, dust=dust, duration_days=60.0)
    across, per_tilt = delay_gradient(2.0, 300.0, 3000.0)
    a, b = 0.35 * rng.normal(size=(2, 40_000))
    light = 63241.077 / observer_distance_pc(2.0, 300.0, 3000.0)
    speed = light / np.hypot(across - per_tilt * a, per_tilt * b)
    low, high = np.quantile(speed, [0.16, 0.84])
    assert there.slow == pytest.approx(low, rel=0.015)
    assert there.fast == pytest.approx(high, rel=0.015)
