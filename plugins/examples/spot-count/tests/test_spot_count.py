"""The figure keeps its contract and counts spots."""

import numpy as np
from spot_count import SpotCount, SpotCountOptions
from stackbound.stages import StackInfo
from stackbound.testing import assert_conforms


def test_the_contract_is_kept():
    """The conformance suite of stackbound finds nothing."""
    assert_conforms(SpotCount)


def test_spots_are_counted():
    """Single bright pixels are spots, dim ones and plateaus are not."""
    pixels = np.zeros((2, 40, 40), np.uint16)
    pixels[0, 5, 5] = pixels[0, 20, 30] = pixels[1, 5, 5] = 500
    pixels[1, 30, 30] = 90
    pixels[1, 20, 10:12] = 500

    assert SpotCount().count(pixels) == 3


def test_the_figure_is_the_difference():
    """A spot that is gone counts as minus one, over all regions."""
    original = np.zeros((1, 30, 30), np.uint16)
    original[0, 5, 5] = original[0, 20, 20] = 500
    decoded = original.copy()
    decoded[0, 5, 5] = 0
    info = StackInfo("array", "zyx", original.shape, original.dtype)
    figure = SpotCount(SpotCountOptions(threshold=100.0))

    assert figure.combine([figure.measure(original, decoded, info)] * 2, info) == "-2"
