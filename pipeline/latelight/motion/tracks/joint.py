"""One fit of place, shape, course and dust at all epochs.

Gauss-Newton steps with Levenberg's damping in the numbers of the ridge; the dust is
linear and solved for at every step (variable projection: Golub & Pereyra 1973,
doi:10.1137/0710036, in Kaufman's form, from memory).  The covariance is the inverse
of the curvature, dust integrated out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.tracks.path import PathLaw
from latelight.motion.tracks.ridge import Dust, Ridge, Templates
from latelight.motion.tracks.strips import StripSums
from latelight.records import FloatArray

__all__ = ["JointFit", "RidgePrior", "fit_jointly", "turned_best"]

_MOST_STEPS = 12
_ENOUGH = 1e-4
_FAN_PER_PX = 2e-3
_MOST_TURN_SIGMAS = 1.7
_SIZE_ERR = 0.8
_SKEW, _SKEW_ERR = 0.8, 0.5


@dataclass(frozen=True, slots=True)
class RidgePrior:
    """What is known of a ridge beforehand: centre and inverse variance.

    Attributes
    ----------
    law : PathLaw
        How the places hang together.
    shape : float64 array, shape (2,)
        ln of the size in pixels, and skew.
    turn_err : float64 array, shape (3,)
        1 sigma of slope, bend and fan, of zero mean.
    """

    law: PathLaw
    shape: FloatArray
    turn_err: FloatArray

    @classmethod
    def usual(
        cls, law: PathLaw, *, log_size: float, half_length: float, max_slope: float
    ) -> RidgePrior:
        """Return the usual prior of a ridge.

        Parameters
        ----------
        law : PathLaw
            How the places hang together.
        log_size : float
            Rough ln of the size, pixels.
        half_length : float
            Half the length of the trace, pixels: larger bends would carry the ridge
            off it.
        max_slope : float
            Largest correction of the direction, as a slope.
        """
        bend = 6.0 / max(half_length, 10.0) ** 2
        turn_err = np.array([max_slope / _MOST_TURN_SIGMAS, bend, _FAN_PER_PX])
        return cls(law, np.array([log_size, _SKEW]), turn_err)

    def add_to(
        self, ridge: Ridge, gradient: FloatArray, curvature: FloatArray
    ) -> float:
        """Add the prior's gradient and curvature; return minus its ln."""
        n = ridge.places.size
        precision = np.zeros((n + 5, n + 5))
        precision[:n, :n] = self.law.precision()
        shape_err = np.array([_SIZE_ERR, _SKEW_ERR])
        rest = np.concatenate([shape_err, self.turn_err]) ** -2.0
        precision[np.arange(n, n + 5), np.arange(n, n + 5)] = rest
        shape = np.array([ridge.lobe.log_size, ridge.lobe.skew])
        off = np.concatenate([ridge.places, shape - self.shape, ridge.turn])
        pull = precision @ off
        gradient += pull
        curvature += precision
        return 0.5 * float(off @ pull)


@dataclass(frozen=True, slots=True)
class JointFit:
    """A ridge fitted at all epochs.

    Attributes
    ----------
    ridge : Ridge
        Places, shape, course.
    covariance : float64 array, shape (n + 5, n + 5)
        Of its numbers.
    dust : Dust
        Knots.
    density : float64 array, shape (b, k)
        Brightness of the dust at the knots, counts.
    model : float64 array, shape (b, m, n)
        Brightness of the ridge, counts.
    gain : float
        Chi-square that the model takes out of the data.
    freedom : float
        How many free numbers the dust amounts to.
    """

    ridge: Ridge
    covariance: FloatArray
    dust: Dust
    density: FloatArray
    model: FloatArray
    gain: float
    freedom: float


@dataclass(frozen=True, slots=True)
class _Lighting:
    """The dust that fits a ridge best."""

    cost: float
    density: FloatArray
    templates: Templates
    knots: FloatArray
    weighted: FloatArray
    curvature: FloatArray
    norm: FloatArray


