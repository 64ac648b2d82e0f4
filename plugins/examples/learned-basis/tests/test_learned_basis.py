"""The transform keeps its contract, and learns what there is to learn."""

import numpy as np
from learned_basis import UNIT, LearnedBasis
from stackbound.testing import assert_conforms


def test_the_contract_is_kept():
    """The conformance suite of stackbound finds nothing."""
    assert_conforms(LearnedBasis)


def test_the_basis_is_orthonormal():
    """The rows of the learned basis are orthonormal to within the rounding of its whole numbers."""
    sample = np.random.default_rng(1).normal(0, 9, (200, 4, 8, 8)).astype(np.float32)
    rows = LearnedBasis().basis(0, 4, LearnedBasis().fit(sample, (4, 8, 8))) / UNIT

    assert np.abs(rows @ rows.T - np.eye(4)).max() < 1e-3


def test_alternating_planes_become_two_coefficients():
    """Planes that alternate between two pictures are held by two of the four depth coefficients."""
    rng = np.random.default_rng(2)
    even, odd = rng.normal(0, 50, (2, 100, 1, 8, 8))
    blocks = np.concatenate([even, odd, even, odd], axis=1).astype(np.float32)
    stage = LearnedBasis()
    energy = (stage.forward(blocks, stage.fit(blocks, (4, 8, 8))) ** 2).sum(axis=(0, 2, 3))

    assert np.sort(energy)[:2].sum() < 1e-4 * energy.sum()
