"""Unrolling an image along a ridge."""

import numpy as np

from latelight.records import ArcTrace
from latelight.straighten import straighten


def _straight_trace(x0, y0, angle, n):
    """Return a straight trace whose normals point at ``angle``."""
    along = np.radians(angle + 90.0)
    steps = np.arange(n) - (n - 1) / 2
    return ArcTrace(
        x0 + steps * np.cos(along), y0 + steps * np.sin(along), np.full(n, float(angle))
    )


def test_rows_run_along_the_normal():
    y, x = np.mgrid[:80, :100]
    angle = 25.0
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    image = (x - 50.0) * c + (y - 40.0) * s  # distance along the normal
    offsets = np.linspace(-8, 8, 17)
    sheet = straighten(image, _straight_trace(50.0, 40.0, angle, 31), offsets)
    assert sheet.shape == (17, 31)
    np.testing.assert_allclose(sheet, offsets[:, None] * np.ones(31), atol=1e-9)


def test_outside_the_image_is_fill():
    image = np.ones((20, 20))
    far = straighten(
        image, _straight_trace(200.0, 200.0, 0.0, 5), np.arange(3.0), fill=-1
    )
    assert (far == -1).all()
    edge = straighten(
        image, _straight_trace(18.0, 10.0, 0.0, 5), np.arange(6.0), fill=7.0
    )
    assert (edge[0] == 1.0).all()
    assert (edge[-1] == 7.0).all()


def test_the_image_is_left_alone():
    image = np.arange(400.0).reshape(20, 20)
    before = image.copy()
    straighten(
        image, _straight_trace(10.0, 10.0, 40.0, 9), np.arange(-3.0, 4.0), order=3
    )
    assert (image == before).all()
