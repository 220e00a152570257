"""Scattering: normalisation, limits of thin and thick sheets, inverses."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from latelight.echo.brightness import (
    dust_column,
    illuminated_depth_pc,
    scattering_depth,
    scattering_depth_from_brightness,
    sheet_brightness_mag,
    thick_sheet_brightness_mag,
    thin_sheet_brightness_mag,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.dust import milky_way_dust, phase_function
from latelight.echo.geometry import depth_pc, observer_distance_pc
from latelight.echo.profile_width import profile_width

pytestmark = pytest.mark.theory

PLACE = (0.3, 410.0, 50_000.0)
DUST = milky_way_dust(0.55)


@pytest.mark.parametrize("g", [-0.5, 0.0, 0.3, 0.54, 0.8, 0.95])
def test_phase_function_is_normalised(g):
    """Its integral over all directions is 1 and its mean cosine g."""

    def over_angle(angle, power):
        phase = phase_function(np.degrees(angle), g)
        return 2.0 * np.pi * np.sin(angle) * np.cos(angle) ** power * phase

    # A node in the forward peak of a sharp one.
    edges = {"points": [1.0 - abs(g), np.pi - 1.0 + abs(g)], "limit": 200}
    total = quad(over_angle, 0.0, np.pi, args=(0,), epsabs=1e-12, **edges)[0]
    mean = quad(over_angle, 0.0, np.pi, args=(1,), epsabs=1e-12, **edges)[0]
    assert total == pytest.approx(1.0, abs=1e-9)
    assert mean == pytest.approx(g, abs=1e-9)


def test_albedo_between_the_tabulated_wavelengths():
    """Interpolated values lie between their neighbours, and meet them."""
    fine = milky_way_dust(np.geomspace(0.22, 2.2, 500))
    assert fine.albedo.min() == pytest.approx(0.31)
    assert fine.albedo.max() == pytest.approx(0.67)
    assert np.all(np.diff(fine.extinction_cm2) < 0.0)
    np.testing.assert_allclose(fine.scattering_cm2, fine.albedo * fine.extinction_cm2)


def test_lit_depth_is_what_the_front_crosses_in_the_outburst():
    """The difference of the dust's distance between the two ends of the outburst."""
    step = 1e-3
    ages = 410.0 + 0.5 * step * np.array([-1.0, 1.0])
    crossed = np.diff(observer_distance_pc(0.3, ages, 50_000.0))[0]
    lit = illuminated_depth_pc(*PLACE, duration_yr=step)
    assert lit == pytest.approx(crossed, rel=1e-5)


@given(depth=st.floats(1e-6, 1.0), peak=st.floats(-5.0, 15.0), g=st.floats(-0.9, 0.9))
@settings(max_examples=100, deadline=None)
def test_scattering_depth_undoes_brightness(depth, peak, g):
    known = {"peak_mag": peak, "asymmetry": g}
    seen = thin_sheet_brightness_mag(*PLACE, scattering_depth=depth, **known)
    back = scattering_depth_from_brightness(*PLACE, brightness_mag=seen, **known)
    assert back == pytest.approx(depth, rel=1e-12)


def test_column_goes_with_the_scattering_depth():
    """N = tau / sigma_sca and A_V = 1.0857 N C_V, from the definitions."""
    column = dust_column(scattering_depth(100.0, 0.5, DUST), DUST)
    cm = 0.5 * 3.0856775814913673e18
    assert column.hydrogen_cm2 == pytest.approx(100.0 * cm, rel=1e-12)
    extinction = column.hydrogen_cm2 * DUST.extinction_cm2
    assert column.visual_extinction_mag == pytest.approx(
        extinction * 2.5 * np.log10(np.e), rel=1e-12
    )
    # The same gas seen in the red.
    red = milky_way_dust(0.66)
    other = dust_column(scattering_depth(100.0, 0.5, red), red)
    assert other.visual_extinction_mag == pytest.approx(column.visual_extinction_mag)


KNOWN = {
    "peak_mag": -0.8,
    "duration_yr": 30.0 / 365.25,
    "density_cm3": 50.0,
    "dust": DUST,
}


def test_sheet_tends_to_the_thin_and_the_thick_one():
    """Where dust or burst alone makes the width; the rest falls as its square."""
    lit = float(illuminated_depth_pc(*PLACE, duration_yr=KNOWN["duration_yr"]))
    thin = thin_sheet_brightness_mag(
        *PLACE,
        peak_mag=-0.8,
        scattering_depth=scattering_depth(50.0, 0.01 * lit, DUST),
        asymmetry=DUST.asymmetry,
    )
    found = sheet_brightness_mag(*PLACE, thickness_pc=0.01 * lit, **KNOWN)
    assert found == pytest.approx(thin, abs=1e-4)
    thick = thick_sheet_brightness_mag(*PLACE, **KNOWN)
    found = sheet_brightness_mag(*PLACE, thickness_pc=100.0 * lit, **KNOWN)
    assert found == pytest.approx(thick, abs=1e-4)
    middle = sheet_brightness_mag(*PLACE, thickness_pc=lit, **KNOWN)
    assert middle == pytest.approx(thick + 2.5 * np.log10(np.sqrt(2.0)), abs=1e-9)


@pytest.mark.parametrize("slope", [-1.5, 0.0, 0.6, 4.0])
def test_tilt_leaves_the_limits_alone(slope):
    """Widths of burst and dust grow alike with the tilt."""
    found = sheet_brightness_mag(*PLACE, thickness_pc=2.0, slope=slope, **KNOWN)
    flat = sheet_brightness_mag(*PLACE, thickness_pc=2.0, **KNOWN)
    assert found == pytest.approx(flat, abs=1e-9)


def test_seeing_conserves_the_light():
    """Peak times width stays, however blurred."""
    light = []
    for seeing in (0.0, 1.0, 5.0):
        sizes = {"thickness_pc": 0.2, "psf_fwhm_arcsec": seeing}
        peak = sheet_brightness_mag(*PLACE, **sizes, **KNOWN)
        width = profile_width(*PLACE, duration_yr=KNOWN["duration_yr"], **sizes).total
        light.append(10.0 ** (-0.4 * peak) * width)
    np.testing.assert_allclose(light, light[0], rtol=1e-12)


def test_a_ring_sends_what_its_volume_scatters():
    """Intensity times solid angle = the power scattered between the paraboloids of the
    outburst's two ends: F D**2 / r**2 on each grain, 1 / (4 pi) of it towards us."""
    distance, age, step = 1e8, 400.0, 1e-3
    path = age * LIGHT_PC_PER_YEAR
    rho = path * np.array([1.999, 2.001])
    theta = np.degrees(rho.mean() / distance)
    lit = illuminated_depth_pc(theta, age, distance, duration_yr=step)
    mag = thin_sheet_brightness_mag(
        theta, age, distance, peak_mag=0.0, scattering_depth=lit, asymmetry=0.0
    )
    intensity = 10.0 ** (-0.4 * mag) * 206_264.806**2
    area = np.pi * (rho[1] ** 2 - rho[0] ** 2)
    flux = intensity * area / distance**2
    # Dust that scatters 1 per pc, at r = (rho**2 / ct + ct) / 2 = 5/2 ct.
    ages = age + 0.5 * step * np.array([-1.0, 1.0])
    depth = depth_pc(theta, ages, distance)
    volume = area * abs(np.diff(depth)[0])
    r = 2.5 * path
    assert flux == pytest.approx(volume / (4.0 * np.pi * r**2), rel=1e-4)
