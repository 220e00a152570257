"""How long ago a galaxy's nucleus lit a cloud that still shines.

Light that a cloud sends on left the nucleus earlier than the light that now comes
straight: the cloud shows the nucleus as it was.  Distances are so large that the rays
are parallel, which is the paraboloid's limit.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from latelight.echo.arguments import (
    as_floats,
    checked_positive,
    checked_separation,
    require,
)
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.records import FloatArray

__all__ = ["angular_diameter_distance_pc", "cloud_lookback_yr"]


def angular_diameter_distance_pc(
    redshift: ArrayLike, *, cosmology: Any = None
) -> FloatArray:
    """Return the distance that turns angles into lengths at a galaxy, pc.

    Parameters
    ----------
    redshift : array_like of float
        Positive.
    cosmology : astropy.cosmology.FLRW, optional
        By default ``astropy.cosmology.Planck18``.

    Raises
    ------
    ValueError
        If a redshift is not positive and finite.
    """
    z = checked_positive(
        redshift, "redshift", cure="give the distance of a galaxy without one directly"
    )
    if cosmology is None:
        from astropy.cosmology import Planck18

        cosmology = Planck18
    return np.asarray(cosmology.angular_diameter_distance(z).to_value("pc"))


def cloud_lookback_yr(
    theta_deg: ArrayLike,
    *,
    redshift: ArrayLike,
    inclination_deg: ArrayLike = 90.0,
    cosmology: Any = None,
) -> FloatArray:
    """Return how much older the nucleus' light in a cloud is than its direct light.

    Parameters
    ----------
    theta_deg : array_like of float
        Angle between nucleus and cloud, degrees, 0 < theta < 90.
    redshift : array_like of float
        Of the galaxy, positive.
    inclination_deg : array_like of float
        Angle at the nucleus between the line to the observer and that to the cloud,
        degrees, 0 < inclination < 180: 90 for a cloud as far away as the nucleus.
    cosmology : astropy.cosmology.FLRW, optional
        By default ``astropy.cosmology.Planck18``.

    Returns
    -------
    float64
        ``rho tan(inclination / 2) / c``, Julian years in the galaxy's frame; for the
        observer's clock times ``1 + redshift``.

    Raises
    ------
    ValueError
        If an argument is out of its range.
    """
    theta = checked_separation(theta_deg)
    inclination = as_floats(inclination_deg)
    require(
        (inclination > 0.0) & (inclination < 180.0),
        "inclination_deg",
        "in (0, 180)",
        inclination,
        cure="a cloud beside the nucleus on the sky is not in line with it",
    )
    rho = theta * angular_diameter_distance_pc(redshift, cosmology=cosmology)
    return rho * np.tan(np.radians(inclination) / 2.0) / LIGHT_PC_PER_YEAR
