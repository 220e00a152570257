"""Rings of X-rays scattered by dust, published layers and computed radii.

Radii are 'computed' from theta**2 = 2 c t (D - d) / (d D) unless a source says
otherwise; layers, distances and times are published as cited.
"""

import numpy as np
import pytest

from latelight.echo.geometry import observer_distance_pc
from latelight.echo.periodic import knot_places
from latelight.echo.rings import (
    ring_angle_arcsec,
    ring_apparent_speed,
    ring_delay_s,
    ring_dust_distance_error_pc,
    ring_dust_distance_pc,
    ring_growth_arcsec_s,
)

pytestmark = pytest.mark.reference

DAY = 86_400.0
HOUR = 3_600.0
YEAR = 365.25 * DAY


@pytest.mark.parametrize(
    ("unit_s", "unit_arcsec", "coefficient"),
    [
        # Computed; published rounded as 827 (Vianello et al. 2007, from memory).
        (1.0, 1.0, 826.705),
        (HOUR, 60.0, 826.705),
        (DAY, 60.0, 19840.9),
    ],
)
def test_coefficient_of_the_ring_law(unit_s, unit_arcsec, coefficient):
    found = ring_dust_distance_pc(unit_arcsec, unit_s)
    assert found == pytest.approx(coefficient, rel=1e-4)
    assert ring_dust_distance_pc(1.0, 1.0) == pytest.approx(827.0, abs=0.5)


def test_delay_of_a_halo_element():
    """t[s] = 1.20962 D[kpc] x / (1 - x) theta["]**2 (computed); x = 1/2, 1 kpc, 1"."""
    found = ring_delay_s(1.0, 500.0, source_distance_pc=1000.0)
    assert found == pytest.approx(1.20962, rel=1e-5)


@pytest.mark.parametrize(
    ("distance", "first", "last"),
    [
        # GRB 031203: burst 22:01:28 UT, observed from 04:09:29 the next day for
        # 58211 s (GCN 2489).  Layers at 880 and 1390 pc (Vaughan et al. 2004, ApJ 603,
        # L5), 870 and 1384 pc (Tiengo & Mereghetti 2006, A&A 449, 203).
        (870.0, 144.85, 276.22),
        (880.0, 144.03, 274.64),
        (1384.0, 114.85, 219.00),
        (1390.0, 114.60, 218.53),
    ],
)
def test_rings_of_grb_031203(distance, first, last):
    start = (24.0 + 4 - 22) * HOUR + (9 - 1) * 60.0 + (29 - 28)
    times = np.array([start, start + 58_211.0])
    np.testing.assert_array_equal(times, [22_081.0, 80_292.0])
    found = ring_angle_arcsec(distance, times)
    np.testing.assert_allclose(found, [first, last], atol=0.01)
    back = ring_dust_distance_pc(found, times)
    np.testing.assert_allclose(back, distance, rtol=1e-12)


def test_ring_of_grb_031203_outruns_light():
    """ "A thousand times the speed of light" (ESA XMM gallery): 1432 to 751 c."""
    speeds = ring_apparent_speed(880.0, np.array([22_081.0, 80_292.0]))
    np.testing.assert_allclose(speeds, [1432.0, 751.0], atol=0.5)
    assert speeds[1] < 1000.0 < speeds[0]


def test_ring_of_grb_050724():
    """139 +- 9 pc, 200" within 8 ks (Vaughan et al. 2006, ApJ 639, 323)."""
    times = ring_delay_s(200.0, np.array([139.0, 130.0, 148.0]))
    np.testing.assert_allclose(times, [6725.0, 6290.0, 7161.0], atol=1.0)
    assert times.max() < 8000.0
    assert ring_angle_arcsec(139.0, 8000.0) == pytest.approx(218.1, abs=0.1)


def test_first_report_of_grb_050724():
    """~100" at ~2000 s, reported as 175 +- 50 pc (90 %, GCN 3685); 165.3 computed."""
    found = ring_dust_distance_pc(100.0, 2000.0)
    assert found == pytest.approx(165.3, abs=0.1)
    assert abs(found - 175.0) < 50.0


