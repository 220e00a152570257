"""Measure how one arc moved between the two epochs of a difference."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from latelight.motion.bend import (
    Bend,
    along_trace,
    bent_trace,
    handedness,
    measure_bend,
)
from latelight.motion.fan import find_fan
from latelight.motion.fitting import (
    LobeFit,
    PairGuess,
    fit_one_lobe,
    fit_pair,
    search_lobes,
)
from latelight.motion.lobes import LobePrior
from latelight.motion.settings import MotionSettings
from latelight.motion.strip import (
    Profile,
    Strip,
    cut_strip,
    mean_profile,
    noise_correlation,
)
from latelight.records import Arc, ArcTrace, Difference, FloatArray, Motion
from latelight.sky import wrap_180

__all__ = ["measure_motion"]

# However clear a profile is, dust may mimic it: odds are not raised beyond this.
_MAX_ODDS_TWO_LOBES = 4.0
_MAX_ODDS_ONE_LOBE = 1.0
# log10 of the odds that the pair an arc was found with has the right sense.  It was
# right for 321 of 322 simulated arcs; less is claimed, for real skies are harsher.
_HINT_ODDS = 1.0
# Where the light is cut off along the trace, in half-lengths of a uniform arc.
_TRIM = 1.3


def measure_motion(
    difference: Difference,
    arc: Arc,
    *,
    later: Literal["science", "template"],
    settings: MotionSettings,
) -> Motion:
    """Measure the motion of one arc, from the earlier to the later epoch.

    Parameters
    ----------
    difference : Difference
        Science minus template.
    arc : Arc
        A ridge found in it; its trace follows the brighter lobe.
    later : {"science", "template"}
        Which frame was taken later.
    settings : MotionSettings
        Limits and priors.

    Returns
    -------
    Motion
        Direction along the normal, shift, width and brightness.

    Raises
    ------
    ValueError
        If ``later`` is neither word, too few pixels near the arc can be used, or
        they hold no ridge.

    Notes
    -----
    The difference, straightened along the trace, is averaged along the arc.  A
    moving echo leaves a positive lobe where it is and a negative one where it was,
    of one shape (sharp front, slow tail).  Shift and width are the median and mean
    of their probability with everything else integrated out, errors half of
    the 16-84 % interval.  Direction: see :func:`latelight.motion.bend.measure_bend`.
    Patchy dust pulls ridges aside and rolling sheets bend them: ``texture``,
    ``relief_px`` and ``texture_length_px`` of the settings add that to the errors.

    An outburst with a flat maximum that outlasts the motion leaves one lobe at
    the front and one at the back of its echo: a wide echo that moved little and a
    narrow one that moved far look the same, and the latter is taken.
    """
    if later not in ("science", "template"):
        msg = f"later must be 'science' or 'template', got {later!r}"
        raise ValueError(msg)
    sign = 1 if later == "science" else -1
    ridge = _follow(difference, arc, sign=sign, settings=settings)
    fit, profile, turn, odds = _fit_lobes(ridge, arc.sign * sign, settings)
    limit = _MAX_ODDS_TWO_LOBES if np.isfinite(fit.shift) else _MAX_ODDS_ONE_LOBE
    return _motion(
        fit,
        profile,
        trace=ridge.trace,
        turn=turn,
        later=later,
        odds=min(odds, limit),
        settings=settings,
    )


@dataclass(frozen=True, slots=True)
class _Ridge:
    """A traced ridge made straight, with what is needed to average it.

    ``hint`` is the way along the normal from the early to the late lobe, pixels, as
    found with the arc; NaN when only one was.
    """

    difference: Difference
    trace: ArcTrace
    strip: Strip
    correlation: FloatArray
    normal_angle: float
    width: float
    sign: int
    hint: float

    def profile(self, strip: Strip) -> Profile:
        """Return the mean of a strip along the arc."""
        return mean_profile(
            strip,
            self.correlation,
            normal_angle=self.normal_angle,
            width_px=self.width,
        )

    def prior(self, settings: MotionSettings) -> LobePrior:
        """Return what is known of its lobes beforehand."""
        return LobePrior(self.difference.fwhm_px, settings.ratio_scatter)

    def along(self, trace: ArcTrace, *, reach: float) -> _Ridge:
        """Return the ridge cut anew along another trace."""
        strip = cut_strip(self.difference, trace, reach=reach, sign=self.sign)
        return replace(self, trace=trace, strip=strip)


def _follow(
    difference: Difference, arc: Arc, *, sign: int, settings: MotionSettings
) -> _Ridge:
    """Turn, bend and trim a trace until it follows the traced lobe."""
    width = float(np.hypot(arc.width_px, difference.fwhm_px))
    reach = settings.max_shift_px + 3.0 * width
    margin = _margin(width)
    ridge = _Ridge(
        difference=difference,
        trace=arc.trace,
        strip=cut_strip(difference, arc.trace, reach=margin, sign=sign),
        correlation=noise_correlation(difference, arc.x, arc.y),
        normal_angle=arc.normal_angle,
        width=width,
        sign=sign,
        hint=_hint(arc, sign),
    )
    profile = ridge.profile(ridge.strip)
    alone = fit_one_lobe(
        profile,
        ridge.prior(settings),
        sign=arc.sign * sign,
        width=width,
        sense=1,
        tails=(0.0,),  # which way the tail points is not known yet
    )
    bend = _bend(ridge.strip, ridge.trace, profile, alone, settings)
    trace = _trimmed(bent_trace(arc.trace, bend), bend)
    return ridge.along(trace, reach=reach)


def _hint(arc: Arc, sign: int) -> float:
    """Return the rough motion along the trace's normals, pixels."""
    normal = arc.trace.normal_angle[arc.trace.x.size // 2]
    same = abs(float(wrap_180(normal - arc.normal_angle))) < 90.0
    return arc.shift_px * sign * (1 if same else -1)


def _trimmed(trace: ArcTrace, bend: Bend) -> ArcTrace:
    """Return the part of a trace where the light is, centred on it."""
    along = along_trace(trace)
    keep = np.abs(along - bend.centre) <= 0.5 * _TRIM * max(bend.length, 16.0)
    if keep.sum() < 3:
        return trace
    return ArcTrace(trace.x[keep], trace.y[keep], trace.normal_angle[keep])


def _fit_lobes(
    ridge: _Ridge, anchor: int, settings: MotionSettings
) -> tuple[LobeFit, Profile, Bend, float]:
    """Fit one or two lobes.

    Returns
    -------
    fit : LobeFit
        The lobes.
    profile : Profile
        What was fitted.
    turn : Bend
        What is left of the turn, with the mean slope of both lobes.
    odds : float
        log10 of the odds of the sense.
    """
    prior = ridge.prior(settings)
    strip, fan = ridge.strip, None
    guess, odds, two = _search(ridge, strip, anchor, settings)
    if not two:
        fan = find_fan(
            strip,
            along_trace(ridge.trace),
            sign=-anchor,
            width=ridge.width,
            max_shift=settings.max_shift_px,
            excess=ridge.profile(strip).excess,
        )
    if fan is not None:
        strip = cut_strip(
            ridge.difference,
            ridge.trace,
            reach=strip.offsets[-1],
            sign=ridge.sign,
            stretch=fan.stretch(along_trace(ridge.trace)),
        )
        guess, odds, two = _search(ridge, strip, anchor, settings)
    if two:
        near = _window(strip, guess.late, guess.early, guess.width)
        profile = ridge.profile(near)
        fit = fit_pair(profile, prior, guess)
    else:
        near = _window(ridge.strip, 0.0, 0.0, ridge.width)
        profile = ridge.profile(near)
        fit = fit_one_lobe(
            profile, prior, sign=anchor, width=ridge.width, sense=guess.sense
        )
    turn = _bend(near, ridge.trace, profile, fit, settings)
    if two and fan is not None:
        other = fit.early if anchor > 0 else fit.late
        # The motion is along the mean of both lobes' normals.
        turn = replace(turn, slope=turn.slope + 0.5 * fan.slope * other / fan.place)
    return fit, profile, turn, odds


def _search(
    ridge: _Ridge, strip: Strip, anchor: int, settings: MotionSettings
) -> tuple[PairGuess, float, bool]:
    """Return the likelier sense's best pair, its log10 odds, and if it counts."""
    farthest = settings.max_shift_px
    if np.isfinite(ridge.hint):
        # Lobes of other echoes lie beyond the pair the arc was found with.
        farthest = min(farthest, 1.5 * (abs(ridge.hint) + ridge.width))
    guesses = search_lobes(
        ridge.profile(strip),
        ridge.prior(settings),
        anchor_sign=anchor,
        width=ridge.width,
        max_shift=farthest,
    )
    log_odds = guesses[0].log_evidence - guesses[1].log_evidence
    if np.isfinite(ridge.hint):
        log_odds += np.copysign(_HINT_ODDS * np.log(10.0), ridge.hint)
    best = guesses[0] if log_odds >= 0.0 else guesses[1]
    odds = abs(log_odds) / np.log(10.0)
    seen = 2.0 * (best.gain - best.alone) > settings.lobe_threshold**2
    return best, odds, seen


def _bend(
    strip: Strip,
    trace: ArcTrace,
    profile: Profile,
    fit: LobeFit,
    settings: MotionSettings,
) -> Bend:
    """Return the correction of a trace that a fitted profile asks for."""
    model = np.interp(strip.offsets, profile.offsets, fit.model, left=0.0, right=0.0)
    return measure_bend(
        strip,
        along_trace(trace),
        model,
        excess=profile.excess,
        max_slope=float(np.tan(np.radians(settings.max_turn_deg))),
    )


def _margin(width: float) -> float:
    """Return how far beyond a lobe of a full width its profile is fitted, pixels."""
    return 3.0 * width + 6.0


def _window(strip: Strip, one: float, other: float, width: float) -> Strip:
    """Return the rows around two lobes."""
    rows = strip.offsets >= min(one, other) - _margin(width)
    rows &= strip.offsets <= max(one, other) + _margin(width)
    return Strip(strip.offsets[rows], strip.values[rows], strip.weight[rows])


def _motion(
    fit: LobeFit,
    profile: Profile,
    *,
    trace: ArcTrace,
    turn: Bend,
    later: str,
    odds: float,
    settings: MotionSettings,
) -> Motion:
    """Put the numbers into the record."""
    length = max(turn.length, 8.0)
    patches = max(length / settings.texture_length_px, 1.0)
    pull = settings.texture * fit.width / np.sqrt(patches)
    bent = np.hypot(pull, settings.relief_px / np.sqrt(patches))
    # A line through evenly spread points, each off by so much.
    turn_err = np.hypot(turn.slope_err, np.sqrt(12.0) * bent / length)
    two = np.isfinite(fit.shift)
    # Lobes on the same dust are pulled the same way.
    apart = 1.0 - np.exp(-0.5 * (fit.shift / fit.full_width) ** 2)
    late = fit.late, fit.height_late, fit.height_late_err
    early = fit.early, fit.height_early, fit.height_early_err
    at_science, at_template = (late, early) if later == "science" else (early, late)
    place, height, height_err = (
        at_science if np.isfinite(at_science[0]) else at_template
    )
    middle = trace.x.size // 2
    normal = np.radians(trace.normal_angle[middle])
    turned = np.degrees(normal - handedness(trace) * np.arctan(turn.slope))
    residual = profile.values - fit.model
    free = max(residual.size - (8 if two else 6), 1)
    return Motion(
        direction_angle=float((turned if fit.sense > 0 else turned + 180.0) % 360.0),
        direction_angle_err=float(np.degrees(np.arctan(turn_err))),
        shift_px=fit.shift,
        shift_err_px=float(np.hypot(fit.shift_err, np.sqrt(2.0 * apart) * pull)),
        x=float(trace.x[middle] + place * np.cos(normal)),
        y=float(trace.y[middle] + place * np.sin(normal)),
        width_px=fit.width,
        width_err_px=fit.width_err,
        surface_brightness_counts=height,
        surface_brightness_err_counts=height_err,
        sense_odds=float(odds),
        chi2=float(residual @ profile.precision @ residual / free),
        lobes=2 if two else 1,
    )
