"""Draw cameras and the conditions of exposures."""

from __future__ import annotations

import numpy as np

from latelight.simulation.astrometry import frame_wcs, misstate
from latelight.simulation.exposures import BadColumn, Camera, Exposure
from latelight.simulation.optics import random_psf

__all__ = ["random_camera", "random_exposure"]

# Magnitude of one count in 120 s: a 1.5-m telescope at 1.5 electrons a count.
ZERO_POINT = 28.8
EXPOSURE_S = 120.0


def random_camera(
    rng: np.random.Generator, shape: tuple[int, int], *, many_columns: bool
) -> Camera:
    """Draw a camera: its optical axis, its spikes and its faulty columns."""
    ny, nx = shape
    count = int(rng.integers(4, 8) if many_columns else rng.integers(1, 4))
    columns = []
    for _ in range(count):
        whole = rng.random() < 0.5
        columns.append(
            BadColumn(
                col=int(rng.integers(5, nx - 5)),
                first=0 if whole else int(rng.integers(0, ny // 2)),
                last=ny,
                gain=float(rng.choice([0.0, 0.4, 1.0])),
                excess=float(rng.choice([0.0, 150.0, 3000.0])),
            )
        )
    return Camera(
        shape=shape,
        spike_angle=float(rng.uniform(0.0, 90.0)),
        axis_x=nx * float(rng.uniform(0.45, 0.55)),
        axis_y=ny * float(rng.uniform(0.45, 0.55)),
        bad_columns=tuple(columns),
    )


def random_exposure(
    rng: np.random.Generator,
    camera: Camera,
    *,
    ra: float,
    dec: float,
    mjd: float,
    fwhm_px: float,
    field: str,
    filter_word: str = "r",
    chip_offset_px: tuple[float, float] = (0.0, 0.0),
) -> Exposure:
    """Draw the conditions of one exposure of a field.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    camera : Camera
        The camera.
    ra, dec : float
        Where the telescope should point, degrees.
    mjd : float
        Middle of the exposure.
    fwhm_px : float
        Seeing, pixels.
    field, filter_word : str
        Words for the header.
    chip_offset_px : (float, float)
        Where the pointing falls from the chip's centre, x and y, pixels.  The same
        ``rng`` state with another offset makes the next chip of one exposure.
    """
    # The optics' own distortion, and a little that changes with every exposure.
    own = np.array([2.0, 0.3, 0.5, -0.3, 0.2, -0.4, 0.25, 0.3])
    distortion = own + rng.normal(0.0, 0.12, 8)
    # Most nights the rotator is right to a quarter of a degree, some nights not.
    turn = rng.normal(0.0, 0.2) if rng.random() < 0.85 else rng.normal(0.0, 1.0)
    wcs = frame_wcs(
        ra=ra,
        dec=dec,
        shape=camera.shape,
        scale_arcsec=camera.scale_arcsec,
        rotation_deg=float(turn),
        offset_px=(
            chip_offset_px[0] + float(rng.uniform(-15.0, 15.0)),
            chip_offset_px[1] + float(rng.uniform(-15.0, 15.0)),
        ),
        distortion=distortion,
    )
    stated = misstate(
        wcs,
        rng,
        error_px=float(abs(rng.normal(0.0, 2.0))),
        rotation_err_deg=0.01,
    )
    sky_mag = rng.uniform(20.5, 21.3)
    haze = -2.5 * np.log10(rng.uniform(0.7, 1.0))
    sky = 10.0 ** (0.4 * (ZERO_POINT - sky_mag)) * camera.scale_arcsec**2
    return Exposure(
        camera=camera,
        mjd=mjd,
        exposure_s=EXPOSURE_S,
        filter=filter_word,
        field=field,
        wcs=wcs,
        stated_wcs=stated,
        psf=random_psf(rng, fwhm_px=fwhm_px, shape=camera.shape),
        zero_point=float(ZERO_POINT - haze),
        sky_counts=float(sky),
        sky_terms=tuple(rng.normal(0.0, [0.03, 0.03, 0.01, 0.01, 0.01]).tolist()),
    )
