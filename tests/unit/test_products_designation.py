import itertools
import math

import pytest

from latelight.products.designation import (
    pixel_designation,
    sky_designation,
    unique_ids,
)


def test_exact_hundredths_are_not_lost_to_rounding_noise():
    """Every 0.01 s and 0.1 arcsec, one unit in the last place down, keeps its name."""
    for step in range(0, 8_640_000, 4321):
        ra = math.nextafter(step / 24000.0, 0.0)
        expected = step // 100
        name = sky_designation(ra, 0.0)
        assert name[1:10] == (
            f"{expected // 3600:02d}{expected // 60 % 60:02d}"
            f"{expected % 60:02d}.{step % 100:02d}"
        )
    for step in range(0, 3_240_000, 4321):
        dec = math.nextafter(-step / 36000.0, 0.0)
        assert sky_designation(0.0, dec)[11:].endswith(f".{step % 10}")


def test_truncation_just_below_a_step():
    assert sky_designation(15.0 * 0.00999 / 3600.0, 0.0) == "J000000.00+000000.0"
    assert sky_designation(0.0, -0.09 / 3600.0) == "J000000.00-000000.0"


@pytest.mark.parametrize(
    ("ra", "dec", "name"),
    [
        (-15.0, 90.0, "J230000.00+900000.0"),
        (360.0, -90.0, "J000000.00-900000.0"),
        (math.nextafter(360.0, 0.0), 0.0, "J235959.99+000000.0"),
        (-1e-18, -0.0, "J235959.99+000000.0"),
        (157.5, 41.0, "J103000.00+410000.0"),
    ],
)
def test_ends_of_the_ranges(ra, dec, name):
    assert sky_designation(ra, dec) == name


@pytest.mark.parametrize(
    ("ra", "dec"),
    [(math.nan, 0.0), (math.inf, 0.0), (0.0, math.nan), (0.0, 90.001), (0.0, -91.0)],
)
def test_impossible_places_are_refused_with_the_value(ra, dec):
    with pytest.raises(ValueError, match=r"within \+-90 degrees, got"):
        sky_designation(ra, dec)


def test_pixel_designation_is_truncated():
    assert pixel_designation("a--b", 512.39, 100.79) == "a--b_X0512.3Y0100.7"
    assert pixel_designation("a--b", 0.3, 0.1 + 0.2) == "a--b_X0000.3Y0000.3"
    assert pixel_designation("a--b", -0.26, 10240.5) == "a--b_X-000.2Y10240.5"


def test_equal_names_get_letters_by_key_whatever_the_order():
    names = ("A", "B", "A", "A")
    keys = (("p2", 1.0), ("p1", 0.0), ("p1", 5.0), ("p2", 0.5))
    expected = dict(zip(keys, ("Ac", "B", "Aa", "Ab"), strict=True))
    for order in itertools.permutations(range(4)):
        ids = unique_ids([names[i] for i in order], keys=[keys[i] for i in order])
        assert list(ids) == [expected[keys[i]] for i in order]


def test_letters_go_on_after_z():
    ids = unique_ids(["A"] * 54, keys=range(54))
    assert (ids[25], ids[26], ids[51], ids[52]) == ("Az", "Aaa", "Aaz", "Aba")
    assert len(set(ids)) == 54


@pytest.mark.parametrize("keys", [(1,), (1, 1)])
def test_keys_that_cannot_decide_are_refused(keys):
    with pytest.raises(ValueError, match="all different"):
        unique_ids(("A", "A"), keys=keys)
