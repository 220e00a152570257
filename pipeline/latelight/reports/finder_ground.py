"""What a finder chart is drawn on and with: an image of the sky, an arc's shape."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS

from latelight.errors import FrameError, ProductError
from latelight.forecast.predict import MovingArc
from latelight.records import FloatArray, PixelArray
from latelight.reports.known_frames import KnownFrame
from latelight.reports.moving_arcs import FollowedArc
from latelight.sky import position_angle, separation_deg

__all__ = ["ArcShape", "Ground", "Grounds", "arc_shape", "straight_shape"]

_REMAKE = "run the night again"
# Images of a cutout that will do, the better first, and what they are.
_IMAGES = {"SCIENCE": "cutout", "MOVING": "the arc alone, at the middle of its epochs"}


@dataclass(frozen=True, slots=True)
class Ground:
    """The image under a chart.

    Attributes
    ----------
    pixels : float32 array, shape (ny, nx)
        Counts; NaN without value.
    wcs : astropy.wcs.WCS
        Celestial WCS.
    note : str
        What it is, in words.
    """

    pixels: PixelArray
    wcs: Any
    note: str


@dataclass(frozen=True, slots=True)
class ArcShape:
    """The ridge of an arc about its middle.

    Attributes
    ----------
    along, ahead : float64 arrays, shape (n,)
        Arcsec along the arc, towards 90 degrees from the motion, and along the motion.
    """

    along: FloatArray
    ahead: FloatArray


class Grounds:
    """Finds the image under a chart: the frame, or the cutout where it is gone.

    Parameters
    ----------
    output : Path
        Output folder of the night.
    frames : mapping of str to KnownFrame
        The frames that are still there, by name.
    """

    def __init__(self, output: Path, frames: Mapping[str, KnownFrame]) -> None:
        self._output, self._frames = output, frames
        self._name = ""
        self._ground: Ground | None = None

    def under(self, followed: FollowedArc) -> Ground:
        """Return the image for an arc.

        Raises
        ------
        ProductError
            If neither the frame nor the cutout can be used.
        """
        # Arcs of one frame follow each other: only the last one is kept.
        if followed.frame != self._name:
            self._name, self._ground = followed.frame, self._frame(followed.frame)
        if self._ground is not None:
            return self._ground
        return _cutout(self._output / "cutouts" / f"{followed.id}.fits")

    def shape(self, followed: FollowedArc) -> ArcShape:
        """Return the shape of an arc; straight where its cutout does not tell."""
        path = self._output / "cutouts" / f"{followed.id}.fits"
        return arc_shape(path, followed.arc)

    def _frame(self, name: str) -> Ground | None:
        if name not in self._frames:
            return None
        try:
            frame = self._frames[name].read()
        except FrameError:
            return None
        return Ground(frame.plane.pixels, frame.wcs, f"frame {name}")


def arc_shape(path: Path, arc: MovingArc) -> ArcShape:
    """Return the ridge that a cutout traces, or a straight one.

    Parameters
    ----------
    path : Path
        Cutout; one of a track holds the table TRACE.
    arc : MovingArc
        The arc, for its middle, motion and length.
    """
    try:
        with fits.open(path) as file:
            trace = file["TRACE"].data
            ra, dec = (np.array(trace[name], dtype=float) for name in ("ra", "dec"))
    except (OSError, KeyError):
        return straight_shape(arc.length)
    distance = separation_deg(arc.ra, arc.dec, ra, dec) * 3600.0
    turn = np.radians(position_angle(arc.ra, arc.dec, ra, dec) - arc.pa)
    return ArcShape(along=distance * np.sin(turn), ahead=distance * np.cos(turn))


def straight_shape(length: float) -> ArcShape:
    """Return a straight ridge of a length, arcsec."""
    along = np.linspace(-0.5 * length, 0.5 * length, 33)
    return ArcShape(along=along, ahead=np.zeros(along.size))


def _cutout(path: Path) -> Ground:
    try:
        with fits.open(path) as file:
            names = [name for name in _IMAGES if name in file]
            if not names:
                wanted = " or ".join(_IMAGES)
                raise ProductError(path, f"has no image {wanted}: {_REMAKE}")
            image = file[names[0]]
            pixels, wcs = np.array(image.data, np.float32), WCS(image.header)
    except OSError as error:
        reason = f"cannot be read ({error.strerror or error}): {_REMAKE}"
        raise ProductError(path, reason) from None
    if not wcs.has_celestial:
        raise ProductError(path, "has no celestial WCS: a chart needs one")
    return Ground(pixels, wcs, _IMAGES[names[0]])
