"""The frames of a finished night that are still there."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from latelight.errors import FrameError
from latelight.frames.headers import read_headers
from latelight.frames.reader import read_frames
from latelight.frames.settings import FrameSettings, HeaderWords
from latelight.records import FloatArray, Frame

__all__ = ["KnownFrame", "inside", "known_frames"]


@dataclass(frozen=True, slots=True)
class KnownFrame:
    """A frame on the disk.

    Attributes
    ----------
    corners : float64 array, shape (4, 2)
        RA and Dec, degrees, in order round the frame.
    path : Path
        Its file.
    chip : str
        Its image in the file.
    words, settings : HeaderWords, FrameSettings
        How the night read it.
    """

    corners: FloatArray
    path: Path
    chip: str
    words: HeaderWords
    settings: FrameSettings

    def read(self) -> Frame:
        """Return the frame with its pixels.

        Raises
        ------
        FrameError
            If it cannot be used any more.
        """
        (frame,) = read_frames(self.path, self.words, self.settings, chip=self.chip)
        return frame


def known_frames(output: Path) -> Mapping[str, KnownFrame]:
    """Return the frames of a night that are still there and have a celestial WCS.

    Parameters
    ----------
    output : Path
        Output folder of the night; its ``run.json`` names the frames.

    Returns
    -------
    mapping of str to KnownFrame
        By name of frame; empty when the record of the run cannot be used.
    """
    try:
        record: dict[str, Any] = json.loads((output / "run.json").read_text("utf-8"))
        paths = [Path(entry["path"]) for entry in record["inputs"]]
        words = HeaderWords.model_validate(record["settings"]["header"])
        settings = FrameSettings.model_validate(record["settings"]["frames"])
    except (OSError, ValueError, KeyError, TypeError):
        return {}
    found = {}
    for path in paths:
        try:
            headers = read_headers(path, words)
        except FrameError:
            continue
        for header in headers:
            if header.footprint is not None:
                found[header.name] = KnownFrame(
                    header.footprint, path, header.chip, words, settings
                )
    return found


def inside(corners: FloatArray, ra: float, dec: float) -> bool:
    """Whether a place lies within four corners.

    Parameters
    ----------
    corners : float64 array, shape (4, 2)
        RA and Dec, degrees, in order round a frame smaller than half the sky.
    ra, dec : float
        The place, degrees.
    """
    edges = _vectors(corners)
    middle, place = edges.sum(axis=0), _vectors(np.array([[ra, dec]]))[0]
    if place @ middle <= 0.0:
        return False
    # Inside when on the same side of every edge's great circle as the middle.
    normals = np.cross(edges, np.roll(edges, -1, axis=0))
    return bool(np.all((normals @ place) * (normals @ middle) >= 0.0))


def _vectors(places: FloatArray) -> FloatArray:
    ra, dec = np.radians(places).T
    return np.stack(
        [np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=1
    )
