"""The stacked epochs of a field with one PSF, one flux scale and one sky level."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from latelight.config import NightConfig
from latelight.frames.headers import FrameHeader
from latelight.matching.layers import smooth
from latelight.matching.match import match_pair, smoothing_for
from latelight.night.gathering import FieldGrid, GridEpoch, on_each_epoch
from latelight.records import PixelArray, Plane, StarList
from latelight.subtraction.background import smooth_background
from latelight.widths import FWHM_PER_SIGMA

__all__ = ["CommonField", "MatchedEpoch", "bring_together"]

# An epoch so elongated that the reference must be smoothed by more than this, in its
# own FWHM, would spoil the stack: that is 1.4 times as broad.
_MOST_SMOOTHING = 0.4
# Light of a star, in sigma of the sky, that could lift the level of the sky.
_STAR_SIGMA = 10.0


@dataclass(frozen=True, slots=True)
class MatchedEpoch:
    """A stacked epoch.

    Attributes
    ----------
    epoch : GridEpoch
        Its ``plane`` has the PSF, flux scale and sky of the field.
    scale, scale_err : float
        Its own counts per count of the reference, and 1 sigma.
    held_out_chi2 : float
        Of the stars kept out of its kernel fit; NaN for the reference.
    """

    epoch: GridEpoch
    scale: float
    scale_err: float
    held_out_chi2: float


@dataclass(frozen=True, slots=True)
class CommonField:
    """The epochs of a field, the stacked ones alike.

    Attributes
    ----------
    reference : FrameHeader
        The frame whose pixels, flux scale and sky they have.
    wcs : astropy.wcs.WCS or None
        Of the pixels.
    zero_point : float or None
        Magnitude of one count of the reference.
    stars : StarList
        Stars of the reference; ``fwhm_px`` is that of the common PSF.
    members : tuple of MatchedEpoch
        The stacked epochs, the reference first.
    others : tuple of GridEpoch
        Epochs that are searched only, with their own PSF, flux scale and sky.
    """

    reference: FrameHeader
    wcs: Any
    zero_point: float | None
    stars: StarList
    members: tuple[MatchedEpoch, ...]
    others: tuple[GridEpoch, ...]


def bring_together(field: FieldGrid, config: NightConfig) -> CommonField:
    """Bring the stacked epochs of a field to one PSF, flux scale and sky.

    Parameters
    ----------
    field : FieldGrid
        Epochs on one grid; the reference is the broadest of those that are stacked.
        Its list of members is emptied.
    config : NightConfig
        All settings.

    Notes
    -----
    The reference is smoothed by the least that leaves nothing to sharpen, then every
    other epoch is convolved to its PSF.  One that fails closes its own journal and is
    left out; one so elongated that it would spoil the others is searched only.
    """
    reference = field.reference
    members, spoilers, sigma = _smoothing(field, config)
    width = np.hypot(reference.stars.fwhm_px, FWHM_PER_SIGMA * sigma)
    stars = replace(reference.stars, fwhm_px=float(width))
    target = replace(reference, plane=smooth(reference.plane, sigma))
    matched = on_each_epoch(
        members,
        journal=lambda epoch: epoch.journal,
        work=lambda epoch: _match(target.plane, stars, epoch, config),
    )
    return CommonField(
        reference=reference.pair.science,
        wcs=field.wcs,
        zero_point=_zero_point(reference, matched),
        stars=stars,
        members=(MatchedEpoch(target, 1.0, 0.0, np.nan), *matched),
        others=(*field.others, *spoilers),
    )


def _smoothing(
    field: FieldGrid, config: NightConfig
) -> tuple[list[GridEpoch], list[GridEpoch], float]:
    """Return the epochs to be matched, those too elongated, and the smoothing, px."""
    reference = field.reference

    def needed(epoch: GridEpoch) -> tuple[GridEpoch, float]:
        with epoch.journal.stage("matching"):
            sigma = smoothing_for(
                reference.plane,
                epoch.plane,
                science_stars=reference.stars,
                template_stars=epoch.stars,
                alignment=epoch.alignment,
                settings=config.matching,
            )
        return epoch, sigma

    found = on_each_epoch(
        field.members, journal=lambda epoch: epoch.journal, work=needed
    )
    most = _MOST_SMOOTHING * reference.stars.fwhm_px
    for epoch, sigma in found:
        if sigma > most:
            reason = f"the others would have to be smoothed by {sigma:.1f} px for it"
            epoch.journal.say(f"not stacked: {reason}", stage="matching")
    return (
        [epoch for epoch, sigma in found if sigma <= most],
        [epoch for epoch, sigma in found if sigma > most],
        max((sigma for _, sigma in found if sigma <= most), default=0.0),
    )


def _match(
    target: Plane, stars: StarList, epoch: GridEpoch, config: NightConfig
) -> MatchedEpoch:
    """Convolve an epoch to the target's PSF, and bring it to its sky."""
    with epoch.journal.stage("matching"):
        match = match_pair(
            target,
            epoch.plane,
            science_stars=stars,
            template_stars=epoch.stars,
            alignment=epoch.alignment,
            settings=config.matching,
            convolve="template",
        )
        level = _level(match.template, target, stars.sky, config)
        plane = replace(match.template, pixels=match.template.pixels - level)
    return MatchedEpoch(
        epoch=replace(epoch, plane=plane),
        scale=1.0 / match.scale,
        scale_err=match.scale_err / match.scale**2,
        held_out_chi2=match.held_out_chi2,
    )


def _level(
    plane: Plane, target: Plane, sky: PixelArray, config: NightConfig
) -> PixelArray:
    """Return the smooth difference of two skies, as the subtraction knows it."""
    good = (plane.mask | target.mask) == 0
    noise = np.float32(np.sqrt(np.median(target.variance[::7, ::7])))
    good &= np.abs(target.pixels - sky) < np.float32(_STAR_SIGMA) * noise
    return smooth_background(
        plane.pixels - target.pixels,
        good,
        mesh_px=config.subtraction.background_mesh_px,
        ridge_sigma=config.subtraction.ridge_sigma,
    )


def _zero_point(reference: GridEpoch, matched: list[MatchedEpoch]) -> float | None:
    """Return the magnitude of one count of the reference, or of another's for it."""
    if reference.zero_point is not None:
        return reference.zero_point
    for member in matched:
        if member.epoch.zero_point is not None:
            # One count of the reference is `scale` counts of the epoch.
            return member.epoch.zero_point - 2.5 * float(np.log10(member.scale))
    return None
