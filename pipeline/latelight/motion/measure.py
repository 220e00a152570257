"""Measure how one arc moved between the two epochs of a difference."""

from __future__ import annotations

from typing import Literal

import numpy as np

from latelight.motion.bend import Bend, along_trace, bent_trace, measure_bend
from latelight.motion.fitting import (
    LobeFit,
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

__all__ = ["measure_motion"]

# However clear a profile is, dust may mimic it: odds are not raised beyond this.
_MAX_ODDS_TWO_LOBES = 4.0
_MAX_ODDS_ONE_LOBE = 1.0
_LOG_10 = np.log(10.0)


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
        If ``later`` is neither word, or no pixel near the arc can be used.

    Notes
    -----
    The difference, straightened along the trace, is averaged along the arc.  A
    moving echo leaves a positive lobe where it is and a negative one where it was,
    of one shape (sharp front, slow tail).  Shift and width are the median and mean
    of their probability with everything else integrated out, errors half of
    the 16-84 % interval.  Direction: see :func:`latelight.motion.bend.measure_bend`.
    Patchy dust pulls ridges aside; ``settings.texture`` of the width is added to
    the errors for it.
    """
    if later not in ("science", "template"):
        msg = f"later must be 'science' or 'template', got {later!r}"
        raise ValueError(msg)
    sign = 1 if later == "science" else -1
    anchor = arc.sign * sign
    prior = LobePrior(difference.fwhm_px, settings.ratio_scatter)
    correlation = noise_correlation(difference, arc.x, arc.y)
    width = float(np.hypot(arc.width_px, difference.fwhm_px))

    def average(strip: Strip) -> Profile:
        return mean_profile(
            strip, correlation, normal_angle=arc.normal_angle, width_px=width
        )

    reach = settings.max_shift_px + 3.0 * width
    strip = cut_strip(difference, arc.trace, reach=reach, sign=sign)
    near = _window(strip, 0.0, 0.0, width)
    profile = average(near)
    alone = fit_one_lobe(profile, prior, sign=anchor, width=width, sense=1)
    bend = _bend(near, arc.trace, profile, alone, settings)
    trace = bent_trace(arc.trace, bend)
    strip = cut_strip(difference, trace, reach=reach, sign=sign)
    profile = average(strip)
    guesses = search_lobes(
        profile,
        prior,
        anchor_sign=anchor,
        width=width,
        max_shift=settings.max_shift_px,
    )
    guess = max(guesses, key=lambda g: g.log_evidence)
    odds = abs(guesses[0].log_evidence - guesses[1].log_evidence) / _LOG_10
    if 2.0 * (guess.gain - guess.alone) > settings.lobe_threshold**2:
        near = _window(strip, guess.late, guess.early, guess.width)
        profile = average(near)
        fit = fit_pair(profile, prior, guess)
        limit = _MAX_ODDS_TWO_LOBES
    else:
        near = _window(strip, 0.0, 0.0, width)
        profile = average(near)
        fit = fit_one_lobe(profile, prior, sign=anchor, width=width, sense=guess.sense)
        limit = _MAX_ODDS_ONE_LOBE
    final = _bend(near, trace, profile, fit, settings)
    return _motion(
        fit,
        profile,
        trace=bent_trace(trace, Bend(0.0, final.slope, final.slope_err, 0.0)),
        slope_err=final.slope_err,
        later=later,
        odds=min(odds, limit),
        settings=settings,
    )


def _bend(
    strip: Strip,
    trace: ArcTrace,
    profile: Profile,
    fit: LobeFit,
    settings: MotionSettings,
) -> Bend:
    """Return the correction of a trace that a fitted profile asks for."""
    return measure_bend(
        strip,
        along_trace(trace),
        _on_strip(strip, profile, fit.model),
        excess=profile.excess,
        max_slope=float(np.tan(np.radians(settings.max_turn_deg))),
    )


def _on_strip(strip: Strip, profile: Profile, model: FloatArray) -> FloatArray:
    return np.interp(strip.offsets, profile.offsets, model, left=0.0, right=0.0)


def _window(strip: Strip, one: float, other: float, width: float) -> Strip:
    """Return the rows around two lobes."""
    margin = 3.0 * width + 6.0
    rows = strip.offsets >= min(one, other) - margin
    rows &= strip.offsets <= max(one, other) + margin
    return Strip(strip.offsets[rows], strip.values[rows], strip.weight[rows])


def _motion(
    fit: LobeFit,
    profile: Profile,
    *,
    trace: ArcTrace,
    slope_err: float,
    later: str,
    odds: float,
    settings: MotionSettings,
) -> Motion:
    along = along_trace(trace)
    length = max(float(along[-1] - along[0]), 1.0)
    patches = max(length / settings.texture_length_px, 1.0)
    pull = settings.texture * fit.width / np.sqrt(patches)
    apart = np.sqrt(1.0 - np.exp(-0.5 * (fit.shift / fit.full_width) ** 2))
    turn_err = np.hypot(slope_err, np.sqrt(12.0) * pull / length)
    two = np.isfinite(fit.shift)
    at_science = fit.late if later == "science" else fit.early
    height = (
        (fit.height_late, fit.height_late_err)
        if later == "science"
        else (fit.height_early, fit.height_early_err)
    )
    if not np.isfinite(at_science):
        at_science = fit.early if later == "science" else fit.late
        height = (
            (fit.height_early, fit.height_early_err)
            if later == "science"
            else (fit.height_late, fit.height_late_err)
        )
    middle = trace.x.size // 2
    normal = float(trace.normal_angle[middle])
    angle = np.radians(normal)
    residual = profile.values - fit.model
    free = max(residual.size - (8 if two else 6), 1)
    return Motion(
        direction_angle=(normal if fit.sense > 0 else normal + 180.0) % 360.0,
        direction_angle_err=float(np.degrees(np.arctan(turn_err))),
        shift_px=fit.shift,
        shift_err_px=float(np.hypot(fit.shift_err, np.sqrt(2.0) * pull * apart)),
        x=float(trace.x[middle] + at_science * np.cos(angle)),
        y=float(trace.y[middle] + at_science * np.sin(angle)),
        width_px=fit.width,
        width_err_px=fit.width_err,
        surface_brightness_counts=height[0],
        surface_brightness_err_counts=height[1],
        sense_odds=float(odds),
        chi2=float(residual @ profile.precision @ residual / free),
        lobes=2 if two else 1,
    )
