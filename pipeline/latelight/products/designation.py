"""Names for candidates: IAU designations from positions.

Form and rules: "Specifications concerning designations for astronomical
radiation sources outside the solar system", IAU Working Group Designations,
August 2018: J for J2000/ICRS, coordinates truncated and never rounded, the sign
always given.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Hashable, Sequence
from decimal import ROUND_DOWN, ROUND_HALF_EVEN, Decimal
from typing import Any

__all__ = ["pixel_designation", "sky_designation", "unique_ids"]

# A place that is 10.5 s in truth may arrive as 10.499999999998 s, and truncation
# would then name it 10.49.  Coordinates are therefore rounded first to a step
# far above the noise of double precision (2e-10 arcsec) and far below the last
# digit of the name: 1 microsecond of time, 10 microarcsec.
_TIME_GUARD = Decimal("0.000001")
_ARC_GUARD = Decimal("0.00001")
_DAY = 86400


def sky_designation(ra: float, dec: float) -> str:
    """Return the name of a place on the sky, as in ``J104412.12-601601.6``.

    Parameters
    ----------
    ra, dec : float
        Degrees, ICRS; ra is taken modulo 360, dec within +-90.

    Returns
    -------
    str
        Right ascension to 0.01 s and declination to 0.1 arcsec, both truncated
        towards zero.

    Raises
    ------
    ValueError
        If either is not finite, or dec is outside +-90.
    """
    if not -90.0 <= dec <= 90.0 or ra - ra != 0.0:  # NaN and infinity fail both
        msg = f"ra must be finite and dec within +-90 degrees, got {ra!r}, {dec!r}"
        raise ValueError(msg)
    time = (Decimal(ra % 360.0) * 240).quantize(_TIME_GUARD, ROUND_HALF_EVEN)
    # The guard may lift a place just west of 0h to 24h, which is no time.
    time = min(time.quantize(Decimal("0.01"), ROUND_DOWN), _DAY - Decimal("0.01"))
    arc = (abs(Decimal(dec)) * 3600).quantize(_ARC_GUARD, ROUND_HALF_EVEN)
    arc = arc.quantize(Decimal("0.1"), ROUND_DOWN)
    sign = "-" if dec < 0.0 else "+"
    return f"J{_sexagesimal(time, 5)}{sign}{_sexagesimal(arc, 4)}"


def pixel_designation(pair: str, x: float, y: float) -> str:
    """Return the name of a place on a frame without WCS, as in ``PAIR_X0512.3Y0100.7``.

    Parameters
    ----------
    pair : str
        Name of the pair, whose science frame's pixels are meant.
    x, y : float
        Pixels, the first pixel 0; truncated towards zero to 0.1.
    """
    parts = []
    for axis, value in (("X", x), ("Y", y)):
        exact = Decimal(value).quantize(_TIME_GUARD, ROUND_HALF_EVEN)
        parts.append(f"{axis}{exact.quantize(Decimal('0.1'), ROUND_DOWN):06}")
    return f"{pair}_{''.join(parts)}"


def unique_ids(names: Sequence[str], *, keys: Sequence[Any]) -> tuple[str, ...]:
    """Tell apart candidates whose designations are the same.

    Parameters
    ----------
    names : sequence of str
        Designations, one a candidate.
    keys : sequence
        One sortable key a candidate, all different, for example ``(pair, x, y)``;
        it decides the letters, so that the order of ``names`` does not.

    Returns
    -------
    tuple of str
        The names in the order given; those that occur more than once with the
        letter a, b, c... added (aa after z).

    Raises
    ------
    ValueError
        If the lengths differ or two keys are the same.
    """
    hashable: list[Hashable] = list(keys)
    if len(names) != len(keys) or len(set(hashable)) != len(keys):
        msg = (
            f"keys must be as many as names ({len(names)}) and all different, got "
            f"{len(keys)} of which {len(set(hashable))} differ"
        )
        raise ValueError(msg)
    count = Counter(names)
    seen: Counter[str] = Counter()
    ids = list(names)
    for index in sorted(range(len(names)), key=lambda i: keys[i]):
        name = names[index]
        if count[name] > 1:
            ids[index] = name + _letters(seen[name])
            seen[name] += 1
    return tuple(ids)


def _sexagesimal(seconds: Decimal, width: int) -> str:
    whole = int(seconds)
    rest = seconds - whole + whole % 60
    return f"{whole // 3600:02d}{whole // 60 % 60:02d}{rest:0{width}}"


def _letters(rank: int) -> str:
    text = ""
    rank += 1
    while rank:
        rank, letter = divmod(rank - 1, 26)
        text = chr(ord("a") + letter) + text
    return text
