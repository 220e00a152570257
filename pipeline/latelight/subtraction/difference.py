"""The subtraction stage: the difference of a matched pair."""

from __future__ import annotations

from latelight.records import Difference, MatchedPair, StarList
from latelight.subtraction.finish import finish_difference
from latelight.subtraction.settings import SubtractionSettings

__all__ = ["subtract"]


def subtract(
    matched: MatchedPair, *, stars: StarList, settings: SubtractionSettings
) -> Difference:
    """Subtract the matched template from the matched science frame.

    Parameters
    ----------
    matched : MatchedPair
        Two frames of one PSF and flux scale.
    stars : StarList
        Stars of the science frame.
    settings : SubtractionSettings
        Table ``[subtraction]``.

    Returns
    -------
    Difference
        ``D = S - T - B`` with B a smooth background that no arc can lift; variance
        ``V = V_S + V_T + (a M)^2 + (b |grad M|)^2`` with M the stars' light and a, b
        fitted to the stars' own residuals; compact residuals listed and masked.
        ``noise_ratio`` is measured over predicted noise in blank sky, and nothing
        is rescaled by it.
    """
    science, template = matched.science, matched.template
    return finish_difference(
        science.pixels - template.pixels,
        science.variance + template.variance,
        science.mask | template.mask,
        matched.model,
        stars=stars,
        fwhm_px=matched.fwhm_px,
        least_shift_px=0.0,
        method="kernel",
        settings=settings,
    )
