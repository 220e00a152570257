"""What a header says about an exposure, checked word by word."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from latelight.errors import FrameError
from latelight.frames.settings import HeaderWords

__all__ = ["HeaderValues", "parse_date", "read_words"]

# MJD of 1900-01-01 and 2100-01-01: an epoch outside is a mistake, not a frame.
MJD_RANGE = (15020.0, 88069.0)
JD_OF_MJD_ZERO = 2400000.5
MJD_OF_UNIX_ZERO = 40587
SECONDS_PER_DAY = 86400.0


@dataclass(frozen=True, slots=True)
class HeaderValues:
    """The words of one image, in the package's units.

    Attributes
    ----------
    mjd : float
        Middle of the exposure, MJD (UTC).
    exposure_s : float
        Exposure time, seconds, positive.
    filter, field : str
        Empty when the header has none.
    gain : float or None
        Electrons per count, positive.
    read_noise : float or None
        Electrons, not negative.
    saturation : float or None
        Counts, positive.
    zero_point : float or None
        Magnitude of one count per exposure.
    notes : tuple of str
        What was assumed.
    """

    mjd: float
    exposure_s: float
    filter: str
    field: str
    gain: float | None
    read_noise: float | None
    saturation: float | None
    zero_point: float | None
    notes: tuple[str, ...]


def read_words(
    path: Path, headers: Sequence[Any], *, words: HeaderWords
) -> HeaderValues:
    """Read and check the words of one image.

    Parameters
    ----------
    path : Path
        The file, for messages.
    headers : sequence of astropy.io.fits.Header
        Searched in turn: the image's own, then the primary, whose words the
        extensions inherit.
    words : HeaderWords
        Names of the words.

    Raises
    ------
    FrameError
        If a needed word is missing (epoch, exposure, filter), or any word is
        not of its kind or out of its range.
    """
    reader = _Words(path, headers)
    notes: list[str] = []
    exposure = reader.number(words.exposure, "exposure", above=0.0)
    if exposure is None:
        cure = "name the word that holds seconds in [header] exposure"
        raise FrameError(path, f"no word {words.exposure!r} (exposure time): {cure}")
    start = _start_mjd(reader, words, notes)
    return HeaderValues(
        mjd=start + 0.5 * exposure / SECONDS_PER_DAY,
        exposure_s=exposure,
        filter=_filter(reader, words),
        field=reader.text(words.field, "field") or "",
        gain=reader.number(words.gain, "gain", above=0.0),
        read_noise=reader.number(words.read_noise, "read_noise", at_least=0.0),
        saturation=reader.number(words.saturation, "saturation", above=0.0),
        zero_point=reader.number(words.zero_point, "zero_point"),
        notes=tuple(notes),
    )


def parse_date(text: str) -> float:
    """Turn a FITS date into an MJD.

    Parameters
    ----------
    text : str
        ``YYYY-MM-DD``, ``YYYY-MM-DDThh:mm:ss[.s]`` with or without an offset
        from UTC, or the old ``DD/MM/YY`` of the twentieth century (FITS
        standard 4.0, section 9.1.1 and 4.4.2.1).

    Raises
    ------
    ValueError
        If the text is no date.
    """
    text = text.strip()
    if len(text) == 8 and text[2] == text[5] == "/":
        moment = datetime(1900 + int(text[6:]), int(text[3:5]), int(text[:2]))
    else:
        moment = datetime.fromisoformat(text)
    moment = (
        moment.replace(tzinfo=UTC) if moment.tzinfo is None else moment.astimezone(UTC)
    )
    since = moment - datetime(1970, 1, 1, tzinfo=UTC)
    return MJD_OF_UNIX_ZERO + since.total_seconds() / SECONDS_PER_DAY


class _Words:
    """Look-up of words in one header after another, with messages."""

    def __init__(self, path: Path, headers: Sequence[Any]) -> None:
        self.path = path
        self.headers = headers

    def raw(self, word: str) -> Any:
        """Return a word's value, None when absent, undefined or blank."""
        for header in self.headers:
            try:
                if word not in header:
                    continue
                value = header[word]
            except Exception as error:
                reason = f"word {word!r} cannot be read ({error}): repair the header"
                raise FrameError(self.path, reason) from error
            if isinstance(value, str):
                value = value.strip()
            if isinstance(value, str | bool | int | float) and value != "":
                return value
        return None

    def text(self, word: str, key: str) -> str | None:
        """Return a word as text; numbers are written out."""
        value = self.raw(word) if word else None
        if isinstance(value, bool):
            reason = f"{word} must be text, got {value!r}: set [header] {key}"
            raise FrameError(self.path, reason)
        return None if value is None else str(value)

    def number(
        self,
        word: str,
        key: str,
        *,
        above: float = -math.inf,
        at_least: float = -math.inf,
    ) -> float | None:
        """Return a word as a finite number in its range, None when absent."""
        value = self.raw(word) if word else None
        if value is None:
            return None
        cure = f"repair the header or name another word in [header] {key}"
        try:
            number = math.nan if isinstance(value, bool) else float(value)
        except (ValueError, OverflowError):
            number = math.nan
        if not math.isfinite(number):
            reason = f"{word} ({key}) must be a finite number, got {value!r}: {cure}"
            raise FrameError(self.path, reason)
        if number <= above or number < at_least:
            rule = f"above {above:g}" if number <= above else f"at least {at_least:g}"
            reason = f"{word} ({key}) must be {rule}, got {number:g}: {cure}"
            raise FrameError(self.path, reason)
        return number


