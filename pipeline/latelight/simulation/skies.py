"""Skies of several fields around one outburst, two, or none.

The fields of a sky share their nights and lie on all sides of the event, where its
echoes move at usual speeds.  A sky can also hold echoes that come from nowhere in
common: what a search for their origin must not be fooled by.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal, get_args

import numpy as np

from latelight.records import Source
from latelight.simulation.backdrop import check_order
from latelight.simulation.conditions import random_camera
from latelight.simulation.exposures import Camera
from latelight.simulation.fields import (
    CLOUD_DEPTHS,
    SimulatedField,
    look_at_field,
    random_exposures,
    usual_ways,
)
from latelight.simulation.layouts import (
    SkyLayout,
    random_layout,
    random_sky_decoys,
    random_stray,
)
from latelight.simulation.nights import write_night
from latelight.simulation.outbursts import EchoPlan

__all__ = ["Events", "SimulatedSky", "random_sky"]

Events = Literal["one", "two", "none", "scattered"]

# 1 sigma by which tilted sheets turn the motion, degrees.
TURN_DEG = 10.0
N_DECOYS = 6
# Fields of one night are taken one after the other: days between them.
BETWEEN_FIELDS_D = 0.004


@dataclass(frozen=True, slots=True)
class SimulatedSky:
    """Several fields that share their nights, and what lit them.

    Attributes
    ----------
    name : str
        Start of the fields' names.
    fields : tuple of SimulatedField
        The fields.
    outbursts : tuple of Source
        The events that lit all fields; none where the echoes, if any, have no
        common origin.
    decoys : tuple of Source
        Outbursts that lit nothing.
    """

    name: str
    fields: tuple[SimulatedField, ...]
    outbursts: tuple[Source, ...]
    decoys: tuple[Source, ...]

    def write(self, folder: Path, *, list_event: bool = False) -> list[Path]:
        """Write all frames, a source list, ready settings and the truth.

        Parameters
        ----------
        folder : Path
            As of :func:`latelight.simulation.nights.write_night`.
        list_event : bool
            Whether the source list holds the events too, not decoys alone.

        Raises
        ------
        ProductError
            If a file cannot be written.
        """
        listed = self.outbursts if list_event else ()
        return write_night(
            folder,
            self.fields,
            sources=(*listed, *self.decoys),
            events=self.outbursts,
        )


def random_sky(
    seed: int,
    *,
    fields: int = 6,
    events: Events = "one",
    epochs: int = 2,
    size: int = 768,
    brightness: tuple[float, float] = (21.5, 24.5),
    n_stars: int | None = None,
) -> SimulatedSky:
    """Make several fields around an invented event.

    Some skies lie across RA = 0, some near a pole.

    Parameters
    ----------
    seed : int
        The same seed and arguments give the same sky.
    fields : int
        How many, at different position angles 0.4-4 degrees from the event, or
        0.25-1.2 degrees when it lies in another galaxy.
    events : {"one", "two", "none", "scattered"}
        One event that lights 3-5 echoes a field (fewer in small frames); two that
        light every field; no echo but plenty of nuisances; or as many echoes, each
        lit by an outburst of its own anywhere.
    epochs : int
        How often every field is taken, at least two.
    size : int
        Side of the frames, pixels, at least 256.
    brightness : (float, float)
        Range of the echoes' peak surface brightness, mag/arcsec^2.
    n_stars : int, optional
        Stars of 13 to 23 mag on a frame; by default 36 per square arcminute.

    Raises
    ------
    ValueError
        If an argument is out of its range, or the echoes do not fit into the frames.
    """
    check_order("echoes", size)
    if events not in get_args(Events):
        msg = f"events must be one of {', '.join(get_args(Events))}, got {events!r}"
        raise ValueError(msg)
    if fields < 1 or epochs < 2:
        msg = f"fields >= 1 and epochs >= 2 are needed, got {fields} and {epochs}"
        raise ValueError(msg)
    conditions, *streams = np.random.SeedSequence(seed).spawn(1 + fields)
    rng = np.random.default_rng(conditions)
    camera = random_camera(rng, (size, size), many_columns=events == "none")
    layout = random_layout(
        rng,
        fields=fields,
        two=events == "two",
        epochs=epochs,
        half_deg=size * camera.scale_arcsec / 3600.0 * np.sqrt(0.5),
    )
    order = _Order(events, brightness, n_stars, camera, layout)
    made = tuple(
        _make_field(
            order,
            number,
            name=f"SKY-{seed}-{number + 1}",
            rngs=[np.random.default_rng(s) for s in stream.spawn(3 + epochs)],
        )
        for number, stream in enumerate(streams)
    )
    common = layout.outbursts if events in ("one", "two") else ()
    return SimulatedSky(
        name=f"SKY-{seed}",
        fields=made,
        outbursts=tuple(outburst.source for outburst in common),
        decoys=random_sky_decoys(rng, layout, N_DECOYS),
    )


@dataclass(frozen=True, slots=True)
class _Order:
    """What the fields of a sky have in common."""

    events: Events
    brightness: tuple[float, float]
    n_stars: int | None
    camera: Camera
    layout: SkyLayout


def _make_field(
    order: _Order, number: int, *, name: str, rngs: list[np.random.Generator]
) -> SimulatedField:
    rng, *rest = rngs
    layout, place = order.layout, order.layout.places[number]
    room = min(1.0, (order.camera.shape[0] / 768) ** 2)
    count = max(1, round(int(rng.integers(3, 6)) * room))
    # Of two events, each lights most echoes in every other field.
    lights = layout.outbursts[:: -1 if number % 2 else 1]
    if order.events == "none":
        count, lights = 0, ()
    if order.events == "scattered":
        lights = tuple(
            random_stray(rng, layout, place, f"stray {number + 1}.{k + 1}")
            for k in range(count)
        )
    exposures = random_exposures(
        rng,
        order.camera,
        ra=place[0],
        dec=place[1],
        mjds=layout.mjds + number * BETWEEN_FIELDS_D,
        field=name,
    )
    plan = EchoPlan(
        count=count,
        brightness=order.brightness,
        turn_deg=TURN_DEG,
        shifts=usual_ways(layout.mjds.size),
        depth=CLOUD_DEPTHS,
        one_each=order.events == "scattered",
    )
    return look_at_field(
        lights,
        exposures,
        plan=plan,
        kind="nuisances" if order.events == "none" else "echoes",
        n_stars=order.n_stars,
        rngs=rest,
    )
