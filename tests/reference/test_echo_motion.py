"""Motion of echoes: worked numbers of the paraboloid, and of the exact form near it.

All 'computed' by differentiating the paraboloid r = z + ct; the exact forms are
checked against them at distances where parallax is nothing, and at the stated
distances within that parallax.
"""

import numpy as np
import pytest

from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import (
    angle_deg,
    depth_pc,
    front_speed,
    light_speed_arcsec_yr,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.inversion import age_and_depth, sheet_slope
from latelight.echo.paraboloid import paraboloid_depth_pc
from latelight.echo.paraboloid_inversion import paraboloid_age_and_depth
from latelight.echo.tilted_plane import paraboloid_circle, tilted_plane_ellipse

pytestmark = pytest.mark.reference

FAR = 1e9
"""pc: parallax below 1e-6 for dust within some hundred pc of the source."""

SLOPES = [
    # rho = 100, ct = 50, z = 75, r = 125: slope, speed in units of light's.
    (-2.0, 0.625),
    (-1.0, 0.8333),
    (-0.5, 1.0),
    (0.0, 1.25),
    (0.5, 1.6667),
    (1.0, 2.5),
    (1.9, 25.0),
    (2.1, -25.0),
    (3.0, -2.5),
]


def place(rho, path):
    return np.degrees(rho / FAR), path / LIGHT_PC_PER_YEAR, FAR


@pytest.mark.parametrize(("slope", "beta"), SLOPES)
def test_speed_of_a_sheet_of_any_slope(slope, beta):
    here = place(100.0, 50.0)
    assert depth_pc(*here) == pytest.approx(75.0, rel=1e-5)
    assert source_distance_pc(*here) == pytest.approx(125.0, rel=1e-5)
    found = speed_arcsec_yr(*here, slope) / light_speed_arcsec_yr(FAR)
    assert found == pytest.approx(beta, rel=1e-4)


@pytest.mark.parametrize(("slope", "beta"), SLOPES)
def test_slope_of_a_sheet_of_any_speed(slope, beta):
    """The table read the other way; speeds are given to half of their last digit."""
    speed = beta * light_speed_arcsec_yr(FAR)
    radial, sideways = sheet_slope(*place(100.0, 50.0), speed_arcsec_yr=speed)
    assert radial == pytest.approx(slope, abs=4e-4)
    assert sideways == 0.0


def test_tangent_sheet():
    """Slope rho / ct = 2: infinitely fast to either side."""
    around = np.array([2.0 - 1e-3, 2.0 + 1e-3])
    fast = speed_arcsec_yr(*place(100.0, 50.0), around) / light_speed_arcsec_yr(FAR)
    np.testing.assert_allclose(fast, [2500.0, -2500.0], rtol=1e-3)


@pytest.mark.parametrize(
    ("rho", "path"), [(100.0, 50.0), (50.0, 50.0), (20.0, 50.0), (300.0, 40.0)]
)
def test_front_speed(rho, path):
    """(1 + (rho / ct)**2) / 2 = r / ct (computed)."""
    found = front_speed(*place(rho, path))
    assert found == pytest.approx(0.5 * (1.0 + (rho / path) ** 2), rel=1e-5)
    expected = source_distance_pc(*place(rho, path)) / path
    assert found == pytest.approx(expected, rel=1e-5)


@pytest.mark.parametrize("beta", [1.02, 1.25, 2.0, 9.6])
def test_ages_from_a_motion(beta):
    """ct = rho (beta -+ sqrt(beta**2 - 1)), z = +- rho sqrt(beta**2 - 1) (computed)."""
    rho, root = 100.0, np.sqrt(beta**2 - 1.0)
    speed = beta * light_speed_arcsec_yr(FAR)
    front, behind = age_and_depth(np.degrees(rho / FAR), speed, FAR)
    for found, sign in ((front, -1.0), (behind, 1.0)):
        assert found.possible
        path = LIGHT_PC_PER_YEAR * found.age_yr
        assert path == pytest.approx(rho * (beta + sign * root), rel=1e-4)
        assert found.depth_pc == pytest.approx(-sign * rho * root, rel=1e-4)


def test_sheet_across_the_view_slower_than_light():
    """beta < 1 has no real solution: the sheet must be tilted."""
    speed = 0.9 * light_speed_arcsec_yr(FAR)
    with pytest.raises(ValueError, match="must be tilted"):
        age_and_depth(np.degrees(100.0 / FAR), speed, FAR)


def test_motion_at_the_distance_of_the_magellanic_cloud():
    """theta = 1044.4157", 1.611869 "/yr, 50 kpc: 400.0 yr, +200.0 pc in front, or
    1704.62 yr, -200.0 pc behind (computed, paraboloid).

    The ellipsoid's ages are younger by 0.3 % and older by 2.3 %: the echo behind the
    source is the paraboloid's at fault by more than 1 %, and it must say so.
    """
    motion = (1044.4157 / 3600.0, 1.611869, 50_000.0)
    front, behind = paraboloid_age_and_depth(*motion, error_yr=40.0)
    assert front.age_yr == pytest.approx(400.0, abs=0.05)
    assert front.depth_pc == pytest.approx(200.0, abs=0.05)
    assert behind.age_yr == pytest.approx(1704.62, abs=0.01)
    assert behind.depth_pc == pytest.approx(-200.0, abs=0.05)
    exact_front, exact_behind = age_and_depth(*motion)
    assert exact_front.age_yr == pytest.approx(400.0, rel=4e-3)
    assert exact_front.depth_pc == pytest.approx(200.0, rel=4e-3)
    assert exact_behind.age_yr == pytest.approx(1704.62, rel=0.025)


@pytest.mark.parametrize(
    ("alpha", "centre", "radius"),
    [
        # ct = 10, z0 = 50 (computed; Tylenda 2004, A&A 414, 223, from memory).
        (0.0, 0.0, 33.16625),
        (30.0, 5.77350, 33.66502),
        (45.0, 10.0, 34.64102),
    ],
)
def test_circle_of_a_tilted_plane(alpha, centre, radius):
    plane = {"depth_pc": 50.0, "tilt_deg": alpha}
    circle = paraboloid_circle(10.0 / LIGHT_PC_PER_YEAR, FAR, **plane)
    assert circle.centre_pc == pytest.approx(centre, abs=5e-6)
    assert circle.radius_pc == pytest.approx(radius, abs=5e-6)
    assert circle.drift == pytest.approx(np.tan(np.radians(alpha)), abs=1e-12)
    exact = tilted_plane_ellipse(10.0 / LIGHT_PC_PER_YEAR, FAR, **plane)
    assert exact.centre_pc == pytest.approx(centre, abs=1e-4)
    assert exact.along_pc == pytest.approx(radius, abs=1e-4)
    assert exact.across_pc == pytest.approx(radius, abs=1e-4)


@pytest.mark.parametrize(
    ("alpha", "fast", "slow"),
    [
        (0.0, 1.80907, 1.80907),
        (30.0, 2.45863, 1.30394),
        (45.0, 3.02073, 1.02073),
        (60.0, 4.13740, 0.67330),
    ],
)
def test_edges_of_a_tilted_plane_move(alpha, fast, slow):
    """Outward speeds of both edges, from circles a little apart in time (computed)."""
    step = 1e-4
    ages = np.array([10.0 - step, 10.0 + step]) / LIGHT_PC_PER_YEAR
    circle = paraboloid_circle(ages, FAR, depth_pc=50.0, tilt_deg=alpha)
    outer = np.diff(circle.radius_pc + circle.centre_pc)[0] / (2.0 * step)
    inner = np.diff(circle.radius_pc - circle.centre_pc)[0] / (2.0 * step)
    assert outer == pytest.approx(fast, abs=1e-5)
    assert inner == pytest.approx(slow, abs=1e-5)


@pytest.mark.parametrize(
    ("age", "depth", "arcmin", "rate", "turn"),
    [
        # D = 50 kpc, sheet across the view (computed, paraboloid).
        (410.0, 100.0, 13.9122, 1.4109, 63.70),
        (410.0, 300.0, 20.7665, 1.7827, 45.19),
        (410.0, 500.0, 25.8640, 2.1038, 36.96),
        (410.0, 0.0, 8.6429, 1.2648, 90.0),
        (610.0, 100.0, 18.4981, 1.3494, 69.61),
        (610.0, 300.0, 26.3785, 1.6056, 51.98),
        (610.0, 500.0, 32.3956, 1.8443, 43.30),
        (610.0, 0.0, 12.8590, 1.2648, 90.0),
    ],
)
def test_grid_at_50_kpc_from_depth(age, depth, arcmin, rate, turn):
    """The exact forms, from depth to position and motion: parallax within 2 %."""
    theta = angle_deg(depth, age, 50_000.0)
    assert theta * 60.0 == pytest.approx(arcmin, rel=0.01)
    assert speed_arcsec_yr(theta, age, 50_000.0) == pytest.approx(rate, rel=0.02)
    assert scattering_angle_deg(theta, age, 50_000.0) == pytest.approx(turn, abs=0.6)


@pytest.mark.parametrize(
    ("depth", "theta", "rate"),
    [(100.0, 3.7991, 23.594), (0.0, 2.3423, 21.080), (-50.0, 1.0064, 29.060)],
)
def test_grid_at_3_kpc_from_depth(depth, theta, rate):
    """400 yr (computed, paraboloid: 'at these angles use the ellipsoid'): far off by
    the parallax z / D and theta, within 8 %; at no parallax they agree."""
    found = angle_deg(depth, 400.0, 3000.0)
    assert found == pytest.approx(theta, rel=0.08)
    assert speed_arcsec_yr(found, 400.0, 3000.0) == pytest.approx(rate, rel=0.08)
    far = angle_deg(depth, 400.0, FAR)
    assert far * FAR / 3000.0 == pytest.approx(theta, abs=6e-5)
    speed = speed_arcsec_yr(far, 400.0, FAR) * FAR / 3000.0
    assert speed == pytest.approx(rate, abs=6e-4)


def test_scattering_angle_from_the_projected_distance():
    """cos = (rho**2 - ct**2) / (rho**2 + ct**2); 90 degrees at rho = ct, z = 0."""
    for rho, expected in ((100.0, 0.6), (50.0, 0.0), (25.0, -0.6)):
        turned = scattering_angle_deg(*place(rho, 50.0))
        assert np.cos(np.radians(turned)) == pytest.approx(expected, abs=1e-5)


def test_position_errors():
    """dz/drho = rho / ct, dz/d(ct) = -r / ct, dz/dD = rho**2 / (ct D) (computed)."""
    theta, age, distance = place(100.0, 50.0)
    step = 1e-4
    by_rho = (
        depth_pc(theta * (1 + step), age, distance)
        - depth_pc(theta * (1 - step), age, distance)
    ) / (2 * step * 100.0)
    by_path = (
        depth_pc(theta, age * (1 + step), distance)
        - depth_pc(theta, age * (1 - step), distance)
    ) / (2 * step * 50.0)
    by_distance = (
        depth_pc(theta, age, distance * (1 + step))
        - depth_pc(theta, age, distance * (1 - step))
    ) / (2 * step)
    assert by_rho == pytest.approx(2.0, rel=1e-5)
    assert by_path == pytest.approx(-2.5, rel=1e-5)
    assert by_distance == pytest.approx(100.0**2 / 50.0, rel=1e-5)


def test_paraboloid_must_not_serve_a_wide_echo():
    """D = 1000 pc, 300 yr, phi = 30 degrees: r = 425.795 pc, the paraboloid's 686.551
    (computed), 61 % off; phi = 90: 91.980 and 88.107; phi = 150: 49.292 and 49.137."""
    path = 300.0 * LIGHT_PC_PER_YEAR
    for phi, theta, paraboloid, exact in (
        (30.0, 18.637376, 686.551, 425.795449),
        (90.0, 5.035131, 91.980, 88.106540),
        (150.0, 1.349966, 49.292, 49.137043),
    ):
        assert path / (1.0 - np.cos(np.radians(phi))) == pytest.approx(
            paraboloid, abs=6e-4
        )
        assert source_distance_pc(theta, 300.0, 1000.0) == pytest.approx(
            exact, rel=1e-6
        )
    with pytest.warns(UserWarning, match="use the exact form"):
        paraboloid_depth_pc(18.637376, 300.0, 1000.0)
