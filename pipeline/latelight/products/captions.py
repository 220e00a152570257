"""The words of pictures: the numbers of a candidate or track, units and errors."""

from __future__ import annotations

from datetime import date, timedelta

from latelight.products.rows import CandidateRow
from latelight.products.track_rows import TrackRow

__all__ = ["calendar_date", "facts", "interval", "measured", "shortened", "track_facts"]

# Day 0 of the modified Julian date.
_MJD_ZERO = date(1858, 11, 17)
_JULIAN_YEAR = 365.25


def facts(row: CandidateRow) -> list[tuple[str, str]]:
    """Return what is known of a candidate as labels and values, in reading order."""
    listed = [("significance", f"S/N {row.snr:.1f}"), *_brightness(row), *_motion(row)]
    listed.extend(_origin(row))
    return listed


def track_facts(row: TrackRow) -> list[tuple[str, str]]:
    """Return what is known of a track as labels and values, in reading order."""
    listed = [("significance", f"S/N {row.snr:.1f} in {row.n_epochs} epochs")]
    if row.speed is not None:
        speed = f"{measured(row.speed, row.speed_err)} arcsec/yr"
        if row.speed_change is not None and row.speed_change_err is not None:
            change = measured(row.speed_change, row.speed_change_err)
            sign = "" if change.startswith("-") else "+"
            speed += f" ({sign}{change} a year)"
        listed.append(("speed along the normal", speed))
    elif row.speed_px is not None:
        speed = f"{measured(row.speed_px, row.speed_err_px)} px/yr"
        listed.append(("speed along the normal", speed))
    return [*listed, _way(row), *_track_brightness(row), *_origin(row)]


def calendar_date(mjd: float) -> str:
    """Return the UTC date of a modified Julian date, as in ``2026-12-01``."""
    return (_MJD_ZERO + timedelta(days=int(mjd // 1))).isoformat()


def interval(days: float) -> str:
    """Return a time between epochs in words, later or earlier."""
    span = abs(days)
    sense = "later" if days >= 0.0 else "earlier"
    if span < 100.0:
        return f"{span:.1f} d {sense}"
    return f"{span / _JULIAN_YEAR:.2f} yr {sense}"


def measured(value: float, err: float | None) -> str:
    """Return a value and its error, to a digit of which the error has three or more.

    Examples
    --------
    >>> measured(12.3456, 0.084)
    '12.35 ± 0.08'
    >>> measured(123.4, 17.2)
    '123 ± 17'
    """
    if err is None:
        return f"{value:.3g}"
    decimals = 0
    while decimals < 4 and err * 10.0**decimals < 2.95:
        decimals += 1
    return f"{value:.{decimals}f} ± {err:.{decimals}f}"


def shortened(text: str, longest: int) -> str:
    """Return a text cut to a number of letters, with dots where it goes on."""
    return text if len(text) <= longest else f"{text[: longest - 3]}..."


def _brightness(row: CandidateRow) -> list[tuple[str, str]]:
    if row.surface_brightness is not None:
        value = measured(row.surface_brightness, row.surface_brightness_err)
        return [("brightness", f"{value} mag/arcsec^2"), _size(row)]
    value = measured(row.surface_brightness_counts, row.surface_brightness_err_counts)
    return [("brightness", f"{value} counts/pixel"), _size(row)]


def _size(row: CandidateRow) -> tuple[str, str]:
    if row.length is not None and row.width is not None:
        return "length x width", f'{row.length:.0f}" x {row.width:.1f}"'
    return "length x width", f"{row.length_px:.0f} x {row.width_px:.1f} px"


def _motion(row: CandidateRow) -> list[tuple[str, str]]:
    if row.speed is not None:
        speed = f"{measured(row.speed, row.speed_err)} arcsec/yr"
    elif row.shift_px is not None:
        speed = f"{measured(row.shift_px, row.shift_err_px)} px"
    else:
        speed = "one lobe only"
    return [("motion along the normal", speed), _way(row)]


def _way(row: CandidateRow | TrackRow) -> tuple[str, str]:
    if row.normal_pa is not None:
        way = f"PA {measured(row.normal_pa, row.normal_pa_err)}°"
    else:
        way = f"{measured(row.normal_angle, row.normal_angle_err)}° from +x"
    if row.sense_odds is not None and row.sense_odds < 1.0:
        way += " (sense unsure)"
    return "towards", way


def _track_brightness(row: TrackRow) -> list[tuple[str, str]]:
    if row.surface_brightness is None:
        return []
    value = measured(row.surface_brightness, row.surface_brightness_err)
    return [("brightness", f"{value} mag/arcsec^2")]


def _origin(row: CandidateRow | TrackRow) -> list[tuple[str, str]]:
    if not row.source:
        return [("origin", "none listed fits")]
    parts = [shortened(row.source, 28)]
    if row.score is not None:
        parts.append(f"score {row.score:+.1f}")
    if row.away_angle is not None:
        parts.append(f"{row.away_angle:+.0f}° off")
    listed = [("origin", " · ".join(parts))]
    if row.dust_depth is not None:
        listed.append(
            ("dust depth", f"{measured(row.dust_depth, row.dust_depth_err)} pc")
        )
    return listed
