"""How much likelier a turn from the away direction is than for random arcs.

Tilted sheets turn the motion of an echo from the direction away from its origin.
How wide that scatter is, and how heavy its tails, is not known beforehand; so
several laws are kept side by side, all tabulated with the errors of measurement in
them, and the joint fit averages over them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft

from latelight.origin.joint_arcs import MovingArcs
from latelight.records import FloatArray, IntArray

__all__ = ["DirectionLaws", "direction_laws", "law_widths", "pseudo_angle", "turns"]

N_NODES = 257
_N_CIRCLE = 2880
# Half-widths of the laws in units of the typical one, and how likely each is.
_WIDTHS = (0.25, 0.5, 1.0, 2.0)
_WIDTH_PRIOR = (0.2, 0.3, 0.3, 0.2)
_WIDEST_DEG = 80.0
# Quartile of the normal law in units of its sigma.
_QUARTILE = 0.6744897501960817
# Errors of the direction and probabilities of a wrong sense, rounded up to these.
_ERRORS_DEG = (0.5, 1.0, 1.5, 2.2, 3.3, 5.0, 7.5, 11.0, 17.0, 25.0, 38.0, 57.0, 90.0)
_WRONG = (0.0, 0.003, 0.01, 0.03, 0.06, 0.1, 0.15, 0.2, 0.3, 0.4, 0.5)


@dataclass(frozen=True, slots=True)
class DirectionLaws:
    """Laws of the turn, as tables of likelihood ratios.

    Attributes
    ----------
    ratio : float64 array, shape (n_classes, n_nodes, n_laws)
        Probability of a turn over that of random directions, by class of arcs, pseudo
        angle of the turn (0 to 2, even steps) and law.
    prior : float64 array, shape (n_laws,)
        How likely each law is; sums to one.
    class_of : int64 array, shape (n_arcs,)
        Row of ``ratio`` for each arc.
    """

    ratio: FloatArray
    prior: FloatArray
    class_of: IntArray

    def ratios(self, turn: FloatArray) -> FloatArray:
        """Return the ratios of all arcs at turns in degrees, shape (n_arcs, n_laws)."""
        at = pseudo_angle(turn) * (0.5 * (N_NODES - 1))
        low = np.minimum(at.astype(np.int64), N_NODES - 2)
        part = (at - low)[:, None]
        return (1.0 - part) * self.ratio[self.class_of, low] + part * self.ratio[
            self.class_of, low + 1
        ]

    def draw(self, law: IntArray, rng: np.random.Generator) -> FloatArray:
        """Draw a turn for each arc from the law of the given number, degrees."""
        angle = _node_angles()
        middle = 0.5 * (angle[1:] + angle[:-1])
        share = np.diff(angle)
        table = 0.5 * (self.ratio[:, 1:] + self.ratio[:, :-1]) * share[:, None]
        summed = np.cumsum(table, axis=1)
        summed /= summed[:, -1:]
        sign = np.where(rng.random(len(law)) < 0.5, -1.0, 1.0)
        level = rng.random(len(law))
        row = summed[self.class_of, :, law]
        return sign * middle[np.argmax(row >= level[:, None], axis=1)]


def direction_laws(arcs: MovingArcs, *, scatter_deg: float) -> DirectionLaws:
    """Tabulate the laws for the errors that a set of arcs has.

    Parameters
    ----------
    arcs : MovingArcs
        The arcs.
    scatter_deg : float
        Typical angle within which half of the arcs of an origin move.

    Notes
    -----
    Wrapped Cauchy laws (sheets whose slopes have the law of
    :func:`latelight.origin.score.motion_density`) and wrapped normal ones (sheets
    without steep tilts), in four widths each, convolved with the normal errors of
    measurement: characteristic functions are multiplied.
    """
    error = np.searchsorted(_ERRORS_DEG[:-1], arcs.pa_err_deg)
    wrong = np.searchsorted(_WRONG[:-1], arcs.wrong_sense - 1e-12)
    kinds, class_of = np.unique(
        np.stack([error, wrong], axis=1), axis=0, return_inverse=True
    )
    ratio = np.stack(
        [_table(scatter_deg, _ERRORS_DEG[e], _WRONG[w]) for e, w in kinds]
        or [np.empty((N_NODES, 2 * len(_WIDTHS)))]
    )
    prior = np.array(_WIDTH_PRIOR * 2)
    return DirectionLaws(
        ratio=np.ascontiguousarray(ratio),
        prior=prior / prior.sum(),
        class_of=class_of.reshape(-1).astype(np.int64),
    )


def law_widths(scatter_deg: float) -> FloatArray:
    """Return the half-width of each law, degrees: half of the arcs move within it."""
    return np.minimum(np.array(_WIDTHS * 2) * scatter_deg, _WIDEST_DEG)


def pseudo_angle(turn_deg: FloatArray) -> FloatArray:
    """Return a quantity that grows with the size of a turn, 0 at 0, 2 at 180 degrees.

    ``|sin| / (|sin| + |cos|)``, mirrored beyond a right angle: as good as the angle
    for looking up a table, and it needs no inverse of a trigonometric function.
    """
    turn = np.radians(np.asarray(turn_deg, float))
    side, ahead = np.abs(np.sin(turn)), np.cos(turn)
    part = side / (side + np.abs(ahead))
    return np.where(ahead >= 0.0, part, 2.0 - part)


def turns(arcs: MovingArcs, origin: FloatArray) -> FloatArray:
    """Return motion minus the direction away from an origin, degrees, shape (n,)."""
    along, beside = arcs.frames[:, 1] @ origin, arcs.frames[:, 2] @ origin
    return np.degrees(np.arctan2(-beside, -along))


def _node_angles() -> FloatArray:
    part = np.linspace(0.0, 2.0, N_NODES)
    angle = np.arctan2(np.minimum(part, 2.0 - part), 1.0 - part)
    return np.degrees(angle)


def _table(scatter_deg: float, error_deg: float, wrong: float) -> FloatArray:
    """Return the ratios of one class, shape (n_nodes, n_laws)."""
    waves = np.arange(_N_CIRCLE // 2 + 1)
    blur = np.exp(-0.5 * (waves * np.radians(error_deg)) ** 2)
    circle = np.arange(_N_CIRCLE) * (360.0 / _N_CIRCLE)
    angle = _node_angles()
    columns = []
    for number, half in enumerate(np.radians(law_widths(scatter_deg))):
        if number < len(_WIDTHS):
            # Cauchy: half of the law lies within arctan(tilt / across), and the mean
            # cosine of its n-th wave is tan(45 deg - half / 2)**n.
            shape = np.tan(0.25 * np.pi - 0.5 * half) ** waves
        else:
            shape = np.exp(-0.5 * (waves * half / _QUARTILE) ** 2)
        density = fft.irfft(shape * blur, n=_N_CIRCLE) * _N_CIRCLE
        right = np.interp(angle, circle, density)
        back = np.interp(180.0 - angle, circle, density)
        columns.append((1.0 - wrong) * right + wrong * back)
    return np.maximum(np.stack(columns, axis=1), 1e-9)
