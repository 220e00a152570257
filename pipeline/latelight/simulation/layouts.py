"""Where the events and the fields of a sky lie, and when the fields are taken."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latelight.records import FloatArray, Source
from latelight.simulation.fields import (
    light_width,
    random_cadence,
    usual_ways,
    widest_light,
)
from latelight.simulation.outbursts import (
    SPEEDS,
    Outburst,
    flat_speed,
    random_outburst,
)
from latelight.sky import offset_position, position_angle, separation_deg

__all__ = ["SkyLayout", "random_layout", "random_sky_decoys", "random_stray"]

# Where fields lie around an event and how far apart two events are, degrees: in our
# galaxy, and in another.
AROUND_DEG = ((0.4, 4.0), (0.25, 1.2))
APART_DEG = ((1.5, 4.0), (0.5, 1.2))
# An unlit outburst is at least so far from an event, degrees.
DECOY_CLEAR_DEG = (1.0, 0.3)
# Tries for the place of one field before all is drawn anew.
TRIES = 60


@dataclass(frozen=True, slots=True)
class SkyLayout:
    """The plan of a sky.

    Attributes
    ----------
    outbursts : tuple of Outburst
        One event, or two.
    places : tuple of (float, float)
        RA and Dec of the fields, degrees.
    mjds : float64 array
        Epochs, rising.
    far : bool
        Whether the events lie in another galaxy.
    clear_deg : float
        Least distance of a field from an event.
    """

    outbursts: tuple[Outburst, ...]
    places: tuple[tuple[float, float], ...]
    mjds: FloatArray
    far: bool
    clear_deg: float

    @property
    def middle(self) -> float:
        """Return the middle of the span, MJD."""
        return 0.5 * float(self.mjds[0] + self.mjds[-1])

    def suits(self, outburst: Outburst, ra: float, dec: float) -> bool:
        """Say whether the echoes of an outburst move as is usual in a field."""
        speed = flat_speed(outburst.source, ra, dec, self.middle)
        epochs = self.mjds.size
        way = speed * float(self.mjds[-1] - self.mjds[0]) / 365.25
        low, high = usual_ways(epochs)
        return (
            1.1 * SPEEDS[0] < speed < SPEEDS[1] / 1.3
            and 1.3 * low < way < high / 1.3
            and light_width(outburst, ra, dec, self.middle) < widest_light(epochs)
        )


def random_layout(
    rng: np.random.Generator,
    *,
    fields: int,
    two: bool,
    epochs: int,
    half_deg: float,
) -> SkyLayout:
    """Draw events and fields around them, all on the same nights.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the randomness.
    fields : int
        How many fields.
    two : bool
        Whether there are two events, a few degrees apart.
    epochs : int
        How often every field is taken.
    half_deg : float
        Half the diagonal of a field, degrees.
    """
    while True:
        layout = _try_layout(rng, fields, two, epochs, half_deg)
        if layout is not None:
            return layout


def _try_layout(
    rng: np.random.Generator, fields: int, two: bool, epochs: int, half_deg: float
) -> SkyLayout | None:
    far = bool(rng.random() < 0.5)
    clear = 1.2 * half_deg
    ra, dec = _random_place(rng)
    mjd = float(rng.uniform(60_000.0, 61_500.0))
    events = [(ra, dec)]
    if two:
        apart = float(rng.uniform(*APART_DEG[far]))
        events.append(_beside(ra, dec, float(rng.uniform(0.0, 360.0)), apart))
    outbursts = tuple(
        _at(
            random_outburst(
                rng, name=name, ra=ra, dec=dec, mjd=mjd, far=far, clear_deg=clear
            ),
            *place,
        )
        for name, place in zip(("event A", "event B"), events, strict=False)
    )
    # The first field's echoes set the cadence; the others must suit it.
    first = _around(rng, events, far, 0.0, 360.0)
    days = random_cadence(
        rng,
        epochs,
        speed=flat_speed(outbursts[0].source, *first, mjd),
        width=light_width(outbursts[0], *first, mjd),
    )
    layout = SkyLayout(outbursts, (), mjd + days, far, clear)
    turn = rng.uniform(0.0, 360.0)
    places: list[tuple[float, float]] = []
    for number in range(fields):
        sector = 360.0 / fields
        begin = turn + number * sector
        for _ in range(TRIES):
            place = _around(rng, events, far, begin, begin + sector)
            if _fits(place, places, layout, half_deg):
                places.append(place)
                break
        else:
            return None
    return replace(layout, places=tuple(places))


def _fits(
    place: tuple[float, float],
    taken: list[tuple[float, float]],
    layout: SkyLayout,
    half_deg: float,
) -> bool:
    sources = [outburst.source for outburst in layout.outbursts]
    return (
        all(float(separation_deg(*place, *other)) > 2.0 * half_deg for other in taken)
        and all(
            float(separation_deg(*place, s.ra, s.dec)) > layout.clear_deg
            for s in sources
        )
        and all(layout.suits(outburst, *place) for outburst in layout.outbursts)
    )


def _around(
    rng: np.random.Generator,
    events: list[tuple[float, float]],
    far: bool,
    begin: float,
    end: float,
) -> tuple[float, float]:
    """Draw a place around the first event or the middle of two."""
    low, high = AROUND_DEG[far]
    ra, dec = events[0]
    if len(events) == 2:
        apart = float(separation_deg(*events[0], *events[1]))
        pa = float(position_angle(*events[0], *events[1]))
        ra, dec = _beside(ra, dec, pa, 0.5 * apart)
    away = low * (high / low) ** rng.random()
    return _beside(ra, dec, float(rng.uniform(begin, end)), away)


def _beside(ra: float, dec: float, pa: float, away: float) -> tuple[float, float]:
    """Return the place so many degrees away in a position angle."""
    there = offset_position(ra, dec, pa, away)
    return float(there[0]), float(there[1])


def _random_place(rng: np.random.Generator) -> tuple[float, float]:
    """Draw the middle of a sky: one in four at RA = 0, one in five near a pole."""
    ra, dec = float(rng.uniform(0.0, 360.0)), float(rng.uniform(-65.0, 65.0))
    if rng.random() < 0.25:
        ra = float(rng.uniform(-1.0, 1.0)) % 360.0
    if rng.random() < 0.2:
        dec = float(rng.uniform(65.0, 80.0) * rng.choice([-1.0, 1.0]))
    return ra, dec


def _at(outburst: Outburst, ra: float, dec: float) -> Outburst:
    return replace(outburst, source=replace(outburst.source, ra=ra, dec=dec))


def random_stray(
    rng: np.random.Generator, layout: SkyLayout, place: tuple[float, float], name: str
) -> Outburst:
    """Draw an outburst in any direction whose echoes move as is usual in a field."""
    while True:
        outburst = random_outburst(
            rng,
            name=name,
            ra=place[0],
            dec=place[1],
            mjd=layout.middle,
            far=layout.far,
            clear_deg=layout.clear_deg,
        )
        if layout.suits(outburst, *place):
            return outburst


def random_sky_decoys(
    rng: np.random.Generator, layout: SkyLayout, count: int
) -> tuple[Source, ...]:
    """Draw outbursts among the fields that lit nothing, clear of the events."""
    like = layout.outbursts[0].source
    reach = AROUND_DEG[layout.far][1]
    made: list[Source] = []
    while len(made) < count:
        away = reach * float(np.sqrt(rng.uniform(0.02, 1.5)))
        ra, dec = _beside(like.ra, like.dec, float(rng.uniform(0.0, 360.0)), away)
        if any(
            float(separation_deg(ra, dec, o.source.ra, o.source.dec))
            < DECOY_CLEAR_DEG[layout.far]
            for o in layout.outbursts
        ):
            continue
        made.append(
            replace(
                like,
                name=f"decoy {len(made) + 1}",
                ra=ra,
                dec=dec,
                distance_pc=float(like.distance_pc or 1.0) * rng.uniform(0.6, 1.6),
                age_yr=float(like.age_yr or 1.0) * rng.uniform(0.5, 2.0),
            )
        )
    return tuple(made)