def test_ring_of_grb_061019():
    """At least 100" at ~17 ks (GCN 5737): no farther than 1405 pc (computed), in
    keeping with 940 pc (Vianello et al. 2007, from memory)."""
    found = ring_dust_distance_pc(100.0, 17_000.0)
    assert found == pytest.approx(1405.0, abs=1.0)
    assert found > 940.0


def test_ring_of_grb_050713a():
    """364 pc (Tiengo & Mereghetti 2006)."""
    found = ring_angle_arcsec(364.0, np.array([20_000.0, 50_000.0]))
    np.testing.assert_allclose(found, [213.1, 337.0], atol=0.05)


LAYERS_160623A = np.array([528.1, 679.2, 789.0, 952.0, 1539.0, 5079.0])
ERRORS_160623A = np.array([1.2, 1.9, 2.8, 5.0, 20.0, 64.0])


def test_rings_of_grb_160623a():
    """Six layers (Pintore et al. 2017, MNRAS 472, 1465), 2.0 d after the burst.

    Published: rings between ~2 and 9 arcmin; single radii computed.
    """
    found = ring_angle_arcsec(LAYERS_160623A, 2.0 * DAY) / 60.0
    expected = [8.668, 7.644, 7.092, 6.456, 5.078, 2.795]
    np.testing.assert_allclose(found, expected, atol=5e-4)
    assert found.min() > 2.0
    assert found.max() < 9.0


def test_published_precision_of_grb_160623a_is_half_that_in_radius():
    """Errors of 0.2-1.3 % of the distance ask for half that of the squared radius."""
    radius = ring_angle_arcsec(LAYERS_160623A, 2.0 * DAY)
    share = ERRORS_160623A / LAYERS_160623A
    assert share.min() == pytest.approx(0.002, abs=5e-4)
    assert share.max() == pytest.approx(0.013, abs=5e-4)
    found = ring_dust_distance_error_pc(
        radius, 2.0 * DAY, theta_err_arcsec=0.5 * share * radius
    )
    np.testing.assert_allclose(found, ERRORS_160623A, rtol=1e-12)


@pytest.mark.parametrize(
    ("distance", "day2", "day5"),
    [
        # GRB 221009A: 20 rings from 0.3 to 18.6 kpc (Tiengo et al. 2023, ApJ 946,
        # L30), most dust at 0.44 kpc (Vasilopoulos et al. 2023, MNRAS 521, 1590).
        (300.0, 11.501, 18.185),
        (440.0, 9.497, 15.015),
        (18_600.0, 1.461, 2.309),
    ],
)
def test_rings_of_grb_221009a(distance, day2, day5):
    found = ring_angle_arcsec(distance, np.array([2.0, 5.0]) * DAY) / 60.0
    np.testing.assert_allclose(found, [day2, day5], atol=6e-4)


LAYERS_V404 = np.array([2120.0, 2050.0, 1630.0, 1500.0, 1180.0])


def test_rings_of_v404_cygni():
    """Layers: Vasilopoulos & Petropoulou 2016, arXiv 1511.00932; 2.39 kpc (memory)."""
    one, ten = (
        ring_angle_arcsec(LAYERS_V404, days * DAY, source_distance_pc=2390.0) / 60.0
        for days in (1.0, 10.0)
    )
    np.testing.assert_allclose(one, [1.0282, 1.1734, 1.9674, 2.2194, 2.9177], atol=6e-5)
    np.testing.assert_allclose(ten, [3.252, 3.711, 6.221, 7.018, 9.226], atol=6e-4)


def test_nearest_layer_of_v404_cygni_hangs_on_the_distance():
    """2.20 instead of 2.39 kpc shrinks the first ring by 0.567 (computed)."""
    far, near = (
        ring_angle_arcsec(2120.0, DAY, source_distance_pc=d) for d in (2390.0, 2200.0)
    )
    assert near / far == pytest.approx(0.567, abs=1e-3)


