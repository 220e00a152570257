"""Tilted planes, widths and viewing directions from the definition of the ellipsoid."""

import numpy as np
import pytest

from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import (
    delay_yr,
    depth_pc,
    observer_distance_pc,
    projected_distance_pc,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.profile_width import profile_width
from latelight.echo.tilted_plane import (
    paraboloid_circle,
    tilted_plane_angle_deg,
    tilted_plane_curve,
    tilted_plane_ellipse,
)
from latelight.echo.viewing import angle_between_deg, viewing_direction
from latelight.sky import offset_position, position_angle, separation_deg

pytestmark = pytest.mark.theory

AGE, DISTANCE = 400.0, 3000.0
PLANE = {"depth_pc": 100.0, "tilt_deg": 40.0, "tilt_pa_deg": 70.0}


def lies_on_the_plane(theta, angle, plane):
    """Return z - z0 - x tan(tilt) of the echo at places on the sky, pc."""
    z = depth_pc(theta, AGE, DISTANCE)
    along = np.cos(np.radians(angle - plane["tilt_pa_deg"]))
    x = projected_distance_pc(theta, AGE, DISTANCE) * along
    return z - plane["depth_pc"] - x * np.tan(np.radians(plane["tilt_deg"]))


@pytest.mark.parametrize("tilt", [-75.0, -30.0, 0.0, 40.0, 80.0])
def test_points_lie_on_ellipsoid_and_plane(tilt):
    """depth_pc puts them on the ellipsoid; there they must be in the plane."""
    plane = {**PLANE, "tilt_deg": tilt}
    angle = np.linspace(0.0, 360.0, 73)
    theta = tilted_plane_angle_deg(angle, AGE, DISTANCE, **plane)
    off = lies_on_the_plane(theta, angle, plane)
    np.testing.assert_allclose(off, 0.0, atol=1e-9)


def test_curve_beside_the_source():
    """A plane behind the lit region on the axis, tilted into it, makes a closed curve
    that does not enclose the source."""
    plane = {"depth_pc": -90.0, "tilt_deg": 60.0, "tilt_pa_deg": 200.0}
    theta, angle = tilted_plane_curve(
        np.linspace(0.0, 360.0, 181), AGE, DISTANCE, **plane
    )
    np.testing.assert_allclose(lies_on_the_plane(theta, angle, plane), 0.0, atol=1e-9)
    assert np.ptp(angle) < 180.0
    with pytest.raises(ValueError, match="ask tilted_plane_curve"):
        tilted_plane_angle_deg(200.0, AGE, DISTANCE, **plane)


def test_curve_and_angle_are_one():
    theta, angle = tilted_plane_curve(np.arange(0, 360, 15), AGE, DISTANCE, **PLANE)
    again = tilted_plane_angle_deg(angle, AGE, DISTANCE, **PLANE)
    np.testing.assert_allclose(again, theta, rtol=1e-12)


def test_ellipse_holds_the_curve():
    """Projected beside the source: centre and half axes from the four extremes."""
    ellipse = tilted_plane_ellipse(AGE, DISTANCE, depth_pc=100.0, tilt_deg=40.0)
    theta, angle = tilted_plane_curve(
        np.array([0.0, 90.0, 180.0]), AGE, DISTANCE, **PLANE
    )
    rho = projected_distance_pc(theta, AGE, DISTANCE)
    turned = np.radians(angle - 70.0)
    x, y = rho * np.cos(turned), rho * np.sin(turned)
    assert (x[0] + x[2]) / 2.0 == pytest.approx(ellipse.centre_pc, rel=1e-9)
    assert (x[0] - x[2]) / 2.0 == pytest.approx(ellipse.along_pc, rel=1e-9)
    assert y[1] == pytest.approx(ellipse.across_pc, rel=1e-9)


def test_points_move_as_the_slope_along_the_radius_says():
    """d(theta)/dt at one position angle = speed of a sheet of slope tan * cos."""
    angle, step = np.linspace(0.0, 350.0, 36), 1e-2
    low, high = (
        tilted_plane_angle_deg(angle, AGE + s, DISTANCE, **PLANE) for s in (-step, step)
    )
    slope = np.tan(np.radians(40.0)) * np.cos(np.radians(angle - 70.0))
    theta = tilted_plane_angle_deg(angle, AGE, DISTANCE, **PLANE)
    expected = speed_arcsec_yr(theta, AGE, DISTANCE, slope)
    np.testing.assert_allclose(3600.0 * (high - low) / (2 * step), expected, rtol=1e-5)


def test_ellipse_becomes_the_circle_of_a_distant_source():
    """As 1 / D at fixed lengths."""
    previous = np.inf
    for distance in (1e5, 1e6, 1e7):
        plane = {"depth_pc": 100.0, "tilt_deg": 40.0}
        exact = tilted_plane_ellipse(AGE, distance, **plane)
        circle = paraboloid_circle(AGE, distance, **plane)
        worst = max(
            abs(exact.centre_pc / circle.centre_pc - 1.0),
            abs(exact.along_pc / circle.radius_pc - 1.0),
            abs(exact.across_pc / circle.radius_pc - 1.0),
        )
        assert worst < previous / 9.0
        previous = worst
    assert previous < 1e-4


def test_width_of_the_burst_is_the_ground_it_covers():
    """The echo's place at the start and at the end of a short outburst."""
    slope, duration = 0.4, 1e-2
    theta = 3.0
    z, rho = depth_pc(theta, AGE, DISTANCE), projected_distance_pc(theta, AGE, DISTANCE)
    steps = np.linspace(-0.5, 0.5, 2001)
    angle = np.degrees(np.arctan2(rho + steps, DISTANCE - z - slope * steps))
    delay = delay_yr(angle, z + slope * steps, DISTANCE)
    ends = np.interp(AGE + duration * np.array([-0.5, 0.5]), delay, angle)
    width = profile_width(theta, AGE, DISTANCE, duration_yr=duration, slope=slope)
    assert width.burst == pytest.approx(3600.0 * np.diff(ends)[0], rel=1e-4)
    assert width.total == width.burst


def test_width_of_the_dust_is_the_distance_of_two_sheets():
    """Sheets apart by a thickness along the line of sight echo apart by the width."""
    slope, thickness, theta = 0.4, 1e-3, 3.0
    angle = np.radians(theta)
    reach = observer_distance_pc(theta, AGE, DISTANCE)
    places = []
    for sign in (-0.5, 0.5):
        length = reach - sign * thickness
        z0, rho0 = DISTANCE - length * np.cos(angle), length * np.sin(angle)
        steps = np.linspace(-0.5, 0.5, 2001)
        z = z0 + slope * steps
        seen = np.degrees(np.arctan2(rho0 + steps, DISTANCE - z))
        places.append(np.interp(AGE, delay_yr(seen, z, DISTANCE), seen))
    width = profile_width(
        theta, AGE, DISTANCE, duration_yr=0.0, thickness_pc=thickness, slope=slope
    )
    assert width.dust == pytest.approx(3600.0 * abs(places[1] - places[0]), rel=1e-4)


def test_viewing_direction_is_a_unit_vector(rng):
    """It points from the source to the dust: rho / r across, z / r along."""
    theta, turned = 10.0 ** rng.uniform(-3, 1.8, 200), rng.uniform(0, 360, 200)
    view = viewing_direction(theta, turned, AGE, DISTANCE)
    length = view.east**2 + view.north**2 + view.towards**2
    np.testing.assert_allclose(length, 1.0, rtol=1e-12)
    r = source_distance_pc(theta, AGE, DISTANCE)
    np.testing.assert_allclose(
        view.towards, depth_pc(theta, AGE, DISTANCE) / r, atol=1e-12
    )
    rho = projected_distance_pc(theta, AGE, DISTANCE)
    np.testing.assert_allclose(np.hypot(view.east, view.north), rho / r, atol=1e-12)
    np.testing.assert_allclose(
        np.degrees(np.arctan2(view.east, view.north)) % 360.0, turned, rtol=1e-9
    )
    # The angle at the source and that at the observer add to the scattering angle.
    np.testing.assert_allclose(
        view.inclination_deg + theta,
        scattering_angle_deg(theta, AGE, DISTANCE),
        rtol=1e-12,
    )


def test_views_apart():
    """Same view 0; opposite sides of a ring twice the inclination; and digits."""
    east = viewing_direction(2.0, 90.0, AGE, DISTANCE)
    west = viewing_direction(2.0, 270.0, AGE, DISTANCE)
    assert angle_between_deg(east, east) == 0.0
    twice = 2.0 * east.inclination_deg
    assert angle_between_deg(east, west) == pytest.approx(min(twice, 360.0 - twice))
    near = viewing_direction(2.0, 90.0 + 1e-6, AGE, DISTANCE)
    expected = 1e-6 * np.sin(np.radians(east.inclination_deg))
    assert angle_between_deg(east, near) == pytest.approx(expected, rel=1e-6)


def test_turning_the_sky_changes_nothing(rng):
    """Echoes of one event in a sky turned by any rotation: same geometry, and the
    same angles between their views."""
    from scipy.spatial.transform import Rotation

    source = np.array([40.0, -30.0])
    pa, theta = rng.uniform(0, 360, 5), rng.uniform(0.5, 9.0, 5)
    ra, dec = offset_position(*source, pa, theta)

    def turn(ra, dec, rotation):
        lon, lat = np.radians(ra), np.radians(dec)
        unit = np.stack(
            [np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=-1
        )
        x, y, z = rotation.apply(unit).T
        return np.degrees(np.arctan2(y, x)) % 360.0, np.degrees(np.arcsin(z))

    def describe(ra0, dec0, ra, dec):
        apart = separation_deg(ra0, dec0, ra, dec)
        view = viewing_direction(
            apart, position_angle(ra0, dec0, ra, dec), AGE, DISTANCE
        )
        first = type(view)(*(getattr(view, name)[:1] for name in view.__slots__))
        return (
            apart,
            depth_pc(apart, AGE, DISTANCE),
            speed_arcsec_yr(apart, AGE, DISTANCE, 0.3),
            angle_between_deg(first, view),
        )

    before = describe(*source, ra, dec)
    for rotation in Rotation.random(4, random_state=np.random.RandomState(3)):
        ra0, dec0 = turn(source[:1], source[1:], rotation)
        after = describe(ra0[0], dec0[0], *turn(ra, dec, rotation))
        for one, other in zip(before, after, strict=True):
            np.testing.assert_allclose(one, other, rtol=1e-9, atol=1e-9)


def test_paths_of_a_curve_sum_up():
    """r + l = D + ct on every point of a curve, from coordinates alone."""
    theta, angle = tilted_plane_curve(np.arange(0, 360, 10), AGE, DISTANCE, **PLANE)
    x = np.cos(np.radians(angle - 70.0))
    # Where the sight line pierces the plane z = z0 + rho x tan(tilt).
    tilt = np.tan(np.radians(40.0)) * x
    tan = np.tan(np.radians(theta))
    rho = (DISTANCE - 100.0) * tan / (1.0 + tilt * tan)
    z = 100.0 + tilt * rho
    total = np.hypot(rho, z) + np.hypot(rho, DISTANCE - z)
    np.testing.assert_allclose(total, DISTANCE + AGE * LIGHT_PC_PER_YEAR, rtol=1e-12)
