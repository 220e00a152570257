"""An epoch of a field beside the stack of the other epochs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from latelight.config import NightConfig
from latelight.errors import StageError
from latelight.matching.match import match_pair
from latelight.night.calibration import Calibration
from latelight.night.common_psf import CommonField, MatchedEpoch
from latelight.night.gathering import GridEpoch
from latelight.night.pairing import StackPair, StackTemplate
from latelight.records import MatchedPair, Plane, SpatialKernel
from latelight.stacking.combine import combine, plane_weight

__all__ = ["Compared", "combine_all", "compare_member", "compare_other"]

_STAGE = "stacking"
# Fewer cannot outvote one.
_LEAST_FOR_OUTLIERS = 3


@dataclass(frozen=True, slots=True)
class Compared:
    """An epoch beside the stack of the others.

    Attributes
    ----------
    epoch : GridEpoch
        The epoch.
    pair : StackPair
        With what the stack was really made of.
    template : Plane
        The stack, with the PSF and flux scale of the field.
    matched : MatchedPair
        Both with one PSF, on the flux scale of the field.
    """

    epoch: GridEpoch
    pair: StackPair
    template: Plane
    matched: MatchedPair


def combine_all(
    members: Sequence[MatchedEpoch], field: CommonField, config: NightConfig
) -> Plane:
    """Return the stack of some epochs of a field."""
    planes = [member.epoch.plane for member in members]
    return combine(planes, sky=field.stars.sky, settings=config.stacking)


def _template(
    epoch: GridEpoch, field: CommonField, config: NightConfig
) -> tuple[StackPair, Plane]:
    """Return the stack of the epochs other than one, and the pair they make."""
    science, journal = epoch.pair.science, epoch.journal
    in_time = sorted(field.members, key=lambda m: m.epoch.pair.science.mjd)
    members = [
        member
        for member in in_time
        if abs(member.epoch.pair.science.mjd - science.mjd) >= config.pairs.min_days
    ]
    if not members:
        msg = "no other epoch could be used, see their rows; add frames"
        raise StageError(_STAGE, msg)
    with journal.stage(_STAGE):
        plane = combine_all(members, field, config)
    headers = [member.epoch.pair.science for member in members]
    names = ", ".join(header.name for header in headers)
    mjds = tuple(header.mjd for header in headers)
    weights = [plane_weight(member.epoch.plane) for member in members]
    template = StackTemplate(
        name=f"stack of {len(members)}: {names}",
        mjd=float(np.average(mjds, weights=weights)),
        mjds=mjds,
    )
    if len(members) < _LEAST_FOR_OUTLIERS:
        text = f"{template.name}: too few to tell outliers, none are left out"
        journal.say(text, stage=_STAGE)
    pixels = f"pixels and counts are those of {field.reference.name}"
    journal.add(
        notes="; ".join(note for note in (journal.row.notes, pixels) if note),
        template=template.name,
        mjd_template=template.mjd,
        fwhm_template_px=field.stars.fwhm_px,
        seeing_template=_on_the_sky(field.stars.fwhm_px, field),
    )
    return replace(epoch.pair, template=template), plane


def _on_the_sky(width_px: float, field: CommonField) -> float | None:
    """Return a width in the middle of the field, arcsec."""
    ny, nx = field.stars.sky.shape
    scale = Calibration(field.wcs, None).scale(0.5 * (nx - 1), 0.5 * (ny - 1))
    return None if scale is None else width_px * scale


def compare_member(
    member: MatchedEpoch, field: CommonField, config: NightConfig
) -> Compared:
    """Put a stacked epoch beside the stack of the others: they are matched already."""
    pair, template = _template(member.epoch, field, config)
    shape = template.pixels.shape
    own = pair.science is field.reference
    matched = MatchedPair(
        science=member.epoch.plane,
        template=template,
        model=template.pixels - field.stars.sky,
        convolved="template" if own else "science",
        kernel=SpatialKernel(np.ones((1, 1, 1)), ((0, 0),), shape),
        smoothing_px=0.0,
        scale=member.scale,
        scale_err=member.scale_err,
        fwhm_px=field.stars.fwhm_px,
        n_fit=0,
        n_held_out=0,
        held_out_chi2=member.held_out_chi2,
    )
    return Compared(member.epoch, pair, template, matched)


def compare_other(
    epoch: GridEpoch, field: CommonField, config: NightConfig
) -> Compared:
    """Match an epoch that is not stacked with the stack, on the field's flux scale."""
    pair, template = _template(epoch, field, config)
    with epoch.journal.stage("matching"):
        # The grid and the counts to be kept are the stack's, so it goes first.
        turned = match_pair(
            template,
            epoch.plane,
            science_stars=field.stars,
            template_stars=epoch.stars,
            alignment=epoch.alignment,
            settings=config.matching,
        )
    matched = replace(
        turned,
        science=turned.template,
        template=turned.science,
        model=turned.science.pixels - field.stars.sky,
        convolved="science" if turned.convolved == "template" else "template",
        scale=1.0 / turned.scale,
        scale_err=turned.scale_err / turned.scale**2,
    )
    return Compared(epoch, pair, template, matched)
