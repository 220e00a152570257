"""Follow one ridge through all epochs, from a first guess."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latelight.motion.bend import Bend, bent_trace
from latelight.motion.settings import MotionSettings
from latelight.motion.tracks.joint import (
    JointFit,
    RidgePrior,
    fit_jointly,
    turned_best,
)
from latelight.motion.tracks.light import Light, measure_light
from latelight.motion.tracks.lines import (
    along_motion,
    flipped,
    lengthened,
    stretch_of,
)
from latelight.motion.tracks.noise import SeriesNoise
from latelight.motion.tracks.path import PathLaw
from latelight.motion.tracks.ridge import Dust, Ridge
from latelight.motion.tracks.settings import TrackSettings
from latelight.motion.tracks.strips import StripSums, cut_strips
from latelight.motion.tracks.trial import PathGuess, search_paths
from latelight.records import ArcTrace, EpochSeries, FloatArray, TrackSeed
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["DAYS_PER_YEAR", "Followed", "follow_seed"]

DAYS_PER_YEAR = 365.25

_ROUNDS = 3
# The trace is cut off so many lengths of a uniform arc from the middle of the light,
# and carried on by so many before that.
_TRIM, _CARRIED_ON = 0.65, 0.25
_SHORTEST_PX = 16.0
# Below this significance a ridge is not worth another round.
_HOPELESS = 3.0
# Trial speeds go up to so many times that of the seed.
_FASTER = 2.0
_TRIAL_TURNS = np.linspace(-1.0, 1.0, 11)
# Spread of a sample interpolated between pixels, at random phases.
_SAMPLING_VARIANCE = 1.0 / 6.0
_MOST_ODDS = 6.0


@dataclass(frozen=True, slots=True)
class Followed:
    """A ridge fitted at all epochs.

    Attributes
    ----------
    trace : ArcTrace
        Centre line at offset 0; normals along the motion.
    fan : float
        How the strips' offsets are stretched along it, 1/pixel.
    times : float64 array, shape (n,)
        Julian years since the seed's epoch.
    sums : StripSums
        The epochs along the arc.
    fit : JointFit
        The fitted ridge.
    law : PathLaw
        How its places hang together.
    light : Light
        How bright it is, and where.
    sense_odds : float
        log10 of the odds that the sense is right.
    """

    trace: ArcTrace
    fan: float
    times: FloatArray
    sums: StripSums
    fit: JointFit
    law: PathLaw
    light: Light
    sense_odds: float


def follow_seed(
    series: EpochSeries,
    seed: TrackSeed,
    *,
    noise: SeriesNoise,
    settings: TrackSettings,
    motion: MotionSettings,
) -> Followed:
    """Follow the ridge of a seed through all epochs.

    Parameters
    ----------
    series : EpochSeries
        The epochs.
    seed : TrackSeed
        First guess.
    noise : SeriesNoise
        Correlation of the noise.
    settings : TrackSettings
        Limits and priors of tracks.
    motion : MotionSettings
        What is known of echoes.

    Raises
    ------
    ValueError
        If no pixel near the seed can be used.
    """
    follower = _Follower(series, seed, noise, settings, motion)
    trace, guess, odds = follower.start()
    return follower.refine(trace, guess, odds)


class _Follower:
    """The steps, with what they share."""

    def __init__(
        self,
        series: EpochSeries,
        seed: TrackSeed,
        noise: SeriesNoise,
        settings: TrackSettings,
        motion: MotionSettings,
    ) -> None:
        self._series, self._seed = series, seed
        self._settings, self._motion = settings, motion
        self._times = (series.mjd - seed.mjd) / DAYS_PER_YEAR
        self._psf = np.sqrt((series.fwhm_px / FWHM_PER_SIGMA) ** 2 + _SAMPLING_VARIANCE)
        seeing = FWHM_PER_SIGMA * float(np.median(self._psf))
        self._width = max(seed.width_px, 1.02 * seeing)
        self._excess = noise.excess(seed.direction_angle, self._width)
        self._max_slope = float(np.tan(np.radians(motion.max_turn_deg)))

    def start(self) -> tuple[ArcTrace, PathGuess, float]:
        """Search for the path; return it, the trace and the odds of its sense."""
        times, seed = self._times, self._seed
        span = float(np.ptp(times))
        highest = self._settings.largest_shift_px / span
        if np.isfinite(seed.speed_px_yr):
            least = 2.0 * self._width / span
            highest = min(highest, _FASTER * max(seed.speed_px_yr, least))
        reach = highest * float(np.abs(times).max()) + self._margin()
        trace = along_motion(seed)
        sums = self._cut(trace, -reach, reach, 0.0).whole()
        guesses = [
            search_paths(
                view,
                times=times,
                psf=self._psf,
                width=self._width,
                highest=highest,
                scatter=self._motion.ratio_scatter,
            )
            for view in (sums, sums.turned_round())
        ]
        log_odds = guesses[0].log_evidence - guesses[1].log_evidence
        odds = min(abs(log_odds) / np.log(10.0), _MOST_ODDS)
        if log_odds >= 0.0:
            return trace, guesses[0], odds
        return flipped(trace), guesses[1], odds

    def refine(self, trace: ArcTrace, guess: PathGuess, odds: float) -> Followed:
        """Fit, turn and bend the trace, and fit again."""
        ridge = Ridge(guess.start + guess.speed * self._times, guess.lobe, np.zeros(3))
        speed, fan, length = guess.speed, 0.0, float(trace.x.size)
        for number in range(_ROUNDS):
            low, high = float(ridge.places.min()), float(ridge.places.max())
            margin = self._margin()
            sums = self._cut(trace, low - margin, high + margin, fan)
            dust = Dust.between(
                low - ridge.lobe.full_width,
                high + ridge.lobe.full_width,
                contrast=self._settings.dust_contrast,
                length=self._settings.dust_length_px,
            )
            law = self._law(speed, ridge, length)
            prior = RidgePrior.usual(
                law,
                log_size=guess.lobe.log_size,
                half_length=0.5 * trace.x.size,
                max_slope=self._max_slope,
            )
            if number == 0:
                slopes = self._max_slope * _TRIAL_TURNS
                ridge = turned_best(sums, ridge, dust=dust, prior=prior, slopes=slopes)
            fit = fit_jointly(sums, ridge, dust=dust, prior=prior)
            light = measure_light(sums, fit)
            ridge = fit.ridge
            speed = float(np.polyfit(self._times, ridge.places, 1)[0])
            length = max(light.length, 8.0)
            if fit.gain - fit.freedom < _HOPELESS**2:
                break
            if number + 1 < _ROUNDS:
                fan_at_trace = ridge.turn[2] * float(ridge.places.mean())
                trace = _corrected(trace, ridge.turn, fan_at_trace, light)
                fan += float(ridge.turn[2])
                ridge = Ridge(ridge.places, ridge.lobe, np.zeros(3))
        return Followed(
            trace=trace,
            fan=fan,
            times=self._times,
            sums=sums,
            fit=fit,
            law=law,
            light=light,
            sense_odds=float(odds),
        )

    def _margin(self) -> float:
        return 2.5 * self._width + 6.0

    def _cut(
        self, trace: ArcTrace, lowest: float, highest: float, fan: float
    ) -> StripSums:
        sums = cut_strips(
            self._series,
            trace,
            lowest=lowest,
            highest=highest,
            excess=self._excess,
            fan=fan,
        )
        if not (sums.weight > 0.0).any():
            msg = "the seed must lie on usable pixels of the series, got none near it"
            raise ValueError(msg)
        return sums

    def _law(self, speed: float, ridge: Ridge, length: float) -> PathLaw:
        patches = max(length / self._motion.texture_length_px, 1.0)
        width = ridge.lobe.full_width
        return PathLaw(
            times=self._times,
            speed=speed,
            pull=self._settings.pull * width / np.sqrt(patches),
            width=width,
            roll=self._settings.roll_px,
            roll_length=self._settings.roll_length_px,
        )


def _corrected(
    trace: ArcTrace, turn: FloatArray, fan_at_trace: float, light: Light
) -> ArcTrace:
    """Return the trace turned and bent, where there is light, and a little more."""
    slope, bend = float(turn[0]) - fan_at_trace, float(turn[1])
    bent = bent_trace(trace, Bend(0.0, slope, 0.0, bend, 0.0, 0.0))
    longer = lengthened(bent, _CARRIED_ON * light.length)
    return stretch_of(longer, light.centre, _TRIM * max(light.length, _SHORTEST_PX))