def fit_jointly(
    sums: StripSums, ridge: Ridge, *, dust: Dust, prior: RidgePrior
) -> JointFit:
    """Fit a ridge to all epochs together.

    Parameters
    ----------
    sums : StripSums
        The epochs along the arc.
    ridge : Ridge
        Where to begin.
    dust : Dust
        Knots and prior of the dust.
    prior : RidgePrior
        What is known of the ridge.
    """
    scale = _mean_height(sums, ridge, dust)
    n = ridge.places.size
    limit = np.concatenate(
        [np.full(n, 0.5 * ridge.lobe.full_width), [0.4, 0.4], prior.turn_err]
    )
    lighting, cost, gradient, curvature = _expand(sums, ridge, dust, prior, scale)
    damping = 1e-3
    for _ in range(_MOST_STEPS):
        damped = curvature + damping * np.diag(np.diag(curvature))
        step = np.clip(np.linalg.solve(damped, -gradient), -limit, limit)
        trial = ridge.moved(step)
        expanded = _expand(sums, trial, dust, prior, scale)
        gain = cost - expanded[1]
        if gain >= -1e-9:
            ridge, (lighting, cost, gradient, curvature) = trial, expanded
            damping = max(0.1 * damping, 1e-7)
            if gain < _ENOUGH:
                break
        else:
            damping *= 10.0
            if damping > 1e4:
                break
    return JointFit(
        ridge=ridge,
        covariance=np.asarray(np.linalg.inv(curvature), dtype=float),
        dust=dust,
        density=lighting.density,
        model=lighting.templates.brightness(lighting.density),
        gain=_gain(sums, lighting),
        freedom=float(
            np.trace(
                np.linalg.solve(lighting.curvature, lighting.norm), axis1=1, axis2=2
            ).sum()
        ),
    )


def turned_best(
    sums: StripSums,
    ridge: Ridge,
    *,
    dust: Dust,
    prior: RidgePrior,
    slopes: FloatArray,
) -> Ridge:
    """Return a ridge with the one of several slopes that fits best."""
    scale = _mean_height(sums, ridge, dust)
    costs = []
    for slope in slopes:
        turn = np.array([slope, 0.0, 0.0])
        trial = Ridge(ridge.places, ridge.lobe, turn)
        cost = _light(sums, trial, dust, scale).cost
        costs.append(cost + 0.5 * float(slope / prior.turn_err[0]) ** 2)
    slope = slopes[int(np.argmin(costs))]
    return Ridge(ridge.places, ridge.lobe, np.array([slope, 0.0, 0.0]))


def _mean_height(sums: StripSums, ridge: Ridge, dust: Dust) -> float:
    """Return the height of a ridge on even dust, counts: a scale, positive."""
    even = Templates(sums, ridge, dust).brightness(
        np.ones((sums.along.size, dust.knots.size))
    )
    response = float((even * sums.signal).sum())
    norm = float(np.einsum("bmi,bmij,bmj->", even, sums.omega, even))
    norm = max(norm, 1e-30)
    return max(response / norm, 1.0 / np.sqrt(norm))


def _light(sums: StripSums, ridge: Ridge, dust: Dust, scale: float) -> _Lighting:
    """Solve for the dust of a ridge."""
    templates = Templates(sums, ridge, dust)
    knots = templates.of_knots()
    weighted = np.matmul(sums.omega, knots)
    b, m, n, k = knots.shape
    flat = knots.reshape(b, m * n, k)
    norm = flat.transpose(0, 2, 1) @ weighted.reshape(b, m * n, k)
    right = np.einsum("bsk,bs->bk", flat, sums.signal.reshape(b, m * n))
    curvature = norm + dust.precision / scale**2
    density = np.linalg.solve(curvature, right[..., None])[..., 0]
    cost = -0.5 * float((right * density).sum())
    return _Lighting(cost, density, templates, knots, weighted, curvature, norm)


def _expand(
    sums: StripSums, ridge: Ridge, dust: Dust, prior: RidgePrior, scale: float
) -> tuple[_Lighting, float, FloatArray, FloatArray]:
    """Return the dust, and cost (minus ln p), gradient, curvature of the ridge."""
    lighting = _light(sums, ridge, dust, scale)
    steep = lighting.templates.derivatives(lighting.density)
    b, m, n, q = steep.shape
    model = np.einsum("bmnk,bk->bmn", lighting.knots, lighting.density)
    residue = sums.signal - np.einsum("bmij,bmj->bmi", sums.omega, model)
    flat = steep.reshape(b, m * n, q)
    gradient = -np.einsum("bsq,bs->q", flat, residue.reshape(b, m * n))
    weighted = np.matmul(sums.omega, steep).reshape(b, m * n, q)
    curvature = np.einsum("bqs,bsr->qr", flat.transpose(0, 2, 1), weighted)
    mixed = lighting.knots.reshape(b, m * n, -1).transpose(0, 2, 1) @ weighted
    solved = np.linalg.solve(lighting.curvature, mixed)
    curvature -= np.einsum("bkq,bkr->qr", mixed, solved)
    cost = lighting.cost + prior.add_to(ridge, gradient, curvature)
    return lighting, cost, gradient, curvature


def _gain(sums: StripSums, lighting: _Lighting) -> float:
    model = np.einsum("bmnk,bk->bmn", lighting.knots, lighting.density)
    square = np.einsum("bmi,bmij,bmj->", model, sums.omega, model)
    return float(2.0 * (model * sums.signal).sum() - square)
