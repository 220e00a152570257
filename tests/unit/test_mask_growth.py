"""Growing masks by a footprint."""

import numpy as np
import pytest
from scipy import ndimage

from latelight.mask_growth import disc, grow_mask
from latelight.widths import fwhm_of


def test_every_bit_is_dilated_as_scipy_does(rng):
    """Patches, lines and single pixels of three bits against binary_dilation."""
    mask = np.zeros((80, 70), np.uint16)
    mask[10:30, 20:45] = 4
    mask[:, 60] |= 32
    mask[rng.integers(0, 80, 12), rng.integers(0, 70, 12)] |= 16

    grown = grow_mask(mask, footprint=disc(3.2))

    for bit in (4, 16, 32):
        expected = ndimage.binary_dilation((mask & bit) != 0, structure=disc(3.2))
        assert (((grown & bit) != 0) == expected).all()


def test_nothing_grows_from_nothing():
    assert not grow_mask(np.zeros((9, 9), np.uint16), footprint=disc(2)).any()


def test_an_even_footprint_is_refused():
    with pytest.raises(ValueError, match=r"odd side, got \(4, 4\)"):
        grow_mask(np.zeros((9, 9), np.uint16), footprint=np.ones((4, 4), dtype=bool))


def test_the_width_of_a_dark_image_is_refused():
    with pytest.raises(ValueError, match="positive peak"):
        fwhm_of(np.zeros((9, 9)))
