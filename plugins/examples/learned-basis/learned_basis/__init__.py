"""Transform blocks by a basis along depth that is learned from the stack, and by cosines along y and x."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from stackbound import hookimpl
from stackbound.stages import Options, Plan, Stage, Transform

UNIT = 2**14
"""What 1 is in the whole numbers of a basis."""


class LearnedBasisOptions(Options):
    """No options."""


class LearnedBasis(Transform):
    """Eigenvectors of the covariance along depth, cosines along y and x."""

    name = "learned-basis"
    Options = LearnedBasisOptions

    def fit(self, sample: NDArray[np.float32], block: tuple[int, ...]) -> Plan:
        """Return the basis along depth, learned from blocks of pixels, as whole numbers that JSON can hold."""
        depth = block[0]
        if depth == 1:
            return {}
        columns = np.moveaxis(sample, 1, 0).reshape(depth, -1).astype(np.float64)
        covariance = columns @ columns.T / max(columns.shape[1], 1)
        # A little of the identity keeps the basis whole where a sample is flat.
        _, vectors = np.linalg.eigh(covariance + np.eye(depth) * 1e-9 * max(np.trace(covariance), 1.0))
        rows = vectors.T[::-1]
        # The sign of an eigenvector is free; fixed here, so that the same stack gives the same bytes.
        largest = np.abs(rows).argmax(axis=1)
        rows *= np.sign(rows[np.arange(depth), largest])[:, None]
        return {"rows": np.rint(rows * UNIT).astype(int).tolist()}

    def basis(self, axis: int, length: int, fitted: Plan) -> str | NDArray[np.int64]:
        """Return the learned basis along depth, the cosine basis along y and x."""
        rows = fitted.get("rows")
        if axis == 0 and rows is not None and len(rows) == length:
            return np.array(rows, np.int64)
        return "dct"

    def forward(self, blocks: NDArray[np.float32], fitted: Plan) -> NDArray[np.float32]:
        """Return the coefficients of blocks of the shape (blocks, bz, by, bx)."""
        result: NDArray[np.float32] = blocks
        for axis in range(3):
            basis = self.basis(axis, blocks.shape[axis + 1], fitted)
            rows = cosines(blocks.shape[axis + 1]) if isinstance(basis, str) else basis / UNIT
            result = np.moveaxis(np.tensordot(result, rows.astype(np.float32), (axis + 1, 1)), -1, axis + 1)
        return np.array(result, np.float32)


def cosines(length: int) -> NDArray[np.float64]:
    """Return the orthonormal cosine basis of type II, one function a row."""
    u, x = np.indices((length, length))
    scale = np.where(u == 0, np.sqrt(1 / length), np.sqrt(2 / length))
    return np.asarray(scale * np.cos((2 * x + 1) * u * np.pi / (2 * length)))


@hookimpl
def stackbound_stages() -> list[type[Stage]]:
    """Return the stages of this plugin."""
    return [LearnedBasis]