def _filter(reader: _Words, words: HeaderWords) -> str:
    """Return the filter; a frame that should have one and has none is refused."""
    name = reader.text(words.filter, "filter")
    if words.filter and name is None:
        cure = (
            'name the right word in [header] filter, or set it to "" when all '
            "frames share one filter"
        )
        raise FrameError(reader.path, f"no word {words.filter!r} (filter): {cure}")
    return name or ""


def _start_mjd(reader: _Words, words: HeaderWords, notes: list[str]) -> float:
    """Return the start of the exposure, from the epoch word or DATE-OBS."""
    dated = _dated(reader, "DATE-OBS", strict=reader.raw(words.mjd) is None)
    value = reader.raw(words.mjd)
    if value is None:
        if dated is None:
            cure = "name the word that holds the start in [header] mjd"
            reason = f"no word {words.mjd!r} (epoch), nor DATE-OBS: {cure}"
            raise FrameError(reader.path, reason)
        notes.append(f"no word {words.mjd}: epoch from DATE-OBS")
        start = dated
    else:
        start = _epoch(reader, words.mjd, value, notes)
        if dated is not None and abs(dated - start) > 1.5:
            notes.append(
                f"{words.mjd} and DATE-OBS are {abs(dated - start):.1f} days apart: "
                f"{words.mjd} is used"
            )
    low, high = MJD_RANGE
    if not low <= start <= high:
        reason = (
            f"the epoch must lie between MJD {low:g} and {high:g} (1900 to 2100), got "
            f"{start:g}: repair {words.mjd} or name another word in [header] mjd"
        )
        raise FrameError(reader.path, reason)
    return start


def _epoch(reader: _Words, word: str, value: Any, notes: list[str]) -> float:
    """Turn the epoch word into an MJD: a number, or a date as text."""
    if isinstance(value, str):
        try:
            value = float(value)
        except ValueError:
            dated = _dated(reader, word, strict=True)
            return math.nan if dated is None else dated
    number = reader.number(word, "mjd")
    if number is None:
        return math.nan
    if MJD_RANGE[0] <= number - JD_OF_MJD_ZERO <= MJD_RANGE[1]:
        notes.append(f"{word} is a Julian date: 2400000.5 was taken off")
        number -= JD_OF_MJD_ZERO
    return number


def _dated(reader: _Words, word: str, *, strict: bool) -> float | None:
    """Return the MJD of a date word; unreadable dates matter only when strict."""
    value = reader.raw(word)
    if value is None:
        return None
    try:
        return parse_date(str(value))
    except (ValueError, OverflowError) as error:
        if not strict:
            return None
        reason = (
            f"{word} must be a date like 2026-01-31T23:59:59, got {value!r}: repair "
            "the header or name another word in [header] mjd"
        )
        raise FrameError(reader.path, reason) from error
