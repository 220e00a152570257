"""Skies of several fields: one event, two, none, or as many as there are echoes."""

import numpy as np
import pytest
from astropy.table import Table

from latelight.config import load_config
from latelight.origin.sources import read_source_table
from latelight.simulation.__main__ import main
from latelight.simulation.fields import usual_ways
from latelight.simulation.layouts import (
    random_layout,
    random_sky_decoys,
    random_stray,
)
from latelight.simulation.outbursts import flat_speed
from latelight.simulation.skies import random_sky
from latelight.sky import position_angle, separation_deg, wrap_180

SMALL = {"size": 256, "fields": 2, "n_stars": 15, "brightness": (22.0, 23.0)}


def turn_from(echo, source) -> float:
    """Return the motion minus the direction away from a source, degrees."""
    inward = position_angle(echo.ra, echo.dec, source.ra, source.dec)
    return float(wrap_180(echo.normal_pa - inward - 180.0))


@pytest.fixture(scope="module")
def sky():
    return random_sky(3, **SMALL)


def test_one_seed_makes_one_sky(sky):
    again = random_sky(3, **SMALL)
    assert again.outbursts == sky.outbursts
    assert again.decoys == sky.decoys
    for a, b in zip(sky.fields, again.fields, strict=True):
        assert np.array_equal(a.frames[1].pixels, b.frames[1].pixels)
        assert a.truth.echoes == b.truth.echoes
    other = random_sky(4, **(SMALL | {"fields": 1, "events": "none"}))
    assert other.decoys != sky.decoys


def test_one_event_lights_all_fields_in_shared_nights(sky):
    (event,) = sky.outbursts
    for field in sky.fields:
        assert field.truth.echoes
        for echo in field.truth.echoes:
            assert echo.source == event.name
            # Sheets turn the motion by 10 degrees, 1 sigma; four of them.
            assert abs(turn_from(echo, event)) < 40.0
    mjds = np.array([field.truth.mjds for field in sky.fields])
    assert np.all(np.ptp(mjds, axis=0) < 0.1)
    assert len({field.name for field in sky.fields}) == 2


def test_the_event_is_in_no_list_unless_asked(sky, tmp_path):
    sky.write(tmp_path)
    listed = {s.name for s in read_source_table(tmp_path / "sources.ecsv")}
    assert listed == {decoy.name for decoy in sky.decoys}
    events = Table.read(tmp_path / "truth_events.ecsv")
    assert list(events["name"]) == ["event A"]
    assert load_config(tmp_path / "night.toml").night.output.endswith("night")
    assert len(list((tmp_path / "frames").iterdir())) == 4
    assert set(Table.read(tmp_path / "truth_tracks.ecsv")["source"]) == {"event A"}
    sky.write(tmp_path, list_event=True)
    listed = {s.name for s in read_source_table(tmp_path / "sources.ecsv")}
    assert "event A" in listed


def test_two_events_light_the_fields():
    sky = random_sky(6, events="two", **(SMALL | {"fields": 3}))
    first, second = sky.outbursts
    assert 0.4 < separation_deg(first.ra, first.dec, second.ra, second.dec) < 4.1
    lit = {echo.source for field in sky.fields for echo in field.truth.echoes}
    assert lit == {"event A", "event B"}


def test_no_event_leaves_no_echo():
    sky = random_sky(6, events="none", **SMALL)
    assert sky.outbursts == ()
    assert len(sky.decoys) == 6
    assert not any(field.truth.echoes for field in sky.fields)


def test_scattered_echoes_have_no_common_origin():
    sky = random_sky(6, events="scattered", **SMALL)
    assert sky.outbursts == ()
    names = [s.name for field in sky.fields for s in field.truth.sources]
    assert len(names) == len(set(names))
    for field in sky.fields:
        sources = {s.name: s for s in field.truth.sources}
        assert {echo.source for echo in field.truth.echoes} == set(sources)
        for echo in field.truth.echoes:
            assert abs(turn_from(echo, sources[echo.source])) < 40.0


def a_layout(rng, *, two=False, epochs=2):
    return random_layout(rng, fields=6, two=two, epochs=epochs, half_deg=0.06)


@pytest.mark.parametrize(("two", "epochs"), [(False, 2), (False, 5), (True, 2)])
def test_fields_lie_around_the_event_where_echoes_move_as_is_usual(rng, two, epochs):
    low, high = usual_ways(epochs)
    for _ in range(5):
        layout = a_layout(rng, two=two, epochs=epochs)
        assert len(layout.outbursts) == 1 + two
        assert len(layout.places) == 6
        years = (layout.mjds[-1] - layout.mjds[0]) / 365.25
        for ra, dec in layout.places:
            assert 0.0 <= ra < 360.0
            for outburst in layout.outbursts:
                source = outburst.source
                assert separation_deg(ra, dec, source.ra, source.dec) > 0.07
                way = flat_speed(source, ra, dec, layout.middle) * years
                assert low < way < high
        if not two:
            source = layout.outbursts[0].source
            angles = [
                float(position_angle(source.ra, source.dec, *place))
                for place in layout.places
            ]
            gaps = np.diff(np.sort([*angles, min(angles) + 360.0]))
            # One in each sector of 60 degrees.
            assert gaps.max() < 120.0


def test_some_skies_lie_across_ra_zero_and_some_near_a_pole(rng):
    middles = [a_layout(rng).outbursts[0].source for _ in range(40)]
    # One in four and one in five: none of 40 has chances of 1e-5 and 1e-4.
    assert any(abs(wrap_180(s.ra)) < 1.0 for s in middles)
    assert any(65.0 < abs(s.dec) <= 80.0 for s in middles)
    assert all(abs(s.dec) <= 80.0 for s in middles)


def test_decoys_keep_clear_of_the_events(rng):
    layout = a_layout(rng, two=True)
    made = random_sky_decoys(rng, layout, 6)
    assert len({s.name for s in made}) == 6
    for decoy in made:
        for outburst in layout.outbursts:
            away = separation_deg(
                decoy.ra, decoy.dec, outburst.source.ra, outburst.source.dec
            )
            assert away > (0.29 if layout.far else 0.99)


def test_strays_lie_in_any_direction(rng):
    layout = a_layout(rng)
    place = layout.places[0]
    strays = [random_stray(rng, layout, place, f"stray {k}") for k in range(12)]
    angles = np.radians(
        [position_angle(*place, s.source.ra, s.source.dec) for s in strays]
    )
    # The mean of 12 random unit vectors is shorter than 0.87 in all but 1e-4.
    assert np.abs(np.exp(1j * angles).mean()) < 0.87


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        ({"events": "three"}, "one, two, none, scattered, got 'three'"),
        ({"fields": 0}, "fields >= 1"),
        ({"epochs": 1}, "epochs >= 2"),
        ({"size": 100}, "at least 256"),
    ],
)
def test_wrong_orders_are_refused(arguments, text):
    with pytest.raises(ValueError, match=text):
        random_sky(1, **arguments)


def test_one_sky_can_be_written_for_trying_out(tmp_path, capsys):
    words = ["--sky", "2", "--events", "none", "--size", "256", "--stars", "10"]
    assert main([*words, str(tmp_path)]) == 0
    assert "frames/sky-2-6_2.fits" in capsys.readouterr().out
    assert not (tmp_path / "truth_events.ecsv").exists()
