"""Trial paths: where a ridge may have been at all epochs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.tracks._kernels import path_log_p
from latelight.motion.tracks.lobe import Lobe
from latelight.motion.tracks.strips import StripSums
from latelight.records import FloatArray, IntArray

__all__ = ["PathGuess", "search_paths"]

_SCALES = (0.7, 1.0, 1.4)
_SKEW = 0.7
_STEP = 0.3
"""Steps of the places, in widths."""
_START = 0.9


@dataclass(frozen=True, slots=True)
class PathGuess:
    """The best straight path for one sense of motion.

    Attributes
    ----------
    start : float
        Place at time 0, pixels along the motion.
    speed : float
        Pixels per year, >= 0.
    lobe : Lobe
        The shape it was found with.
    log_p : float
        ln of its probability.
    log_evidence : float
        ln of the probability summed over all paths.
    """

    start: float
    speed: float
    lobe: Lobe
    log_p: float
    log_evidence: float


def search_paths(
    sums: StripSums,
    *,
    times: FloatArray,
    psf: FloatArray,
    width: float,
    highest: float,
    scatter: float,
) -> PathGuess:
    """Try straight paths that pass near offset 0 at time 0.

    Parameters
    ----------
    sums : StripSums
        The epochs along the arc, motion towards positive offsets.
    times : float64 array, shape (n,)
        Julian years since the ridge lay on the trace.
    psf : float64 array, shape (n,)
        Sigma of each epoch's PSF, pixels.
    width : float
        Rough full width, PSF included, pixels.
    highest : float
        Highest speed, pixels per year.
    scatter : float
        1 sigma of the heights over their mean.
    """
    signal, omega = sums.signal.sum(axis=0), sums.omega.sum(axis=0)
    step = max(_STEP * width, 0.7)
    n_starts = int(np.ceil(_START * width / step))
    starts = step * np.arange(-n_starts, n_starts + 1, dtype=float)
    longest = float(np.abs(times).max())
    n_speeds = max(2, int(np.ceil(highest * longest / step)))
    speeds = np.linspace(0.0, highest, n_speeds + 1)
    fine = 0.25 * step
    places = np.arange(sums.offsets[0], sums.offsets[-1] + fine, fine)
    best: PathGuess | None = None
    evidence = -np.inf
    for scale in _SCALES:
        lobe = Lobe.of_width(psf, scale * width, _SKEW)
        level = Lobe(np.full(1, lobe.seeing), lobe.seeing, lobe.log_size, lobe.skew)
        lobes = level.heights((sums.offsets - places[:, None])[None])[0]
        log_p = path_log_p(
            signal,
            omega,
            lobes,
            _filled(lobes),
            places,
            fine,
            starts,
            speeds,
            times,
            scatter,
        )
        evidence = np.logaddexp(evidence, np.logaddexp.reduce(log_p, axis=None))
        i, j = np.unravel_index(int(np.argmax(log_p)), log_p.shape)
        if best is None or log_p[i, j] > best.log_p:
            best = PathGuess(
                float(starts[i]), float(speeds[j]), lobe, float(log_p[i, j]), 0.0
            )
    assert best is not None
    return PathGuess(best.start, best.speed, best.lobe, best.log_p, float(evidence))


def _filled(lobes: FloatArray) -> IntArray:
    """Return the first and past-the-last row in which each lobe matters."""
    matters = lobes > 0.02
    first = matters.argmax(axis=1)
    last = lobes.shape[1] - matters[:, ::-1].argmax(axis=1)
    empty = ~matters.any(axis=1)
    return np.column_stack([first, np.where(empty, first, last)]).astype(np.int64)
