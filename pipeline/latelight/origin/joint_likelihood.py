"""The likelihood ratio of an origin anywhere on the sky, given many arcs."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.origin import _kernels
from latelight.origin._kernels import Asked
from latelight.origin.joint_arcs import MovingArcs
from latelight.origin.joint_laws import DirectionLaws, turns
from latelight.records import FloatArray, IntArray
from latelight.threads import over_rows

__all__ = ["REACH_DEG", "SHARES", "OriginLikelihood", "origin_likelihood"]

SHARES = np.array([0.1, 0.25, 0.5, 0.75, 0.95])
"""Share of the arcs within reach that an origin may have lit."""

REACH_DEG = np.array([3.0, 10.0, 30.0, 90.0])
"""How far from an origin its arcs may lie; nobody sees behind himself."""

_COS_REACH = np.cos(np.radians(REACH_DEG))


@dataclass(frozen=True, slots=True)
class OriginLikelihood:
    """All that is needed to ask how likely an origin at a place is.

    Attributes
    ----------
    arcs : MovingArcs
        The arcs, n of them.
    laws : DirectionLaws
        Laws of the turn.
    base : float64 array, shape (n,)
        Likelihood ratio of each arc without the origin: 1 for random directions, more
        where another origin explains it.
    gain : float64 array, shape (n,)
        What else speaks for each arc to come from the origin: the likelihood ratio of
        its speed, 1 when nothing does.
    """

    arcs: MovingArcs
    laws: DirectionLaws
    base: FloatArray
    gain: FloatArray

    def marginal(self, points: FloatArray) -> FloatArray:
        """Return natural log likelihood ratios of origins, unknowns averaged over.

        Parameters
        ----------
        points : float64 array, shape (m, 3)
            Unit vectors.
        """
        out = np.empty(len(points))
        asked = self._asked()

        def rows(first: int, last: int) -> None:
            _kernels.marginal_ratios(points, asked, out, first, last)

        over_rows(rows, len(points))
        return out

    def detailed(self, points: FloatArray) -> FloatArray:
        """Return them by reach, share and law, shape (m, 4, 5, n_laws)."""
        out = np.empty((len(points), REACH_DEG.size, SHARES.size, self.laws.prior.size))
        asked = self._asked()

        def rows(first: int, last: int) -> None:
            _kernels.detailed_ratios(points, asked, out, first, last)

        over_rows(rows, len(points))
        return out

    def climb(
        self, points: FloatArray, steps: FloatArray, *, shrink: int
    ) -> tuple[FloatArray, FloatArray]:
        """Move points uphill until nothing better is near.

        Parameters
        ----------
        points : float64 array, shape (m, 3)
            Where to start.
        steps : float64 array, shape (m,)
            First steps, radians.
        shrink : int
            How often a step is halved.

        Returns
        -------
        points : float64 array, shape (m, 3)
        values : float64 array, shape (m,)
            As of :meth:`marginal`.
        """
        found, values = points.copy(), np.empty(len(points))
        asked = self._asked()

        def rows(first: int, last: int) -> None:
            _kernels.climb(found, steps, asked, shrink, values, first, last)

        over_rows(rows, len(points))
        return found, values

    def weights_at(self, point: FloatArray) -> FloatArray:
        """Return how probable each reach, share and law is for an origin at a point."""
        log = self.detailed(point[None])[0]
        weights = np.exp(log - log.max()) * self.laws.prior
        return weights / weights.sum()

    def arc_ratios(
        self, point: FloatArray, law_weights: FloatArray, reach_deg: float
    ) -> FloatArray:
        """Return the ratio of each arc for one origin; 0 beyond its reach."""
        ratios = self.laws.ratios(turns(self.arcs, point)) @ law_weights
        near = self.arcs.frames[:, 0] @ point >= np.cos(np.radians(reach_deg))
        return np.where(near, ratios, 0.0)

    def beside(
        self, base: FloatArray, gain: FloatArray | None = None
    ) -> OriginLikelihood:
        """Return the same for arcs that other origins explain in part."""
        return replace(
            self, base=base, gain=np.ones_like(base) if gain is None else gain
        )

    def of(self, rows: IntArray) -> OriginLikelihood:
        """Return the likelihood of some of the arcs."""
        arcs = replace(
            self.arcs,
            frames=self.arcs.frames[rows],
            pa_err_deg=self.arcs.pa_err_deg[rows],
            wrong_sense=self.arcs.wrong_sense[rows],
            weight=self.arcs.weight[rows],
            filament=self.arcs.filament[rows],
            log_speed=self.arcs.log_speed[rows],
            log_speed_err=self.arcs.log_speed_err[rows],
        )
        laws = replace(self.laws, class_of=self.laws.class_of[rows])
        return OriginLikelihood(arcs, laws, self.base[rows], self.gain[rows])

    def _asked(self) -> Asked:
        order = np.argsort(self.arcs.weight, kind="stable")
        return Asked(
            frames=np.ascontiguousarray(self.arcs.frames[order]),
            class_of=self.laws.class_of[order],
            weight=self.arcs.weight[order],
            per_base=(self.gain / self.base)[order],
            ratio=self.laws.ratio,
            prior=self.laws.prior,
            shares=SHARES,
            cos_reach=_COS_REACH,
        )


def origin_likelihood(arcs: MovingArcs, laws: DirectionLaws) -> OriginLikelihood:
    """Return the likelihood of a first origin: all arcs unexplained so far."""
    one = np.ones(len(arcs))
    return OriginLikelihood(arcs, laws, one, one)