@pytest.mark.parametrize(
    ("arcmin", "days", "distance"), [(5.0, 40.0, 7252.0), (13.0, 80.0, 4698.0)]
)
def test_rings_of_circinus_x1(arcmin, days, distance):
    """Rings 5'-13' over 40-80 d, 9.4 kpc (Heinz et al. 2015, ApJ 806, 265)."""
    found = ring_dust_distance_pc(arcmin * 60.0, days * DAY, source_distance_pc=9400.0)
    assert found == pytest.approx(distance, abs=1.0)


@pytest.mark.parametrize(
    ("days", "expected"),
    [(14.0, [7.431, 5.983, 3.264]), (5.0, [4.441, 3.575, 1.951])],
)
def test_rings_of_1e_1547(days, expected):
    """3.91 kpc, dust at 2.2, 2.6, 3.4 kpc (Tiengo et al. 2010, ApJ 710, 227)."""
    layers = np.array([2200.0, 2600.0, 3400.0])
    found = ring_angle_arcsec(layers, days * DAY, source_distance_pc=3910.0) / 60.0
    np.testing.assert_allclose(found, expected, atol=6e-4)


def test_lag_of_the_cloud_before_cygnus_x1():
    """Dust at 0.876 of the distance (Ling et al. 2009), 60", 2.0 kpc: 17.09 h."""
    lag = ring_delay_s(60.0, 0.876 * 2000.0, source_distance_pc=2000.0) / HOUR
    assert lag == pytest.approx(17.09, abs=0.01)


def test_knot_beside_cygnus_x3():
    """16" away, 0.56 of a 4.8 h period late (McCollough et al. 2013), 7.4 kpc.

    5981, 6819 and 7035 pc from us for 0, 1, 2 whole cycles (computed).  The period is
    rounded: 0.2 % of the lag, up to 2.5 pc of the first distance.
    """
    knots = knot_places(
        16.0 / 3600.0,
        7400.0,
        phase=0.56,
        period_yr=4.8 * HOUR / YEAR,
        cycles=[0, 1, 2],
    )
    np.testing.assert_allclose(
        knots.observer_distance_pc, [5981.0, 6819.0, 7035.0], atol=2.5
    )
    law = ring_dust_distance_pc(16.0, knots.delay_yr * YEAR, source_distance_pc=7400.0)
    np.testing.assert_allclose(knots.observer_distance_pc, law, rtol=1e-6)


def test_growth_of_the_annulus_of_maxi_j1421():
    """2.5'-4.5' on 2014-01-18, 3'-9' on 01-31 to 02-03, onset 01-07 to 01-10
    (arXiv 2209.07755): a loose check of the square root of time, whose growth was
    computed as 1.38-1.84."""
    for onset in (7.0, 10.0):
        for last in (31.0, 34.0):
            days = np.array([18.0, last]) - onset
            first, second = ring_angle_arcsec(1000.0, days * DAY)
            assert 1.38 <= second / first <= 1.84
            assert 3.0 / 2.5 < second / first < 9.0 / 4.5


def test_growth_rate():
    """theta / (2 t): 144.03" after 22081 s grows by 11.74" an hour (computed)."""
    found = ring_growth_arcsec_s(144.03, 22_081.0) * HOUR
    assert found == pytest.approx(144.03 / (2 * 22_081.0) * 3600.0)
    assert found == pytest.approx(11.74, abs=0.01)


@pytest.mark.parametrize("distance", [139.0, 880.0, 5079.0])
def test_ring_law_agrees_with_the_ellipsoid(distance):
    """Source at 8 kpc, a day late: up to the next order, c t / d = 6e-6."""
    source, day = 8000.0, 1.0 / 365.25
    theta = ring_angle_arcsec(distance, DAY, source_distance_pc=source)
    exact = observer_distance_pc(theta / 3600.0, day, source)
    assert exact == pytest.approx(distance, rel=2e-5)
