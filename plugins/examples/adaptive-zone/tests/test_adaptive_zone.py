"""The quantizer keeps its contract and does what its documentation says."""

import numpy as np
from adaptive_zone import AdaptiveZone, AdaptiveZoneOptions
from stackbound.testing import assert_conforms


def test_the_contract_is_kept():
    """The conformance suite of stackbound finds nothing."""
    assert_conforms(AdaptiveZone)


def test_without_widening_it_rounds():
    """A widening of 0 is plain rounding."""
    stage = AdaptiveZone(AdaptiveZoneOptions(widening=0.0))
    values = np.linspace(-9, 9, 128, dtype=np.float32).reshape(2, 1, 8, 8)

    assert (np.rint(values) == stage.indices(values, np.ones((1, 8, 8)), 1)).all()


def test_quiet_blocks_lose_their_small_coefficients():
    """The same small coefficient is dropped in a quiet block and kept in a busy one."""
    blocks = np.zeros((2, 1, 8, 8), np.float32)
    blocks[:, 0, 0, 0] = 0.7
    blocks[1, 0, 1:, :] = 20
    indices = AdaptiveZone().indices(blocks, np.ones((1, 8, 8)), 1)

    assert indices[:, 0, 0, 0].tolist() == [0, 1]
