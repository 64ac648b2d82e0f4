"""Transform blocks by sums and differences of neighbours (Haar, 1910).

The way there is ours, in floats; the way back is a matrix of whole numbers per axis, which every decoder applies, so a
store opens without this plugin.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stackbound import hookimpl
from stackbound.stages import Options, Plan, Stage, Transform


class MyStageOptions(Options):
    """What a configuration may say under [transform] beside the name: nothing."""


class MyStage(Transform):
    """The orthonormal Haar transform."""

    name = "my-stage"
    Options = MyStageOptions

    def basis(self, axis: int, length: int, fitted: Plan) -> NDArray[np.int64]:
        """Return the basis of one axis: row u is basis function u times 2**14, in whole numbers."""
        return np.rint(haar(length) * 2**14).astype(np.int64)

    def forward(self, blocks: NDArray[np.float32], fitted: Plan) -> NDArray[np.float32]:
        """Return the coefficients of blocks of the shape (blocks, bz, by, bx), which are read-only."""
        result = blocks
        for axis in (1, 2, 3):
            rows = haar(blocks.shape[axis]).astype(np.float32)
            result = np.moveaxis(np.tensordot(result, rows, (axis, 1)), -1, axis)
        return np.ascontiguousarray(result, np.float32) if result is not blocks else blocks.copy()


def haar(length: int) -> NDArray[np.float64]:
    """Return the orthonormal Haar basis of a length that is a power of two, one function a row."""
    if length == 1:
        return np.ones((1, 1))
    coarse = np.kron(haar(length // 2), [1.0, 1.0])
    fine = np.kron(np.eye(length // 2), [1.0, -1.0])
    return np.asarray(np.vstack([coarse, fine]) / np.sqrt(2))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [MyStage]
