"""Distance from polarisation, and the polarised cloud at the Galactic Centre."""

import numpy as np
import pytest

from latelight.echo.geometry import angle_deg, scattering_angle_deg
from latelight.echo.polarisation import (
    polarisation_degree,
    polarisation_distance_pc,
    scattering_angles_of_polarisation_deg,
)

pytestmark = pytest.mark.reference

ARCSEC = 1.0 / 3600.0


def degree(mu):
    return polarisation_degree(np.degrees(np.arccos(mu)))


@pytest.mark.parametrize(
    ("age", "distance", "theta"),
    [
        # D = c t / theta of the most polarised ring (Sparks 1994, ApJ 433, 19),
        # computed.
        (20.0, 15.2e6, 0.08321),
        (50.0, 16.5e6, 0.19164),
        (10.0, 785e3, 0.80562),
        (100.0, 50e3, 126.482),
    ],
)
def test_ring_of_most_polarisation(age, distance, theta):
    # Half a unit of the angle's last digit; 3e-4 is the exact form's own, 126" wide.
    found = polarisation_distance_pc(theta * ARCSEC, age)
    assert found == pytest.approx(distance, rel=4e-4)
    turned = scattering_angle_deg(theta * ARCSEC, age, distance)
    assert turned == pytest.approx(90.0, abs=0.03)


def test_coefficient_of_the_distance():
    """D[Mpc] = 0.0632411 t[yr] / theta["] (computed)."""
    assert polarisation_distance_pc(ARCSEC, 1.0) == pytest.approx(63_241.1, rel=3e-6)


@pytest.mark.parametrize(
    ("mu", "part"), [(0.0, 1.0), (0.5, 0.6), (0.7, 0.34228), (0.9, 0.10497)]
)
def test_degree_of_polarisation(mu, part):
    """P = (1 - mu**2) / (1 + mu**2); computed."""
    assert degree(mu) == pytest.approx(part, abs=5e-6)
    assert degree(-mu) == pytest.approx(part, abs=5e-6)


def test_scattering_angles_of_a_third_polarised():
    """P = 0.31: |mu| = 0.72575, 43.47 or 136.53 degrees (computed)."""
    forward, backward = scattering_angles_of_polarisation_deg(0.31)
    assert np.cos(np.radians(forward)) == pytest.approx(0.72575, abs=5e-6)
    assert forward == pytest.approx(43.47, abs=5e-3)
    assert backward == pytest.approx(136.53, abs=5e-3)


def test_cloud_at_the_galactic_centre():
    """205 yr ago, 26 pc behind: cos = -0.7055 and P = 0.335 (computed, paraboloid).

    Measured 0.31 +- 0.11 (Marin et al. 2023, Nature 619, 41); depth from arXiv
    2501.09737; age 205 (+50, -30) yr by W. Forman, CfA.  At 8 kpc the angle at the
    observer adds 0.3 degrees, 0.002 of the cosine.
    """
    theta = angle_deg(-26.0, 205.0, 8000.0)
    turned = scattering_angle_deg(theta, 205.0, 8000.0)
    assert np.cos(np.radians(turned)) == pytest.approx(-0.7055, abs=0.005)
    part = polarisation_degree(turned)
    assert part == pytest.approx(0.335, abs=0.006)
    assert abs(part - 0.31) < 0.11
    far = scattering_angle_deg(angle_deg(-26.0, 205.0, 8e7), 205.0, 8e7)
    assert np.cos(np.radians(far)) == pytest.approx(-0.7055, abs=1e-4)
    assert polarisation_degree(far) == pytest.approx(0.335, abs=5e-4)
