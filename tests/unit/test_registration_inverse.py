"""The way back through a pixel map."""

from dataclasses import replace

import numpy as np
import pytest

from latelight.records import PixelMap
from latelight.registration.pixel_map import evaluate, identity_map, invert


def distorted(shape):
    """Shift, rotation, scale and a cubic distortion of about a pixel."""
    grid = identity_map(shape)
    u, v = grid.map_x / 450.0 - 1.0, grid.map_y / 350.0 - 1.0
    return PixelMap(
        grid.node_y,
        grid.node_x,
        12.3 + 0.999 * grid.map_y + 0.02 * grid.map_x + 1.3 * u * v + 0.8 * u**3,
        -7.7 + 1.001 * grid.map_x - 0.02 * grid.map_y + 0.9 * v**2 * u,
        error_px=0.01,
    )


def test_there_and_back_is_where_it_began(rng):
    there = distorted((700, 900))
    back = invert(there, shape=(720, 880))
    x, y = rng.uniform(30.0, 850.0, 500), rng.uniform(40.0, 680.0, 500)
    again = evaluate(there, *evaluate(back, x, y))
    # Cubic splines of so smooth a map err by some 1e-7 px.
    np.testing.assert_allclose(again, (x, y), atol=1e-6)
    assert back.error_px == there.error_px


def test_local_distortion_is_undone_too(rng):
    """Waves of 0.4 px, 400 px long: no polynomial of low degree follows them."""
    there = distorted((700, 900))
    waves = 0.4 * np.sin(2.0 * np.pi * there.node_x / 400.0)
    there = replace(there, map_x=there.map_x + waves)
    back = invert(there, shape=(720, 880))
    # Away from the rim, beyond which the way back is only continued smoothly.
    x, y = rng.uniform(150.0, 720.0, 500), rng.uniform(150.0, 550.0, 500)
    again = evaluate(there, *evaluate(back, x, y))
    # Exact at the nodes; cubic splines 32 px apart err by 5/384 h^4 times the fourth
    # derivative between them, 0.4 (2 pi / 400)^4: 3e-4 px, and its like both ways.
    np.testing.assert_allclose(again, (x, y), atol=1e-3)


def test_beyond_the_frame_the_way_back_goes_on_smoothly():
    there = distorted((700, 900))
    back = invert(there, shape=(900, 1200))
    x = np.linspace(850.0, 1150.0, 61)
    columns, _ = evaluate(back, x, np.full(61, 350.0))
    steps = np.diff(columns)
    assert np.all(np.abs(steps - 5.0) < 0.3)


@pytest.mark.parametrize("shape", [(64, 64), (300, 40)])
def test_small_frames_have_a_way_back(shape):
    there = identity_map(shape)
    back = invert(there, shape=shape)
    np.testing.assert_allclose(back.map_x, identity_map(shape).map_x, atol=1e-9)
    np.testing.assert_allclose(back.map_y, identity_map(shape).map_y, atol=1e-9)
