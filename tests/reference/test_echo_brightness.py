"""Widths and surface brightness: worked numbers and published ranges.

'Computed' numbers follow from the paraboloid forms of the laws cited; where the exact
form is asked, its parallax is allowed for.  They are also met at a distance without
parallax, with all lengths the same.
"""

import numpy as np
import pytest

from latelight.arcs.profiles import lobe_profile
from latelight.echo.brightness import (
    illuminated_depth_pc,
    scattering_depth,
    scattering_depth_from_brightness,
    sheet_brightness_mag,
    thick_sheet_brightness_mag,
    thin_sheet_brightness_mag,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.dust import DustOptics, milky_way_dust, phase_function
from latelight.echo.geometry import (
    angle_deg,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.profile_width import profile_width

pytestmark = pytest.mark.reference

DAY = 1.0 / 365.25
FAR = 1e9
V_BAND = DustOptics(albedo=0.67, asymmetry=0.54, extinction_cm2=4.9e-22)


def widths(depth, age, distance, **sizes):
    """Return exact widths at a distance, and those without parallax (same lengths)."""
    near = profile_width(angle_deg(depth, age, distance), age, distance, **sizes)
    sizes = {
        **sizes,
        "psf_fwhm_arcsec": sizes.get("psf_fwhm_arcsec", 0) * distance / FAR,
    }
    far = profile_width(angle_deg(depth, age, FAR), age, FAR, **sizes)
    scale = FAR / distance
    return near, (far.burst * scale, far.dust * scale, far.total * scale)


@pytest.mark.parametrize(
    ("days", "thickness", "burst", "dust", "total"),
    [(30.0, 1.0, 0.1464, 1.7169, 2.0443), (60.0, 5.0, 0.2928, 8.5847, 8.6598)],
)
def test_width_in_the_magellanic_cloud(days, thickness, burst, dust, total):
    """50 kpc, 410 yr, z = 300 pc, seeing 1.1": computed after Rest et al. 2011, ApJ
    732, 3 (what matters) and Sugerman 2003 (the forms, from memory)."""
    near, far = widths(
        300.0,
        410.0,
        50_000.0,
        duration_yr=days * DAY,
        thickness_pc=thickness,
        psf_fwhm_arcsec=1.1,
    )
    np.testing.assert_allclose(far, [burst, dust, total], rtol=3e-4)
    np.testing.assert_allclose(
        [near.burst, near.dust, near.total], [burst, dust, total], rtol=0.01
    )


@pytest.mark.parametrize(
    ("depth", "burst", "dust"),
    [(100.0, 3.876, 4.239), (0.0, 3.463, 6.875), (-50.0, 4.774, 16.002)],
)
def test_width_in_the_galaxy(depth, burst, dust):
    """3 kpc, 400 yr, 60 d, 0.1 pc (computed, paraboloid); parallax up to 10 %."""
    near, far = widths(depth, 400.0, 3000.0, duration_yr=60 * DAY, thickness_pc=0.1)
    np.testing.assert_allclose(far[:2], [burst, dust], rtol=2e-4)
    np.testing.assert_allclose([near.burst, near.dust], [burst, dust], rtol=0.1)


def test_a_tilt_widens_both_by_the_same():
    """c tau r / (rho - s ct), dz ct / (rho - s ct); rho = 100, ct = 50 (computed)."""
    place = (np.degrees(100.0 / FAR), 50.0 / LIGHT_PC_PER_YEAR, FAR)
    arcsec_per_pc = 206_264.806 / FAR
    for slope in (-1.0, 0.0, 1.0, 3.0):
        found = profile_width(*place, duration_yr=0.1, thickness_pc=0.2, slope=slope)
        amplified = 1.0 / abs(100.0 - slope * 50.0)
        burst = 0.1 * LIGHT_PC_PER_YEAR * 125.0 * amplified
        assert found.burst == pytest.approx(burst * arcsec_per_pc, rel=1e-5)
        dust = 0.2 * 50.0 * amplified
        assert found.dust == pytest.approx(dust * arcsec_per_pc, rel=1e-5)


@pytest.mark.parametrize(
    ("ratio", "gain"),
    [
        (2 / 3, 0.4586),
        (4 / 3, 0.8471),
        (2.0, 1.1244),
        (10 / 3, 1.3695),
        (20 / 3, 1.4142),
    ],
)
def test_a_pair_of_ridges_against_one(ratio, gain):
    """Separation over sigma to the gain in S/N, sqrt(2 (1 - exp(-q**2 / 4 s**2)));
    computed, and here summed from the profiles that arcs are fitted with."""
    x = np.linspace(-40.0, 40.0, 16_001)
    ridge = lobe_profile(x, 1.0, 0.0)
    pair = lobe_profile(x - ratio, 1.0, 0.0) - ridge
    found = np.sqrt((pair**2).sum() / (ridge**2).sum())
    assert found == pytest.approx(gain, abs=1e-4)


@pytest.mark.parametrize(
    ("mu", "phase"),
    [
        # g = 0.54, per steradian; computed from Henyey & Greenstein's form.
        (1.0, 0.57916),
        (0.9, 0.31200),
        (0.5, 0.086514),
        (0.0, 0.038404),
        (-0.65, 0.020027),
        (-1.0, 0.015435),
    ],
)
def test_phase_function(mu, phase):
    turned = np.degrees(np.arccos(mu))
    assert phase_function(turned, 0.54) == pytest.approx(phase, rel=3e-5)
    # One printed review has the other sign: forward must win.
    assert phase_function(0.0, 0.54) >= phase_function(turned, 0.54)


def test_phase_function_of_all_directions_alike():
    """g = 0: 1 / (4 pi) = 0.0795775 (computed)."""
    for turned in (0.0, 33.0, 180.0):
        assert phase_function(turned, 0.0) == pytest.approx(0.0795775, abs=5e-8)


@pytest.mark.parametrize("g", [0.2, 0.54, 0.8])
def test_forward_over_backward(g):
    """((1 + g) / (1 - g))**3 (computed)."""
    ratio = phase_function(0.0, g) / phase_function(180.0, g)
    assert ratio == pytest.approx(((1 + g) / (1 - g)) ** 3, rel=1e-12)


def test_dust_of_the_milky_way():
    """V: albedo ~0.67, g ~0.54, ~4.9e-22 cm2 per H (Weingartner & Draine 2001, ApJ
    548, 296; Draine 2003, ApJ 598, 1017; from memory): within 3 %."""
    dust = milky_way_dust(0.55)
    assert dust.albedo == pytest.approx(0.67, rel=0.03)
    assert dust.asymmetry == pytest.approx(0.54, rel=0.03)
    assert dust.extinction_cm2 == pytest.approx(4.9e-22, rel=0.03)


# M_V = -19.3 at m - M = 18.5: peak -0.8; 50 kpc, 400 yr, z = 200 pc (computed).
WORKED = (17.407 / 60.0, 400.0, 50_000.0)
PEAK = -0.8


def test_geometry_of_the_worked_echo():
    """mu = 1.6119 "/yr, r = 322.64 pc, mu_s = 0.61988, Phi = 0.11488 (paraboloid)."""
    assert speed_arcsec_yr(*WORKED) == pytest.approx(1.6119, rel=0.01)
    assert source_distance_pc(*WORKED) == pytest.approx(322.64, rel=0.01)
    turned = scattering_angle_deg(*WORKED)
    assert np.cos(np.radians(turned)) == pytest.approx(0.61988, abs=0.005)
    assert phase_function(turned, 0.54) == pytest.approx(0.11488, rel=0.01)
    far = np.degrees(np.radians(WORKED[0]) * 50_000.0 / FAR), 400.0, FAR
    assert source_distance_pc(*far) == pytest.approx(322.64, abs=0.02)
    turned = scattering_angle_deg(*far)
    assert np.cos(np.radians(turned)) == pytest.approx(0.61988, abs=2e-5)
    assert phase_function(turned, 0.54) == pytest.approx(0.11488, abs=1e-5)


def test_brightness_of_a_thin_sheet():
    """tau = 0.03: 20.98 mag/arcsec2 (computed), within 0.02."""
    found = thin_sheet_brightness_mag(
        *WORKED, peak_mag=PEAK, scattering_depth=0.03, asymmetry=0.54
    )
    assert found == pytest.approx(20.98, abs=0.02)
    back = scattering_depth_from_brightness(
        *WORKED, brightness_mag=20.98, peak_mag=PEAK, asymmetry=0.54
    )
    assert back == pytest.approx(0.03, rel=0.02)


def test_lit_depth():
    """30 d: dz = tau r / t = 0.06625 pc (computed); parallax below 1 %."""
    lit = illuminated_depth_pc(*WORKED, duration_yr=30 * DAY)
    assert lit == pytest.approx(0.06625, rel=0.01)


@pytest.mark.parametrize(("density", "magnitude"), [(100.0, 22.61), (10.0, 25.11)])
def test_brightness_of_a_thick_sheet(density, magnitude):
    """30 d, n_H = 100 and 10 per cm3 (computed), within 0.02.

    The brighter is within 22-24, the range of echoes in the Large Magellanic Cloud
    (survey pages of ctio.noao.edu).
    """
    found = thick_sheet_brightness_mag(
        *WORKED,
        peak_mag=PEAK,
        duration_yr=30 * DAY,
        density_cm3=density,
        dust=V_BAND,
    )
    assert found == pytest.approx(magnitude, abs=0.02)
    if density == 100.0:
        assert 22.0 < found < 24.0


def test_scattering_depth_of_the_lit_part():
    """n_H = 100 per cm3 over 0.06625 pc: 6.68e-3 (computed, from an albedo and a
    cross-section of two figures: 1 %)."""
    found = scattering_depth(100.0, 0.06625, V_BAND)
    assert found == pytest.approx(6.68e-3, rel=0.01)


def test_equation_7_of_sugerman():
    """B = F n_H c dz / (4 pi r rho drho) S (Sugerman 2003, AJ 126, 1939; form from two
    quotations), here with 4 pi in the phase function and D**2 for fluxes at the
    observer, and drho from both widths: within parallax, 1 % or 0.01 mag."""
    path, rho, r = 400.0 * LIGHT_PC_PER_YEAR, 253.18, 322.64
    days, thickness, density = 30.0, 0.05, 100.0
    burst = days * DAY * LIGHT_PC_PER_YEAR * r / rho
    drho = np.hypot(burst, thickness * path / rho)
    per_cm = density * V_BAND.scattering_cm2 * 3.0857e18
    ratio = (
        (days * DAY * LIGHT_PC_PER_YEAR)
        * per_cm
        * 0.11488
        * 50_000.0**2
        * thickness
        / (r * rho * drho)
    )
    expected = PEAK - 2.5 * np.log10(ratio / 206_264.8**2)
    found = sheet_brightness_mag(
        *WORKED,
        peak_mag=PEAK,
        duration_yr=days * DAY,
        thickness_pc=thickness,
        density_cm3=density,
        dust=V_BAND,
    )
    assert found == pytest.approx(expected, abs=0.02)
